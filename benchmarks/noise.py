"""How well is the noise of a model's values known: its level, and its kind?

Measured on `benchmarks.noise_corpus`. What counts how:

- A level is right within a factor of 2, or of 4, of the true one; NaN never is. Only levels of at least 1e-15 of the
  function's size are counted: below it is the last place of the values.
- A kind is counted where there is something to be seen: not where the error is exactly zero around the point.
- Evaluations are counted in the function itself.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

import gradcheck
from benchmarks.corpus import CASES
from benchmarks.figures import Figure, aligned, side_by_side
from benchmarks.noise_corpus import NoiseCase, corpus
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.noise import noise
from gradcheck.witnesses.steps import room_along
from tests.gates import gate_of

QUESTION = "How well is the noise of the values known, its level and its kind?"
LEAST_LEVEL = 1e-15
#: Seeds that no threshold was chosen on are the ones from here on.
FIRST_SEED = 1000
#: Points a function that make one more corpus.
POINTS_A_SEED = 5
#: The audit takes hundreds of evaluations a case; it sees every so many-th.
AUDITED = 5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Heard:
    """What one method said of one case; `kind` is empty if it says none."""

    case: NoiseCase
    level: float
    kind: str
    calls: int

    @property
    def counted(self) -> bool:
        """Whether the level is large enough to be told from the last place."""
        return self.case.level() >= LEAST_LEVEL * self.case.magnitude

    @property
    def factor(self) -> float:
        """How far off the level is; infinite if there is none."""
        if not (math.isfinite(self.level) and self.level > 0):
            return math.inf
        return math.exp(abs(math.log(self.level / self.case.level())))

    @property
    def visible(self) -> bool:
        """Whether there is a kind to be seen and one was told."""
        return self.case.level() > 0 and self.kind != ""

    @property
    def right(self) -> bool:
        return self.kind in self.case.kinds


Method = Callable[[Callable[[Any], float], float], tuple[float, str]]


def by_inquiry(function: Callable[[Any], float], x: float) -> tuple[float, str]:
    """The inquiry by itself."""
    point, along = np.array([x]), np.array([0])
    room = room_along(point, along, domain_of(point))
    reading = conduct_one(noise(point, along, room, np.array([function(x)])), gate_of(lambda v: function(float(v[0]))))
    return float(reading.level[0, 0]), str(reading.kind[0][0])


def by_estimate(function: Callable[[Any], float], x: float) -> tuple[float, str]:
    """What `estimate` tells on the way."""
    answer = gradcheck.estimate(function, at=x)
    return float(answer.noise[0]), str(getattr(answer, "noise_kind", ("",))[0])


def by_scan(function: Callable[[Any], float], x: float) -> tuple[float, str]:
    """What `scan` tells."""
    curve = gradcheck.scan(function, at=x)
    return curve.noise, str(getattr(curve, "noise_kind", ""))


def by_audit(function: Callable[[Any], float], x: float) -> tuple[float, str]:
    """The noise that the audit's steps rest on."""
    steps = gradcheck.audit(lambda v: function(float(v[0])), at=[x]).steps
    return (steps[0].noise, str(getattr(steps[0], "noise_kind", ""))) if steps else (math.nan, "")


METHODS: dict[str, Method] = {"inquiry": by_inquiry, "estimate": by_estimate, "scan": by_scan, "audit": by_audit}


def measure(method: Method, cases: Sequence[NoiseCase]) -> list[Heard]:
    """What one method says of all cases."""
    found = []
    for case in cases:
        function, calls = case.make(), [0]

        def counted(x: Any, function: Any = function, calls: list[int] = calls) -> float:
            calls[0] += 1
            return float(function(float(x)))

        level, kind = method(counted, case.x)
        found.append(Heard(case=case, level=level, kind=kind, calls=calls[0]))
    return found


def figures(heard: Sequence[Heard]) -> list[Figure]:
    """What the cases come to, each figure with its goal."""
    levels = [one for one in heard if one.counted]
    kinds = [one for one in heard if one.visible]
    return [
        Figure(name="level within a factor 2, %", value=share(h.factor <= 2 for h in levels), goal=90, at_least=True),
        Figure(name="level within a factor 4, %", value=share(h.factor <= 4 for h in levels), goal=99, at_least=True),
        Figure(name="kind right, %", value=share(h.right for h in kinds), goal=95 if kinds else None, at_least=True),
        Figure(name="median evaluations", value=float(np.median([h.calls for h in heard] or [math.nan]))),
        Figure(name="most evaluations", value=float(max([h.calls for h in heard], default=math.nan))),
        Figure(name="cases", value=len(heard), form=".0f"),
    ]


def share(answers: Any) -> float:
    """Per cent of true ones; NaN of none."""
    found = list(answers)
    return 100.0 * sum(found) / len(found) if found else math.nan


def by_family(heard: Sequence[Heard]) -> str:
    """One line a family."""
    rows = []
    for family in dict.fromkeys(one.case.family for one in heard):
        mine = [one for one in heard if one.case.family == family]
        shown = {figure.name: figure.shown.removesuffix(" !") for figure in figures(mine)}
        rows.append((family, *shown.values()))
    return aligned(("family", *(figure.name for figure in figures(heard))), rows)


def misses(heard: Sequence[Heard]) -> str:
    """Every level that is off by more than 2, and every wrong kind; an asterisk marks what was kept aside."""
    rows = [
        (
            one.case.family + (" *" if one.case.kept_aside else ""),
            one.case.background,
            f"{one.case.x:.6g}",
            f"{one.case.level():.2e}",
            f"{one.level:.2e}",
            one.kind,
            str(one.calls),
        )
        for one in heard
        if (one.counted and one.factor > 2) or (one.visible and not one.right)
    ]
    heading = ("family", "background", "x", "true level", "level", "kind", "evaluations")
    return aligned(heading, rows) if rows else "none"


def smooth_functions(points: int, seed: int) -> str:
    """What the inquiry calls the noise of the smooth functions of `benchmarks.corpus`: it should be rounding."""
    each = max(1, points // POINTS_A_SEED)
    told = [(case.name, by_inquiry(case.f, x)[1]) for case in CASES for x in case.points(each, seed)]
    accused = sorted({(name, kind) for name, kind in told if kind != "rounding"})
    right = share(kind == "rounding" for _, kind in told)
    figure = Figure(name="rounding, %", value=right, goal=97, at_least=True)
    names = "; ".join(f"{name} ({kind})" for name, kind in accused)
    return (
        f"Smooth functions whose noise is called rounding: {figure.shown} % of {len(told)} (goal {figure.goal_shown})\n"
        f"Others, some of which cancel or carry a faint fast wave: {names or 'none'}"
    )


def run(points: int, seed: int = 0) -> str:
    """The report on the inquiry, and on the verbs that tell a noise."""
    count = max(1, points // POINTS_A_SEED)
    cases = [case for k in range(count) for case in corpus(FIRST_SEED + 100 * seed + k)]
    heard = measure(by_inquiry, cases)
    parts = [
        by_family(heard),
        smooth_functions(points, seed),
        f"Levels off by more than 2 and wrong kinds of the inquiry:\n{misses(heard)}",
        side_by_side(
            {
                "inquiry": figures(heard),
                "tuned": figures([one for one in heard if not one.case.kept_aside]),
                "kept aside": figures([one for one in heard if one.case.kept_aside]),
                "estimate": figures(measure(by_estimate, cases)),
                "scan": figures(measure(by_scan, cases)),
                f"audit (1 of {AUDITED})": figures(measure(by_audit, cases[::AUDITED])),
            }
        ),
    ]
    return "\n\n".join(parts)
