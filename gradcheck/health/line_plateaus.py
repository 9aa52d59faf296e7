"""A model that does not move under small steps, although it moves along the line: where are its risers?"""

import numpy as np

from gradcheck.health.line_confirmation import PLACES
from gradcheck.health.line_focus import Focus
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import EPSILON, Quest, Samples
from gradcheck.health.line_zoom import JUMP_WIDTH
from gradcheck.records.arrays import Array
from gradcheck.records.finding import FindingCode

LEAST_STEP = 100.0  # units in the last place


def risers(samples: Samples, focus: Focus) -> Quest[tuple[Samples, list[Irregularity]]]:
    """The steps between plateaus, two of them at most; none if what lies between is no plateau.

    The cells with the largest and with the smallest difference are bisected together, always keeping a half whose ends
    differ; a riser is a jump between samples that do not move on either side.
    """
    t, f = samples.within(focus.output, 0.0, 1.0)
    steps = np.abs(np.diff(f))
    moving = np.flatnonzero(steps > _least_step(f))
    if moving.size == 0:
        return samples, []
    chosen = np.unique([moving[steps[moving].argmax()], moving[steps[moving].argmin()]])
    lower, upper = t[chosen], t[chosen + 1]
    low, high = f[chosen], f[chosen + 1]
    width = np.maximum(JUMP_WIDTH, [focus.closest(end) for end in upper])
    while (upper - lower > width).any():
        samples = yield 0.5 * (lower + upper)
        middle, value = samples.at(0.5 * (lower + upper), focus.output)
        if not np.isfinite(value).all():
            return samples, []
        leftward = (value != low) & ((value == high) | (focus.rng.random(low.size) < 0.5))
        upper, high = np.where(leftward, middle, upper), np.where(leftward, value, high)
        lower, low = np.where(leftward, lower, middle), np.where(leftward, low, value)
    found = []
    for ends in zip(lower, upper, low, high, strict=True):
        samples, riser = yield from _riser(samples, focus, *map(float, ends))
        found.append(riser)
    return samples, [riser for riser in found if riser is not None] if all(found) else []


def _riser(
    samples: Samples, focus: Focus, lower: float, upper: float, low: float, high: float
) -> Quest[tuple[Samples, Irregularity | None]]:
    distance = 4.0 * max(upper - lower, focus.closest(upper))
    if abs(high - low) <= _least_step(np.array([low, high])):
        return samples, None
    below, above = lower - distance * PLACES, upper + distance * PLACES
    below, above = below[below >= 0.0], above[above <= 1.0]  # a riser may stand at the very end
    samples = yield np.concatenate([below, above])
    if (samples.at(below, focus.output)[1] != low).any() or (samples.at(above, focus.output)[1] != high).any():
        return samples, None
    return samples, Irregularity(
        kind=FindingCode.JUMP,
        output=focus.output,
        lower=lower,
        upper=upper,
        size=high - low,
        left=low,
        right=high,
        relative=abs(high - low) / focus.scale,
        evidence={"flat_on_both_sides": 1.0},
    )


def _least_step(f: Array) -> float:
    """What is smaller is a step of the rounding: a saturated function has such."""
    return LEAST_STEP * EPSILON * float(np.abs(f).max())


def levels(f: Array) -> int:
    """Number of different values."""
    return int(np.unique(f).size)


def single_step(f: Array) -> bool:
    """Whether the values change once and never again."""
    return int(np.count_nonzero(np.diff(f))) == 1


def as_staircase(riser: Irregularity, samples: Samples) -> Irregularity:
    """A riser as the sign of a staircase, with what is known of its treads."""
    t, f = samples.within(riser.output, 0.0, 1.0)
    riser_at = int(np.searchsorted(t, riser.upper))
    ends = np.flatnonzero(np.diff(f))
    before, after = ends[ends < riser_at - 1], ends[ends > riser_at - 1]
    below = riser.lower - (t[before[-1] + 1] if before.size else t[0])
    above = (t[after[0]] if after.size else t[-1]) - riser.upper
    return Irregularity(
        kind=FindingCode.STAIRCASE,
        output=riser.output,
        lower=riser.lower,
        upper=riser.upper,
        size=riser.size,
        left=riser.left,
        right=riser.right,
        relative=riser.relative,
        evidence={
            "levels_seen": float(levels(f)),
            "tread_at_least": float(max(below, above)),
        },
    )
