"""Are the steps advised for a user's own solver good ones, and is the error told for them honest?

Measured on `benchmarks.corpus` against `benchmarks.reference`, at random points, with the functions as they are and
with noise added to every value: independent for different x, the same for the same x, of a standard deviation of 1e-12,
1e-8 and 1e-4 of |f| at the point. What counts how:

- The steps are those of ``audit(...).steps``, taken without the rest of an audit. Where none is given (no noise level
  was heard), that is counted.
- Differences are taken with the step as it is realised, on fresh noise: the error of eight steps within an eighth of
  the advised one, so that luck with one step does not count. The error told is held against each of them.
- A step is compared with all steps from 1e-14 to 0.3 of the variable's size, six a decade, judged alike (root mean
  square); none counts as better than the rounding of two values leaves, or than 1e-13 of the slope.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchmarks.corpus import CASES, Case
from benchmarks.figures import Figure, aligned, side_by_side
from benchmarks.reference import slope
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import open_session
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.health.step_choice import StepChoice, step_choice
from gradcheck.problem.subject import subjects_of_function
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import Room, room_along

QUESTION = "Are the steps advised for a solver good ones, and is the error told for them honest?"
NOISES = (0.0, 1e-12, 1e-8, 1e-4)
WORST_SHOWN = 10
#: Steps around the advised one, in units of it.
FRESH = 1 + (np.arange(8) - 3.57) / 32
#: All steps that the advised one is compared with, in units of the variable's size.
LADDER = 10.0 ** np.arange(-14, -0.5, 1 / 6)

Floats = NDArray[np.float64]
Adviser = Callable[[Callable[[float], float], float], StepChoice | None]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Noisy:
    """A case with independent noise of standard deviation `level` on its values."""

    case: Case
    level: float

    def __call__(self, x: float) -> float:
        value = self.case.f(x)
        return value + self.level * float(uniform(np.array([x], dtype=float))[0]) if self.level else value


def uniform(x: Floats) -> Floats:
    """Numbers in ±sqrt(3) that depend on all bits of each x and on nothing else; their standard deviation is 1."""
    with np.errstate(over="ignore"):
        bits = x.view(np.uint64) + np.uint64(0x9E3779B97F4A7C15)
        bits = (bits ^ (bits >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        bits = (bits ^ (bits >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return math.sqrt(3) * (2 * ((bits ^ (bits >> np.uint64(31))) / 2.0**64) - 1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Differences:
    """Forward and central differences of one case at x and at several groups of steps, whatever noise is added.

    Attributes
    ----------
    up, down, at_up, at_down : ndarray, shape (groups, k)
        Points and values of the case without noise.
    slope : float
        The exact derivative, as the sum of this and `rest`.
    """

    x: float
    at_x: float
    up: Floats
    down: Floats
    at_up: Floats
    at_down: Floats
    slope: float
    rest: float

    @staticmethod
    def of(case: Case, x: float, steps: Floats, exact: Any) -> "Differences":
        """Differences at the eight fresh steps around each of `steps`."""
        h = np.asarray(steps)[:, None] * FRESH
        up, down = x + h, x - h
        at_up, at_down = (np.array([[case.f(float(p)) for p in row] for row in points]) for points in (up, down))
        slope = float(exact)
        return Differences(
            x=x, at_x=case.f(x), up=up, down=down, at_up=at_up, at_down=at_down, slope=slope, rest=float(exact - slope)
        )

    def errors(self, formula: str, level: float) -> Floats:
        """(groups, k): true errors with noise of that level added; infinite where a difference fails."""
        up, at_x = self.at_up + level * uniform(self.up), self.at_x + level * uniform(np.array([self.x]))
        down, at_down = (
            (self.down, self.at_down + level * uniform(self.down)) if formula == "central" else (self.x, at_x)
        )
        with np.errstate(all="ignore"):
            quotient = (up - at_down) / (self.up - down)
            error = np.abs((quotient - self.slope) - self.rest)
        return np.where(np.isfinite(error), error, np.inf)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sample:
    """One formula at one point of one function.

    Attributes
    ----------
    step, told : float
        The step advised, and the error told for it; NaN if none was.
    over : ndarray, shape (8,)
        True errors around the step over the error told.
    ratio : float
        Root mean square error around the step over the smallest of all steps.
    """

    case: Case
    x: float
    noise: float
    formula: str
    step: float = math.nan
    told: float = math.nan
    over: Floats
    ratio: float = math.nan
    failure: str = ""


def measure(advise: Adviser, cases: Sequence[Case], *, points: int, seed: int = 0) -> list[Sample]:
    """Samples of both formulas on every case, point and noise."""
    return [sample for case in cases for x in case.points(points, seed) for sample in _at_point(advise, case, x)]


def _at_point(advise: Adviser, case: Case, x: float) -> list[Sample]:
    exact = slope(case, x)
    ladder = LADDER * (abs(x) or 1.0)
    everywhere = Differences.of(case, x, ladder, exact)
    samples = []
    for noise in NOISES:
        function = Noisy(case=case, level=noise * (abs(case.f(x)) or 1.0))
        steps, failure = None, ""
        try:
            steps = advise(function, x)
        except Exception as fault:  # whatever it is, it counts against the advice and must not end the measurement
            failure = f"{type(fault).__name__}: {fault}"
        for formula in ("forward", "central"):
            sample = Sample(case=case, x=x, noise=noise, formula=formula, over=np.empty(0), failure=failure)
            step = math.nan if steps is None else float(getattr(steps, formula)[0])
            if steps is not None and math.isfinite(step):
                told = float(getattr(steps, f"{formula}_error")[0])
                near = Differences.of(case, x, np.array([step]), exact)
                sample = _judged(sample, function.level, step, told, near, everywhere, ladder)
            samples.append(sample)
    return samples


def _judged(
    sample: Sample, level: float, step: float, told: float, near: Differences, everywhere: Differences, ladder: Floats
) -> Sample:
    errors = near.errors(sample.formula, level)[0]
    best = float(_worth(everywhere, sample.formula, level, ladder).min())
    at_step = float(_worth(near, sample.formula, level, np.array([step]))[0])
    with np.errstate(all="ignore"):
        over = np.where(errors > 0, errors / told, 0.0) if told > 0 else np.where(errors > 0, np.inf, 0.0)
    return replace(sample, step=step, told=told, over=over, ratio=at_step / best if best > 0 else 1.0)


def _worth(differences: Differences, formula: str, level: float, steps: Floats) -> Floats:
    """Root mean square error of each group of steps, but no better than rounding and noise leave."""
    errors = differences.errors(formula, level)
    size = errors.max(axis=1)
    with np.errstate(all="ignore"):
        mean = np.where(np.isfinite(size) & (size > 0), size * np.sqrt(np.mean((errors.T / size) ** 2, axis=0)), size)
    value = max(0.29 * float(np.spacing(abs(differences.at_x))), level)
    amplified = value * (math.sqrt(0.5) if formula == "central" else math.sqrt(2)) / steps
    return np.maximum(np.maximum(mean, amplified), 1e-13 * abs(differences.slope))


def figures(samples: Sequence[Sample]) -> list[Figure]:
    """What the samples come to, each figure with its goal."""
    advised = [sample for sample in samples if sample.over.size]
    over = np.concatenate([sample.over for sample in advised]) if advised else np.empty(0)
    ratios = np.array([sample.ratio for sample in advised])
    return [
        Figure(name="errors within the one told, %", value=_share(over <= 1), form=".1f"),
        Figure(name="errors above 3 x the one told, %", value=_share(over > 3), goal=1.0, form=".2f"),
        Figure(name="median error told / error", value=_quantile(1 / over[over > 0], 0.5), goal=5.0),
        Figure(name="median error / smallest of any step", value=_quantile(ratios, 0.5), goal=2.0),
        Figure(name="  of 90 %", value=_quantile(ratios, 0.9), goal=5.0),
        Figure(name="without advice, %", value=100 * (1 - len(advised) / max(len(samples), 1)), goal=5.0, form=".1f"),
        Figure(name="exceptions", value=sum(bool(sample.failure) for sample in samples), goal=0.0),
        Figure(name="samples", value=len(samples), form=".0f"),
    ]


def _share(mask: NDArray[np.bool_]) -> float:
    return 100.0 * float(np.mean(mask)) if mask.size else math.nan


def _quantile(values: Floats, share: float) -> float:
    # not interpolated: infinite ones meet
    return float(np.quantile(values, share, method="lower")) if values.size else math.nan


def worst(samples: Sequence[Sample], formula: str) -> str:
    """The errors most underrated, and the steps farthest from the best."""
    advised = [sample for sample in samples if sample.over.size and sample.formula == formula]
    under = sorted(advised, key=lambda sample: -float(np.median(sample.over)))[:WORST_SHOWN]
    far = sorted(advised, key=lambda sample: -sample.ratio)[:WORST_SHOWN]
    failed = [sample for sample in samples if sample.failure and sample.formula == formula][:WORST_SHOWN]
    return "\n\n".join(
        f"{formula}: {title}\n{_listing(part)}"
        for title, part in (
            ("errors most underrated", under),
            ("steps farthest from the best", far),
            ("failed", failed),
        )
        if part
    )


def _listing(samples: Sequence[Sample]) -> str:
    heading = ("function", "x", "noise", "step", "told", "median error / told", "ratio to best")
    rows = [
        (
            sample.case.name + (" *" if sample.case.kept_aside else ""),
            repr(sample.x),
            f"{sample.noise:.0e}",
            sample.failure[:60] or f"{sample.step:.2g}",
            f"{sample.told:.2g}",
            f"{float(np.median(sample.over)) if sample.over.size else math.nan:.3g}",
            f"{sample.ratio:.3g}",
        )
        for sample in samples
    ]
    return aligned(heading, rows)


def report(samples: Sequence[Sample]) -> str:
    """Everything worth reading about a measurement."""
    parts = [worst(samples, formula) for formula in ("forward", "central")]
    for formula in ("forward", "central"):
        own = [sample for sample in samples if sample.formula == formula]
        columns = {
            "all": own,
            **{
                f"noise {noise:.0e}" if noise else "as they are": [s for s in own if s.noise == noise]
                for noise in NOISES
            },
            "kept aside": [sample for sample in own if sample.case.kept_aside],
        }
        parts.append(f"{formula}:\n{side_by_side({name: figures(part) for name, part in columns.items()})}")
    return "\n\n".join(parts)


def chosen_steps(function: Callable[[float], float], x: float) -> StepChoice | None:
    """The steps that an audit would choose, without the rest of it."""
    subject = subjects_of_function(function, x, claims={})[0]
    session = open_session(subject, budget=None, time_limit=None)
    name = next(iter(subject.targets))
    centre = session.start_values()[name]
    room = room_along(subject.start, np.arange(1), subject.domain)
    return conduct_one(addressed(_choice(subject.start, room, centre), function=name), session.gate)


def _choice(start: Floats, room: Room, centre: Floats) -> Inquiry[StepChoice | None]:
    orders = []
    for order in (1, 2, 3):
        found = yield from finite_difference(start, np.arange(1), room, centre, derivative=order)
        orders.append(found)
    choice = yield from step_choice(start, np.arange(1), room, centre, *orders)
    return choice if np.isfinite(orders[0].noise).any() else None


def run(points: int, seed: int = 0) -> str:
    """The report on the steps of an audit."""
    return report(measure(chosen_steps, CASES, points=points, seed=seed))
