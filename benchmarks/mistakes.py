"""Is every planted mistake refuted in the right entries, and is the right mistake named?

Measured on `tests.quality.planted_corpus`, which was written before the rules. What counts how:

- Refuted: the verdict on the whole claim.
- Right entries: refuted are those whose error is visible, and besides them only such as are wrong by less. Not counted
  where the wrong entries depend on the order of calls.
- Right mistake: for each planted mistake, the diagnoses with its code name entries that it sits in, none outside, and
  every entry in which it is visible. For a mistake that depends on the order of calls, the code alone.
- Accused: an honest claim with a refuted entry or with a diagnosis.

Figures of the models that were kept aside while the rules were written stand in columns of their own.
"""

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

import gradcheck
from benchmarks.figures import aligned, percent
from gradcheck import CheckReport, Verdict
from tests.quality.planted_corpus import Claim, honest, planted

QUESTION = "Is the right mistake named, in the right entries?"
#: Points of each model out of those asked for: a claim of each of 37 kinds takes its time.
POINTS_MOST = 6
LISTED_MOST = 40
GOALS = {"refuted": 100.0, "entries": 99.0, "mistake": 95.0}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Told:
    """What `check` said about one claim; `report` is None if it raised."""

    claim: Claim
    report: CheckReport | None = None
    failure: str = ""

    @property
    def refuted(self) -> bool:
        return self.report is not None and self.report.verdict == Verdict.REFUTED

    def marks(self, verdict: Verdict) -> list[np.ndarray]:
        """Entries with this verdict at each point, in the shape of the claim."""
        found = [v == verdict for v in self.report.entries.verdict] if self.report is not None else []
        return self._at_points(np.array(found, bool))

    def _at_points(self, flat: np.ndarray) -> list[np.ndarray]:
        parts, first = [], 0
        for right in self.claim.right:
            part = flat[first : first + right.size]
            parts.append(part.reshape(right.shape) if part.size else np.zeros(right.shape, bool))
            first += right.size
        return parts

    @property
    def entries_right(self) -> bool:
        if not self.claim.exact:
            return self.refuted
        return all(
            refuted[self.claim.wrong(k)].all() and not refuted[~(self.claim.wrong(k) | self.claim.hidden(k))].any()
            for k, refuted in enumerate(self.marks(Verdict.REFUTED))
        )

    @property
    def named(self) -> list[str]:
        return [] if self.report is None else [str(d.code) for d in self.report.diagnoses]

    @property
    def mistake_right(self) -> bool:
        if not self.claim.exact:
            return bool(self.claim.parts) and self.claim.parts[0][0] in self.named
        return all(self._part_right(code, masks) for code, masks in self.claim.parts if self._visible(masks))

    def _visible(self, masks: tuple[np.ndarray, ...]) -> bool:
        return any((mask & self.claim.wrong(k)).any() for k, mask in enumerate(masks))

    def _part_right(self, code: str, masks: tuple[np.ndarray, ...]) -> bool:
        if self.report is None:
            return False
        names = {name for d in self.report.diagnoses if d.code == code for name in d.entries}
        named = self._at_points(np.array([name in names for name in self.report.entries.name]))
        return all(
            not (named[k] & ~mask).any() and named[k][mask & self.claim.wrong(k)].all() for k, mask in enumerate(masks)
        )

    @property
    def accused(self) -> bool:
        return bool(self.refuted or self.named)


def ask(claims: Sequence[Claim]) -> list[Told]:
    """What `gradcheck.check` says about each claim."""
    return [_asked(claim) for claim in claims]


def _asked(claim: Claim) -> Told:
    at = claim.at[0] if len(claim.at) == 1 else gradcheck.points(*claim.at)
    options = {claim.form: claim.claim, "on_refuted": "return", "on_undecided": "pass"}
    try:
        return Told(claim=claim, report=gradcheck.check(claim.function, at, **options))
    except Exception as fault:  # whatever it is, it counts against the library and must not end the measurement
        return Told(claim=claim, failure=f"{type(fault).__name__}: {fault}")


def by_kind(told: Sequence[Told]) -> dict[str, list[Told]]:
    """Parts of what was told, by the kind of the claim."""
    parts: dict[str, list[Told]] = {}
    for each in told:
        parts.setdefault(each.claim.kind, []).append(each)
    return parts


def kinds_table(told: Sequence[Told]) -> str:
    """A row for each kind: how many, refuted, right entries, right mistake; then the same for the models kept aside."""
    rows = [_row(kind, part) for kind, part in by_kind(told).items()]
    rows.append(_row("all", list(told)))
    heading = ("kind", "claims", "refuted %", "entries %", "mistake %", "aside", "refuted %", "entries %", "mistake %")
    return aligned(heading, rows)


def _row(kind: str, part: Sequence[Told]) -> tuple[str, ...]:
    aside = [each for each in part if each.claim.aside]
    return (kind, *_cells([each for each in part if not each.claim.aside]), *_cells(aside))


def _cells(part: Sequence[Told]) -> tuple[str, ...]:
    return (
        str(len(part)),
        _share([e.refuted for e in part], GOALS["refuted"]),
        _share([e.entries_right for e in part], GOALS["entries"]),
        _share([e.mistake_right for e in part], GOALS["mistake"]),
    )


def _share(marks: list[bool], goal: float) -> str:
    if not marks:
        return "-"
    found = percent(marks)
    return f"{found:.1f}" + ("" if found >= goal else " !")


def confusions(told: Sequence[Told]) -> str:
    """Planted against named, where the mistake was not named rightly."""
    counts = Counter(
        (each.claim.kind, "+".join(sorted(set(each.named))) or each.failure[:40] or "nothing")
        for each in told
        if not each.mistake_right
    )
    rows = [(kind, named, str(often)) for (kind, named), often in sorted(counts.items())]
    return aligned(("planted", "named", "claims"), rows) if rows else "none"


def shortcomings(told: Sequence[Told]) -> str:
    """Claims that did not end as they should, each in a line."""
    rows = [(f"{e.claim.name}, {e.claim.kind}", _complaint(e)[:90]) for e in told if _complaint(e)]
    rest = f"\n... and {len(rows) - LISTED_MOST} more" if len(rows) > LISTED_MOST else ""
    return aligned(("claim", "what"), rows[:LISTED_MOST]) + rest if rows else "none"


def _complaint(each: Told) -> str:
    if each.failure:
        return each.failure
    if not each.refuted:
        return f"not refuted: {each.report.verdict if each.report else '-'}"
    if not each.entries_right:
        return "other entries refuted than those that are wrong"
    if not each.mistake_right:
        return f"{', '.join(code for code, _ in each.claim.parts)} planted, told: {', '.join(each.named)}"
    return ""


def honest_table(told: Sequence[Told]) -> str:
    """Right claims of each kind: how many were accused, how many confirmed."""
    rows = []
    for kind, part in by_kind(told).items():
        accused = sum(each.accused for each in part)
        confirmed = [each.report is not None and each.report.verdict == Verdict.CONFIRMED for each in part]
        failures = sum(bool(each.failure) for each in part)
        rows.append((kind, str(len(part)), f"{accused}{' !' if accused else ''}", f"{percent(confirmed):.1f}"))
        rows[-1] = (*rows[-1], f"{failures}{' !' if failures else ''}")
    return aligned(("honest", "claims", "accused", "confirmed %", "exceptions"), rows)


def run(points: int, seed: int = 0) -> str:
    """The report on likely mistakes."""
    points = min(points, POINTS_MOST)
    told = ask(planted(points, seed))
    return "\n\n".join(
        (
            f"{points} points a model; goals: refuted 100 %, right entries 99 %, right mistake 95 %, accused 0",
            kinds_table(told),
            "Planted against named, where that differs; models not kept aside:\n"
            + confusions([each for each in told if not each.claim.aside]),
            "Planted against named, where that differs; models kept aside:\n"
            + confusions([each for each in told if each.claim.aside]),
            "Claims that did not end as they should (models not kept aside):\n"
            + shortcomings([each for each in told if not each.claim.aside]),
            "Honest claims:\n" + honest_table(ask(honest(points, seed))),
        )
    )
