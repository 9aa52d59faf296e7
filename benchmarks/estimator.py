"""How exact is a derivative from function values, does its bound hold, and what does it cost?

Measured on `benchmarks.corpus` against `benchmarks.reference`. What counts how:

- An error of 0 (below the 24 digits of the reference) is held by any bound and has no bound/error: the median
  of bound/error runs over errors above 0 only.
- Where the true derivative is 0 a relative error is undefined; it is taken relative to max|f| / max(|x|, 1),
  with max|f| over the values that the estimator asked for.
- An infinite bound holds, claims nothing, and counts as an infinite bound/error; how many there were is told.
  A NaN in value or bound (unless the bound is infinite) and an exception do not hold.
- Evaluations are counted in the function itself, not taken from the estimator; where the two differ it is told.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np

import gradcheck
from benchmarks.corpus import CASES, Case
from benchmarks.figures import Figure, aligned, median, side_by_side
from benchmarks.reference import AGREEMENT, derivative

QUESTION = "How exact is a derivative from function values, and does its bound hold?"
LOW_DEGREE = "linear and quadratic"
WORST_SHOWN = 10
LONGEST_SHOWN = 60
# ten times what two references of different digits may differ by
RESOLVED = 10 * AGREEMENT

Estimator = Callable[..., Any]


@dataclass(frozen=True, slots=True, kw_only=True)
class Goals:
    """What derivatives of one order are to reach; None for what is told without a goal."""

    order: int
    error: float
    evaluations: float | None
    of_low_degree: float | None


FIRST = Goals(order=1, error=1e-14, evaluations=32.0, of_low_degree=12.0)


class Counted:
    """A function that counts its calls and remembers its largest finite magnitude."""

    def __init__(self, function: Callable[[float], float]) -> None:
        self.function = function
        self.calls = 0
        self.largest = 0.0

    def __call__(self, x: float) -> float:
        self.calls += 1
        value = self.function(x)
        if math.isfinite(value):
            self.largest = max(self.largest, abs(value))
        return value


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sample:
    """What the estimator said about one function at one point.

    Attributes
    ----------
    value, bound : float
        NaN if the estimator raised.
    truth : float
        The derivative, rounded to a double.
    error : float
        ``|value - derivative|``, the difference taken in many digits.
    magnitude : float
        Largest ``|f|`` among the values asked for.
    calls, reported : int
        Evaluations, counted here and as told by the estimator.
    failure : str
        The estimator's exception; empty if there was none.
    order : int
        Of the derivative.
    """

    case: Case
    x: float
    truth: float
    order: int = 1
    value: float = math.nan
    bound: float = math.nan
    error: float = math.nan
    magnitude: float = 0.0
    calls: int = 0
    reported: int = 0
    failure: str = ""

    @property
    def held(self) -> bool:
        """Whether the error lies within the bound; NaN never does."""
        return self.bound == math.inf or self.error <= self.bound

    @property
    def relative(self) -> float:
        """The error relative to the derivative, or to the function's scale where the derivative is 0."""
        if self.error == 0:
            return 0.0
        scale = abs(self.truth) or self.magnitude / max(abs(self.x), 1.0) ** self.order
        error = math.inf if math.isnan(self.error) else self.error
        return error / scale if scale else math.inf

    @property
    def tightness(self) -> float:
        """bound/error; NaN where there is no error to compare with."""
        return self.bound / self.error if self.error > 0 else math.nan

    @property
    def miss(self) -> float:
        """error/bound; 0 where there is no error, infinite where nothing finite was said."""
        if self.held and (self.error == 0 or self.bound == math.inf):
            return 0.0
        if math.isnan(self.error) or not self.bound > 0:
            return math.inf
        return self.error / self.bound


def measure(estimate: Estimator, cases: Sequence[Case], *, points: int, seed: int = 0, order: int = 1) -> list[Sample]:
    """`estimate`, which gives the derivative of this order, on every case at `points` random points each."""
    return [_sample(estimate, case, x, order) for case in cases for x in case.points(points, seed)]


def _sample(estimate: Estimator, case: Case, x: float, order: int) -> Sample:
    function = Counted(case.f)
    exact = derivative(case, x, order)
    truth = float(exact)
    try:
        answer = estimate(function, at=x)
        value, bound = _number(answer.value), _number(answer.bound)
        reported = int(answer.evaluations)
    except Exception as fault:  # whatever it is, it counts against the estimator and must not end the measurement
        failure = f"{type(fault).__name__}: {fault}"
        return Sample(case=case, x=x, truth=truth, order=order, calls=function.calls, failure=failure)
    return Sample(
        case=case,
        x=x,
        truth=truth,
        order=order,
        value=value,
        bound=bound,
        error=_error(value, exact),
        magnitude=function.largest,
        calls=function.calls,
        reported=reported,
    )


def _error(value: float, exact: Any) -> float:
    """``|value - exact|``; NaN without a finite value, and 0 below what the reference itself resolves."""
    if not math.isfinite(value):
        return math.nan
    error = abs(mpmath.mpf(value) - exact)
    return float(error) if error > RESOLVED * abs(exact) else 0.0


def _number(value: Any) -> float:
    """A result of shape () as a float; another shape is a fault of the estimator."""
    array = np.asarray(value, dtype=float)
    if array.shape != ():
        raise ValueError(f"expected shape () for a model of one number, found {array.shape}")
    return float(array)


def figures(samples: Sequence[Sample], goals: Goals = FIRST) -> list[Figure]:
    """What the samples come to, each figure with its goal."""
    answered = [sample for sample in samples if not sample.failure]
    low_degree = [sample for sample in answered if sample.case.group == LOW_DEGREE]
    held = sum(sample.held for sample in samples)
    share = 100.0 * held / len(samples) if samples else math.nan
    return [
        Figure(name="median relative error", value=median(s.relative for s in answered), goal=goals.error, form=".1e"),
        Figure(name="bounds held, %", value=share, goal=99.8, at_least=True, form=".2f"),
        Figure(name="worst miss / bound", value=max((s.miss for s in samples), default=math.nan), goal=3.0),
        Figure(name="median bound / error", value=median(s.tightness for s in answered), goal=15.0),
        Figure(name="median evaluations", value=median(s.calls for s in answered), goal=goals.evaluations),
        Figure(name=f"  of {LOW_DEGREE}", value=median(s.calls for s in low_degree), goal=goals.of_low_degree),
        Figure(name="most evaluations", value=max((s.calls for s in answered), default=math.nan)),
        Figure(name="exceptions", value=len(samples) - len(answered), goal=0.0),
        Figure(name="infinite bounds", value=sum(s.bound == math.inf for s in answered)),
        Figure(name="miscounted evaluations", value=sum(s.calls != s.reported for s in answered), goal=0.0),
        Figure(name="samples", value=len(samples), form=".0f"),
    ]


def summary(samples: Sequence[Sample], goals: Goals = FIRST) -> str:
    """All figures: of everything, of the part that methods are tuned on, and of the part kept aside."""
    parts = {
        "all": samples,
        "tuned": [sample for sample in samples if not sample.case.kept_aside],
        "kept aside": [sample for sample in samples if sample.case.kept_aside],
    }
    return side_by_side({name: figures(part, goals) for name, part in parts.items()})


def by_function(samples: Sequence[Sample]) -> str:
    """One line a function; an asterisk marks those kept aside."""
    parts: dict[str, list[Sample]] = {}
    for sample in samples:
        parts.setdefault(sample.case.name, []).append(sample)
    heading = ("function", "group", "points", "rel. error", "held", "worst miss", "bound/error", "evaluations")
    return aligned(heading, [_function_line(part) for part in parts.values()])


def _function_line(part: Sequence[Sample]) -> tuple[str, ...]:
    case = part[0].case
    shown = {figure.name: figure.shown.removesuffix(" !") for figure in figures(part)}
    return (
        case.name + (" *" if case.kept_aside else ""),
        case.group,
        shown["samples"],
        shown["median relative error"],
        f"{sum(sample.held for sample in part)}/{len(part)}",
        shown["worst miss / bound"],
        shown["median bound / error"],
        shown["median evaluations"],
    )


def misses(samples: Sequence[Sample]) -> str:
    """Every answer whose bound did not hold, and every exception; worst first."""
    missed = sorted((sample for sample in samples if not sample.held), key=lambda sample: -sample.miss)
    return _listing(missed) if missed else "none"


def widest(samples: Sequence[Sample]) -> str:
    """The answers with the largest bound/error: right, but saying too little."""
    compared = [sample for sample in samples if not math.isnan(sample.tightness)]
    return _listing(sorted(compared, key=lambda sample: -sample.tightness)[:WORST_SHOWN])


def closest(samples: Sequence[Sample]) -> str:
    """The answers whose bounds held or missed by the least margin: the largest error/bound."""
    return _listing(sorted(samples, key=lambda sample: -sample.miss)[:WORST_SHOWN])


def _listing(samples: Sequence[Sample]) -> str:
    heading = ("function", "x", "derivative", "value", "error", "bound", "error/bound", "evaluations")
    rows = [
        (
            sample.case.name + (" *" if sample.case.kept_aside else ""),
            repr(sample.x),
            f"{sample.truth:.6g}",
            " ".join(sample.failure.split())[:LONGEST_SHOWN] or f"{sample.value:.6g}",
            f"{sample.error:.2e}",
            f"{sample.bound:.2e}",
            f"{sample.miss:.2g}",
            str(sample.calls),
        )
        for sample in samples
    ]
    return aligned(heading, rows)


def report(samples: Sequence[Sample], goals: Goals = FIRST) -> str:
    """Everything worth reading about a measurement."""
    miscounts = [sample.reported - sample.calls for sample in samples if not sample.failure]
    farthest = max(miscounts, key=abs, default=0)
    return "\n\n".join(
        (
            by_function(samples),
            f"Bounds that did not hold, and exceptions:\n{misses(samples)}",
            f"The {WORST_SHOWN} largest errors in units of their bound:\n{closest(samples)}",
            f"The {WORST_SHOWN} widest bounds:\n{widest(samples)}",
            f"Evaluations told by the estimator minus evaluations counted here, farthest from 0: {farthest}",
            summary(samples, goals),
        )
    )


def run(points: int, seed: int = 0) -> str:
    """The report on `gradcheck.estimate`."""
    return report(measure(gradcheck.estimate, CASES, points=points, seed=seed))
