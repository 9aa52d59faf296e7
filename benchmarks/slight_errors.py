"""Are right claims left alone, and errors of 1e-7 seen wherever the values show them?

Measured on `benchmarks.corpus` (one variable) and `benchmarks.coupled_corpus` (ten). What counts how:

- A right claim is the derivative to the last digit, then off by 1e-12 of itself, as honest code may be. Every entry
  counts on its own.
- A wrong claim has one entry off by 1e-7 of itself. It is visible where the bound that the report gives is below 0.3 of
  that error: there it must be refuted. Elsewhere it must not be confirmed, but where the tolerance itself, by its share
  for rounding, is larger than the error: those are told apart, and so are visible ones that this share excuses.
- The cancelling polynomial is (x - 1)^7 multiplied out, near 1, with the derivative multiplied out as well: claims that
  round as honestly as the values do.
- Evaluations are counted in the model itself.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

import gradcheck
from benchmarks.corpus import CASES
from benchmarks.coupled_corpus import N, all_points
from benchmarks.figures import Figure, aligned, median, percent, side_by_side
from benchmarks.reference import slope
from gradcheck import Verdict

QUESTION = "Are right claims left alone, and errors of 1e-7 seen?"
HONEST, WRONG = 1e-12, 1e-7
VISIBLE = 0.3
LISTED_MOST = 40


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Entry:
    """One entry of a claim, and what was said about it.

    Attributes
    ----------
    name : str
    x : float or ndarray
        The point.
    truth, claim, bound : float
    verdict : str
        Empty if the check raised.
    reason : str
    evaluations : float
        Evaluations of the whole check, a variable.
    wrong : bool
        Whether the claim is off by `WRONG`.
    variables : int
    """

    name: str
    x: object
    truth: float
    claim: float
    bound: float
    verdict: str
    reason: str = ""
    evaluations: float = math.nan
    wrong: bool = False
    variables: int = 1

    @property
    def visible(self) -> bool:
        """Whether the bound is small enough to see the error."""
        return self.wrong and self.bound < VISIBLE * WRONG * abs(self.truth)

    @property
    def by_rounding(self) -> bool:
        """Whether the tolerance for rounding alone confirmed it."""
        return "rounding" in self.reason


class _Counted:
    def __init__(self, function: object) -> None:
        self.function, self.calls = function, 0

    def __call__(self, x: object) -> float:
        self.calls += 1
        return self.function(x)  # type: ignore[operator]


def scalar_entries(points: int, seed: int, error: float) -> list[Entry]:
    """Entries of one variable: every function of the corpus at random points, the claim off by `error` of itself."""
    found = []
    for case in CASES:
        for x in case.points(points, seed):
            truth = float(slope(case, x))
            if math.isfinite(truth):
                claim = truth * (1 + error * (1 if len(found) % 2 else -1))
                found += _asked(case.name, case.f, x, np.array(truth), np.array(claim), error == WRONG)
    return found


def coupled_entries(points: int, seed: int, error: float) -> list[Entry]:
    """Entries of ten variables; all are off by `error` if that is honest, else one of them."""
    rng = np.random.default_rng(seed)
    found = []
    for model, x in all_points(points, seed):
        truth = model.gradient(x)
        off = np.full(N, error) * rng.choice((-1.0, 1.0), N)
        if error == WRONG:
            off[np.arange(N) != rng.integers(N)] = 0.0
        found += _asked(model.name, model.f, x, truth, truth * (1 + off), error == WRONG)
    return found


def _asked(name: str, f: object, x: object, truth: np.ndarray, claim: np.ndarray, wrong: bool) -> list[Entry]:
    function = _Counted(f)
    try:
        report = gradcheck.check(function, x, gradient=claim, on_refuted="return", on_undecided="pass")
    except Exception as fault:  # whatever it is, it counts against the library and must not end the measurement
        words = f"{type(fault).__name__}: {fault}"
        return [
            Entry(
                name=name,
                x=x,
                truth=float(np.ravel(truth)[0]),
                claim=math.nan,
                bound=math.inf,
                verdict="",
                reason=words,
            )
        ]
    each = report.entries
    flat = np.ravel(truth)
    return [
        Entry(
            name=name,
            x=x,
            truth=float(flat[i]),
            claim=float(np.ravel(claim)[i]),
            bound=float(each.bound[i]),
            verdict=str(each.verdict[i]),
            reason=str(each.reason[i]),
            evaluations=function.calls / flat.size,
            wrong=wrong and float(np.ravel(claim)[i]) != float(flat[i]),
            variables=flat.size,
        )
        for i in range(flat.size)
    ]


def cancelling_entries(count: int, seed: int) -> list[Entry]:
    """(x - 1)^7 multiplied out, at random distances from 1, with its derivative multiplied out."""
    powers = (1.0, -7.0, 21.0, -35.0, 35.0, -21.0, 7.0, -1.0)
    slopes = tuple((7 - i) * c for i, c in enumerate(powers[:-1]))
    rng = np.random.default_rng(seed)
    found = []
    for _ in range(count):
        x = 1 + float(rng.choice((-1, 1))) * 10.0 ** rng.uniform(-4, 0)
        claim = float(np.polyval(slopes, x))
        found += _asked(
            "cancelling polynomial",
            lambda t: float(np.polyval(powers, t)),
            x,
            np.array(7 * (x - 1) ** 6),
            np.array(claim),
            False,
        )
    return found


def right_figures(entries: Sequence[Entry]) -> list[Figure]:
    """Of right claims."""
    ten = [entry.evaluations for entry in entries if entry.variables == N]
    one = [entry.evaluations for entry in entries if entry.variables == 1]
    return [
        Figure(name="right entries", value=len(entries), form=".0f"),
        Figure(name="accused", value=sum(e.verdict == Verdict.REFUTED for e in entries), goal=0.0),
        Figure(
            name="confirmed, %",
            value=percent([e.verdict == Verdict.CONFIRMED for e in entries]),
            goal=99.0,
            at_least=True,
            form=".2f",
        ),
        Figure(
            name="  by the share of rounding, %",
            value=percent([e.by_rounding and e.verdict == Verdict.CONFIRMED for e in entries]),
            form=".2f",
        ),
        Figure(name="evaluations a variable of ten, median", value=median(ten), goal=6.0),
        Figure(name="  mean", value=float(np.mean(ten)) if ten else math.nan),
        Figure(name="evaluations with one variable, median", value=median(one)),
        Figure(name="exceptions", value=sum(not e.verdict for e in entries), goal=0.0),
    ]


def wrong_figures(entries: Sequence[Entry]) -> list[Figure]:
    """Of entries that are off by 1e-7, and of the right ones beside them."""
    wrong = [entry for entry in entries if entry.wrong]
    beside = [entry for entry in entries if not entry.wrong]
    seen, unseen = ([e for e in wrong if e.visible == mark] for mark in (True, False))
    return [
        Figure(name="wrong entries", value=len(wrong), form=".0f"),
        Figure(name="  visible", value=len(seen), form=".0f"),
        Figure(
            name="  of these refuted, %",
            value=percent([e.verdict == Verdict.REFUTED for e in seen]),
            goal=99.9,
            at_least=True,
            form=".2f",
        ),
        Figure(name="  left undecided for what rounding may do", value=sum("honest code" in e.reason for e in seen)),
        Figure(name="  not visible", value=len(unseen), form=".0f"),
        Figure(
            name="  of these confirmed, not by rounding",
            value=sum(e.verdict == Verdict.CONFIRMED and not e.by_rounding for e in unseen),
            goal=0.0,
        ),
        Figure(
            name="  of these confirmed within rounding",
            value=sum(e.verdict == Verdict.CONFIRMED and e.by_rounding for e in unseen),
        ),
        Figure(name="right entries beside", value=len(beside), form=".0f"),
        Figure(name="  of these accused", value=sum(e.verdict == Verdict.REFUTED for e in beside), goal=0.0),
        Figure(name="exceptions", value=sum(not e.verdict for e in entries), goal=0.0),
    ]


def listing(entries: Sequence[Entry]) -> str:
    """Entries, each in a line."""
    if not entries:
        return "none"
    rows = [
        (e.name, f"{e.x!r:.40}", f"{e.truth:.6g}", f"{e.bound:.1e}", e.verdict or "-", e.reason[:60])
        for e in entries[:LISTED_MOST]
    ]
    rest = f"\n... and {len(entries) - LISTED_MOST} more" if len(entries) > LISTED_MOST else ""
    return aligned(("entry of", "x", "derivative", "bound", "verdict", "reason"), rows) + rest


def run(points: int, seed: int = 0) -> str:
    """The report on `gradcheck.check`: two points each count as one for the models of ten variables."""
    right = scalar_entries(points, seed, HONEST) + coupled_entries(max(1, points // 2), seed, HONEST)
    wrong = scalar_entries(points, seed, WRONG) + coupled_entries(max(1, points // 2), seed, WRONG)
    cancelling = cancelling_entries(10 * points, seed)
    short = [e for e in wrong if e.visible and e.verdict != Verdict.REFUTED]
    believed = [e for e in wrong if e.wrong and e.verdict == Verdict.CONFIRMED and not e.by_rounding]
    ten, one = ([e for e in right if (e.variables == N) == mark] for mark in (True, False))
    return "\n\n".join(
        (
            f"Right entries that were not confirmed:\n{listing([e for e in right if e.verdict != Verdict.CONFIRMED])}",
            f"Visible errors that were not refuted, and errors that were confirmed:\n{listing(short + believed)}",
            "Right claims, off by 1e-12:\n"
            + side_by_side({name: right_figures(part) for name, part in (("all", right), ("one", one), ("ten", ten))}),
            "Claims with one entry off by 1e-7:\n" + side_by_side({"all": wrong_figures(wrong)}),
            "A cancelling polynomial with its honestly rounding derivative:\n"
            + side_by_side({"all": right_figures(cancelling)[:4]}),
        )
    )
