"""Does the step-size curve name the right step and the right order, and what does it cost?

Measured on `benchmarks.corpus` against `benchmarks.reference`, at random points. What counts how:

- A step is worth the root mean square of the true errors of eight fresh central differences at steps around it (within
  a quarter of a decade), which the scan has not seen: neither its luck nor its choice among its own quotients counts.
  The best step is compared with the best of all steps of the curve, judged alike.
- A quotient may come out exact by symmetry, or because values have few digits; nobody can count on it. No step counts
  as better than the rounding of two values leaves (0.29 units in the last place each), or than 1e-13 of the slope.
- Where the scan says that no step is any good, it has no ratio; how often it says so is told.
- A central difference has order 2 wherever truncation shows; curves whose third derivative is lost in rounding at every
  step have no order, and how many have one is told.
- The error told for the best step, at least the bound of the reference that it is measured against, is held against
  the same root mean square.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np
from numpy.typing import NDArray

import gradcheck
from benchmarks.corpus import CASES, Case
from benchmarks.estimator import LOW_DEGREE, Counted
from benchmarks.figures import Figure, aligned, side_by_side
from benchmarks.reference import slope

QUESTION = "Does the step-size curve name the right step and the right order?"
WORST_SHOWN = 12
#: An observed order counts as 2 within this distance.
NEAR = 0.3
#: Steps at which the worth of a step is measured, in units of it; none is a step of the scan.
FRESH = 10.0 ** (0.25 * (np.arange(8) - 3.57) / 8)

Scanner = Callable[..., Any]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sample:
    """What a scan said about one function at one point.

    Attributes
    ----------
    best_step, order : float
    ratio : float
        True error of differences around the best step over the smallest around any step of the curve.
    told : float
        True error around the best step over the error told for it; NaN where that is 0.
    calls : int
    failure : str
        The exception, if there was one.
    """

    case: Case
    x: float
    best_step: float = math.nan
    order: float = math.nan
    ratio: float = math.nan
    told: float = math.nan
    calls: int = 0
    failure: str = ""


def measure(scan: Scanner, cases: Sequence[Case], *, points: int, seed: int = 0) -> list[Sample]:
    """`scan` on every case at `points` random points each."""
    return [_sample(scan, case, x) for case in cases for x in case.points(points, seed)]


def _sample(scan: Scanner, case: Case, x: float) -> Sample:
    function = Counted(case.f)
    try:
        curve = scan(function, at=x)
    except Exception as fault:  # whatever it is, it counts against the scan and must not end the measurement
        return Sample(case=case, x=x, calls=function.calls, failure=f"{type(fault).__name__}: {fault}")
    exact = slope(case, x)
    worth = np.array([_worth(case, x, step, exact) for step in curve.steps])
    least = np.maximum(0.29 * np.spacing(abs(case.f(x))) / (math.sqrt(2) * curve.steps), 1e-13 * abs(float(exact)))
    counted = np.maximum(worth, least)
    place = int(np.argmin(np.abs(curve.steps - curve.best_step)))
    if not math.isfinite(curve.best_step):
        return Sample(case=case, x=x, order=float(curve.order), calls=function.calls)
    told = max(curve.best_error, curve.floor, curve.bound)
    return Sample(
        case=case,
        x=x,
        best_step=float(curve.best_step),
        order=float(curve.order),
        ratio=float(counted[place] / counted.min()) if counted.min() > 0 else 1.0,
        told=float(worth[place]) / told if told > 0 else math.nan,
        calls=function.calls,
    )


def _worth(case: Case, x: float, step: float, exact: Any) -> float:
    """Root mean square of the true errors of central differences at steps around `step`; infinite if one fails."""
    errors = []
    for near in step * FRESH:
        up, down = x + near, x - near
        quotient = (case.f(up) - case.f(down)) / (up - down)
        errors.append(float(abs(mpmath.mpf(quotient) - exact)) if math.isfinite(quotient) else math.inf)
    return math.sqrt(math.fsum(error * error for error in errors) / len(errors))


def figures(samples: Sequence[Sample]) -> list[Figure]:
    """What the samples come to, each figure with its goal."""
    answered = [sample for sample in samples if not sample.failure]
    ratios = np.array([sample.ratio for sample in answered if not math.isnan(sample.ratio)])
    curved = [sample for sample in answered if sample.case.group != LOW_DEGREE]
    orders = np.array([sample.order for sample in curved if not math.isnan(sample.order)])
    told = np.array([sample.told for sample in answered if not math.isnan(sample.told)])
    right = 100.0 * float(np.mean(np.abs(orders - 2) <= NEAR)) if orders.size else math.nan
    return [
        Figure(name="median error at best step / smallest", value=_quantile(ratios, 0.5), goal=1.5),
        Figure(name="  of 90 %", value=_quantile(ratios, 0.9), goal=3.0),
        Figure(name="  of 99 %", value=_quantile(ratios, 0.99), goal=10.0),
        Figure(
            name="without a best step, %", value=100.0 * (1 - ratios.size / max(len(answered), 1)), goal=1.0, form=".2f"
        ),
        Figure(name="observed orders within 0.3 of 2, %", value=right, goal=98.0, at_least=True, form=".1f"),
        Figure(name="curves with an order, %", value=100.0 * orders.size / max(len(curved), 1), form=".1f"),
        Figure(
            name="true error above 3 x the one told, %",
            value=100.0 * float(np.mean(told > 3)) if told.size else math.nan,
            goal=1.0,
            form=".2f",
        ),
        Figure(
            name="median evaluations",
            value=_quantile(np.array([s.calls for s in answered], dtype=float), 0.5),
            goal=150,
        ),
        Figure(name="exceptions", value=len(samples) - len(answered), goal=0.0),
        Figure(name="samples", value=len(samples), form=".0f"),
    ]


def _quantile(values: NDArray[np.float64], share: float) -> float:
    return float(np.quantile(values, share)) if values.size else math.nan


def worst(samples: Sequence[Sample]) -> str:
    """The steps farthest from the best one, and the orders farthest from 2."""
    answered = [sample for sample in samples if not sample.failure]
    far = sorted((s for s in answered if not math.isnan(s.ratio)), key=lambda sample: -sample.ratio)[:WORST_SHOWN]
    odd = sorted(
        (s for s in answered if abs(s.order - 2) > NEAR and s.case.group != LOW_DEGREE), key=lambda s: -abs(s.order - 2)
    )[:WORST_SHOWN]
    failed = [sample for sample in samples if sample.failure][:WORST_SHOWN]
    return "\n\n".join(
        f"{title}:\n{_listing(part)}"
        for title, part in (("Steps farthest from the best", far), ("Orders farthest from 2", odd), ("Failed", failed))
        if part
    )


def _listing(samples: Sequence[Sample]) -> str:
    heading = ("function", "x", "best step", "error ratio", "order", "true / told")
    rows = [
        (
            sample.case.name + (" *" if sample.case.kept_aside else ""),
            repr(sample.x),
            sample.failure[:60] or f"{sample.best_step:.2g}",
            f"{sample.ratio:.3g}",
            f"{sample.order:.2f}",
            f"{sample.told:.2g}",
        )
        for sample in samples
    ]
    return aligned(heading, rows)


def report(samples: Sequence[Sample]) -> str:
    """Everything worth reading about a measurement."""
    columns = {
        "all": figures(samples),
        "tuned": figures([sample for sample in samples if not sample.case.kept_aside]),
        "kept aside": figures([sample for sample in samples if sample.case.kept_aside]),
    }
    return "\n\n".join((worst(samples), side_by_side(columns)))


def run(points: int, seed: int = 0) -> str:
    """The report on `gradcheck.scan`."""
    return report(measure(gradcheck.scan, CASES, points=points, seed=seed))
