"""How exact is a second derivative from function values, does its bound hold, and what does it cost?

Two parts. The 132 functions of one number of `benchmarks.corpus`, counted as in `benchmarks.estimator`. Then the full
Hessians of `benchmarks.hessian_corpus`, entry by entry; there an error is relative to the entry, or where the entry is
zero to max|f| / (size of x_i · size of x_j), with max|f| over the values asked for.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import mpmath
import numpy as np

import gradcheck
from benchmarks import estimator
from benchmarks.estimator import RESOLVED, WORST_SHOWN, Goals, measure, report
from benchmarks.figures import Figure, aligned, median, side_by_side
from benchmarks.hessian_corpus import HESSIAN_CASES, HessianCase, exact_hessian

QUESTION = "How exact is a second derivative from function values, and does its bound hold?"
SECOND = Goals(order=2, error=1e-10, evaluations=None, of_low_degree=12.0)
#: Points of each model of several variables at most: one gives up to 55 entries.
HESSIAN_POINTS = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Entry:
    """What was said about one entry (i <= j) of one Hessian."""

    case: HessianCase
    point: int
    place: tuple[int, int]
    truth: float
    value: float
    bound: float
    error: float
    relative: float

    @property
    def held(self) -> bool:
        """Whether the error lies within the bound; NaN never does."""
        return self.bound == math.inf or self.error <= self.bound

    @property
    def miss(self) -> float:
        """error/bound; 0 where nothing was wrong, infinite where a NaN got a finite bound."""
        if self.error == 0 or self.bound == math.inf:
            return 0.0
        return self.error / self.bound if self.bound > 0 and not math.isnan(self.error) else math.inf


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Hessian:
    """All entries of one Hessian, and what they took."""

    case: HessianCase
    entries: tuple[Entry, ...]
    calls: int
    reported: int = 0
    failure: str = ""


@dataclass(slots=True, eq=False)
class Watched:
    """A model that counts its calls and remembers its largest finite magnitude."""

    function: Callable[[Any], float]
    calls: int = 0
    largest: float = field(default=0.0)

    def __call__(self, x: Any) -> float:
        self.calls += 1
        value = self.function(x)
        if math.isfinite(value):
            self.largest = max(self.largest, abs(value))
        return value


def measure_hessians(
    estimate: Callable[..., Any], cases: Sequence[HessianCase], *, points: int, seed: int = 0
) -> list[Hessian]:
    """`estimate`, which gives full Hessians, on every case at `points` points each."""
    return [_hessian(estimate, case, number, x) for case in cases for number, x in enumerate(case.points(points, seed))]


def _hessian(estimate: Callable[..., Any], case: HessianCase, number: int, x: Any) -> Hessian:
    model = Watched(case.f)
    try:
        answer = estimate(model, at=x)
    except Exception as fault:  # whatever it is, it counts against the estimator and must not end the measurement
        failure = f"{type(fault).__name__}: {fault}"
        return Hessian(case=case, entries=(), calls=model.calls, failure=failure)
    exact = exact_hessian(case, x)
    size = np.where(x != 0, np.abs(x), 1.0)
    places = [(i, j) for i in range(x.size) for j in range(i, x.size)]
    entries = tuple(_entry(case, number, place, answer, exact[place], model.largest, size) for place in places)
    return Hessian(case=case, entries=entries, calls=model.calls, reported=int(answer.evaluations))


def _entry(
    case: HessianCase, number: int, place: tuple[int, int], answer: Any, exact: Any, largest: float, size: Any
) -> Entry:
    i, j = place
    value, bound = float(answer.value[i, j]), float(answer.bound[i, j])
    error = abs(mpmath.mpf(value) - exact) if math.isfinite(value) else mpmath.mpf("nan")
    scale = abs(exact) or largest / (size[i] * size[j])
    settled = math.isfinite(value) and error <= RESOLVED * abs(exact)
    return Entry(
        case=case,
        point=number,
        place=place,
        truth=float(exact),
        value=value,
        bound=bound,
        error=0.0 if settled else float(error),
        relative=0.0 if settled else float(error / scale) if math.isfinite(value) and scale else math.inf,
    )


def hessian_figures(hessians: Sequence[Hessian]) -> list[Figure]:
    """What the Hessians come to, each figure with its goal."""
    entries = [entry for hessian in hessians for entry in hessian.entries]
    mixed = [entry for entry in entries if entry.place[0] != entry.place[1]]
    held = 100.0 * sum(entry.held for entry in entries) / len(entries) if entries else math.nan
    ratios = [entry.bound / entry.error for entry in entries if entry.error > 0]
    zeros = [entry for entry in mixed if entry.truth == 0]
    costs = [hessian.calls / hessian.case.size**2 for hessian in hessians if not hessian.failure]
    return [
        Figure(name="entries held, %", value=held, goal=99.8, at_least=True, form=".2f"),
        Figure(name="worst miss / bound", value=max((entry.miss for entry in entries), default=math.nan), goal=3.0),
        Figure(name="median relative error", value=median(e.relative for e in entries), goal=1e-10, form=".1e"),
        Figure(name="  of mixed entries", value=median(e.relative for e in mixed if e.truth), goal=1e-10, form=".1e"),
        Figure(name="median bound / error", value=median(ratios), goal=15.0),
        Figure(name="median bound / value", value=median(e.bound / abs(e.truth) for e in entries if e.truth)),
        Figure(name="evaluations per entry of n²", value=median(costs)),
        Figure(name="infinite bounds", value=sum(entry.bound == math.inf for entry in entries)),
        Figure(name="zero mixed entries", value=len(zeros), form=".0f"),
        Figure(name="  of them exactly 0", value=sum(entry.value == 0 for entry in zeros), form=".0f"),
        Figure(name="exceptions", value=sum(bool(hessian.failure) for hessian in hessians), goal=0.0),
        Figure(name="miscounted evaluations", value=sum(h.calls != h.reported for h in hessians), goal=0.0),
        Figure(name="entries", value=len(entries), form=".0f"),
    ]


def hessian_report(hessians: Sequence[Hessian]) -> str:
    """A line a case, the misses, the closest, and the figures."""
    by_case: dict[str, list[Hessian]] = {}
    for hessian in hessians:
        by_case.setdefault(hessian.case.name, []).append(hessian)
    entries = sorted((entry for hessian in hessians for entry in hessian.entries), key=lambda entry: -entry.miss)
    missed = [entry for entry in entries if not entry.held]
    failures = "\n".join(f"{hessian.case.name}: {hessian.failure}" for hessian in hessians if hessian.failure)
    parts = {
        "all": hessians,
        "tuned": [hessian for hessian in hessians if not hessian.case.kept_aside],
        "kept aside": [hessian for hessian in hessians if hessian.case.kept_aside],
    }
    return "\n\n".join(
        (
            aligned(
                ("model", "n", "entries", "held", "rel. error", "worst miss", "bound/error", "calls/n²"),
                [_case_line(part) for part in by_case.values()],
            ),
            f"Entries whose bounds did not hold:\n{_listing(missed) if missed else 'none'}",
            f"Exceptions:\n{failures or 'none'}",
            f"The {WORST_SHOWN} largest errors in units of their bound:\n{_listing(entries[:WORST_SHOWN])}",
            side_by_side({name: hessian_figures(part) for name, part in parts.items()}),
        )
    )


def _case_line(part: Sequence[Hessian]) -> tuple[str, ...]:
    case = part[0].case
    entries = [entry for hessian in part for entry in hessian.entries]
    shown = {figure.name: figure.shown.removesuffix(" !") for figure in hessian_figures(part)}
    return (
        case.name + (" *" if case.kept_aside else ""),
        str(case.size),
        str(len(entries)),
        f"{sum(entry.held for entry in entries)}/{len(entries)}",
        shown["median relative error"],
        shown["worst miss / bound"],
        shown["median bound / error"],
        shown["evaluations per entry of n²"],
    )


def _listing(entries: Sequence[Entry]) -> str:
    heading = ("model", "point", "entry", "derivative", "value", "error", "bound", "error/bound")
    rows = [
        (
            entry.case.name + (" *" if entry.case.kept_aside else ""),
            str(entry.point),
            f"{entry.place[0]}, {entry.place[1]}",
            f"{entry.truth:.6g}",
            f"{entry.value:.6g}",
            f"{entry.error:.2e}",
            f"{entry.bound:.2e}",
            f"{entry.miss:.2g}",
        )
        for entry in entries
    ]
    return aligned(heading, rows)


def run(points: int, seed: int = 0) -> str:
    """The report on ``gradcheck.estimate(..., order=2)``: one variable, then several."""
    estimate = partial(gradcheck.estimate, order=2)
    single = report(measure(estimate, estimator.CASES, points=points, seed=seed, order=2), SECOND)
    several = hessian_report(measure_hessians(estimate, HESSIAN_CASES, points=min(points, HESSIAN_POINTS), seed=seed))
    return f"One variable\n\n{single}\n\nSeveral variables\n\n{several}"
