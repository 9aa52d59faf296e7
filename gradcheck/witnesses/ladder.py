"""What pairs of values on a geometric ladder of tiny steps say where a polynomial fit does not settle.

A fit whose coefficients stop decaying far above rounding has met either noise, or structure finer than its width: a
fast wave, a kink, a jump, a plateau. Differences at steps that shrink by 8 tell them apart.
"""

from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np

from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.polynomial_fit import ROUNDING

#: Steps in units of the variable's size, finest first. No round numbers: at a round x, round steps meet round waves and
#: stairs always in the same phase.
LADDER = 0.8637 * 8.0 ** -np.arange(13, 1, -1)
#: Two more steps below these, where the ladder heard noise: a wave too fast for it is smooth there.
FINEST = 0.8637 * 8.0 ** -np.arange(16, 14, -1)
#: What second differences keep of their size on the finest steps if they are noise; what share of the noise a wave's
#: bend explains, carried on to the ladder's second step; how many units of rounding it must exceed.
KEPT, EXPLAINED, SEEN = 0.1, 0.2, 6.0
#: Quotients that differ by less than this share still belong to one smooth piece.
SIMILAR = 0.03
#: A second difference of independent errors of size 1 has this standard deviation.
_SECOND_DIFFERENCE = np.sqrt(6.0)


class Nature(IntEnum):
    """What the ladder shows at the point."""

    SMOOTH = 0  # quotients settle as the step shrinks
    NOISE = 1  # second differences do not shrink: errors of the values
    KINK = 2  # the one-sided slopes stay apart
    JUMP = 3  # the values on both sides stay apart
    PLATEAU = 4  # values do not change at all at small steps
    STEEP = 5  # quotients grow without limit


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rungs:
    """The ladder of several directions and outputs.

    Attributes
    ----------
    nature : ndarray of int8, shape (d, m)
    quotient : ndarray, shape (d, m)
        Difference quotient at the largest step that agrees with all finer ones.
    step : ndarray, shape (d, m)
        That step.
    wide_step : ndarray, shape (d, m)
        The largest step whose quotient is still similar to the finer ones: a polynomial may see through so much.
    noise : ndarray, shape (d, m)
        Standard deviation of one value as the finest second differences show it.
    left, right : ndarray, shape (d, m)
        One-sided slopes at a kink; NaN elsewhere.
    slope_error : ndarray, shape (d, m)
        Uncertainty of the one-sided slopes.
    """

    nature: np.ndarray[tuple[int, ...], np.dtype[np.int8]]
    quotient: Array
    step: Array
    wide_step: Array
    noise: Array
    left: Array
    right: Array
    slope_error: Array


def read_ladder(
    steps: Array, up: Array, down: Array, centre: Array, one_sided: BoolArray, coarse_slope: Array
) -> Rungs:
    """Tell the natures apart.

    Parameters
    ----------
    steps : ndarray, shape (d, r)
        Increasing.
    up, down : ndarray, shape (d, r, m)
        Values at +step and −step; where `one_sided`, at +step and +2 steps.
    centre : ndarray, shape (m,)
    one_sided : ndarray of bool, shape (d,)
    coarse_slope : ndarray, shape (d, m)
        The slope that a wide fit saw: how much should change over a tiny step.
    """
    # Squares of huge values would overflow; powers of two lose nothing.
    largest = np.maximum(np.abs(centre), np.maximum(np.abs(up), np.abs(down)).max(axis=(0, 1)))
    unit = 2.0 ** np.clip(np.ceil(np.log2(np.maximum(largest, np.finfo(float).tiny))), -900, 900)
    up, down, centre, coarse_slope = up / unit, down / unit, centre / unit, coarse_slope / unit
    h = steps[:, :, None]
    side = one_sided[:, None, None]
    centred = (up - down) / (2 * h)
    forward = (4 * up - down - 3 * centre) / (2 * h)
    quotient = np.where(side, forward, centred)
    second = np.where(side, centre - 2 * up + down, up + down - 2 * centre)
    spacing = np.spacing(np.maximum(np.abs(up).max(axis=1), np.abs(centre)))
    floor = ROUNDING * spacing
    noise = np.maximum(np.sqrt(np.mean(second[:, :2] ** 2, axis=1)) / _SECOND_DIFFERENCE, floor)

    nature = np.full(noise.shape, Nature.SMOOTH, dtype=np.int8)
    unchanged = (up == centre) & (down == centre)
    expected = np.abs(coarse_slope)[:, None, :] * h
    plateau = unchanged[:, 0] & (expected[:, 0] > 8 * spacing)
    # Thresholds rest on rounding, not on `noise`: a jump or a kink is itself a second difference that does not vanish.
    rounding = np.broadcast_to(floor[:, None, :], second.shape)
    gap = np.abs(up - down - 2 * h * coarse_slope[:, None, :])
    # A jump at the point shows on every rung; one beside it only on the wider ones.
    jump = _stays(gap, 40 * rounding, rungs=4, within=0.1) & (gap > 40 * rounding)[:, 0] & ~one_sided[:, None]
    # Close to a kink the two sides differ by a constant as well, but their mean runs away from the centre.
    jump &= np.abs(second[:, 3]) <= 2 * gap[:, 3]
    bend = np.abs(second) / h
    # A kink at the point shows as soon as it leaves the noise; one beside it starts to show with a leap.
    starts = np.take_along_axis(second, np.argmax(np.abs(second) > 40 * rounding, axis=1)[:, None, :], axis=1)[:, 0]
    gradual = (np.abs(second[:, 0]) > 40 * floor) | (np.abs(starts) <= 16 * 40 * floor)
    kink = _stays(bend, 40 * rounding / h, rungs=3, within=0.25) & gradual & ~one_sided[:, None] & ~jump
    # Steep: quotients grow as the step shrinks, and still the values come together (else it is a jump, or a digit).
    moved = np.abs(np.where(side, up - centre, up - down))
    grows = (np.abs(quotient[:, :-1]) > 1.3 * np.abs(quotient[:, 1:])) & (1.3 * moved[:, :-1] < moved[:, 1:])
    significant = np.abs(quotient) * h > 40 * rounding
    steep = (grows & significant[:, :-1])[:, :4].all(axis=1)
    # Or by the same amount at every step, as that of x·log x; those of a smooth function settle.
    steep |= _stays(np.abs(np.diff(quotient, axis=1)), (40 * rounding / h)[:, :-1], rungs=5, within=0.1)
    noisy = _does_not_shrink(second, floor)
    for mark, where in (
        (Nature.NOISE, noisy),
        (Nature.STEEP, steep & ~jump),
        (Nature.KINK, kink),
        (Nature.JUMP, jump),
        (Nature.PLATEAU, plateau),
    ):
        nature[where] = mark

    # Where second differences shrink as those of a smooth function do, those of the second rung still belong to it; on
    # the last digit of a sum they may vanish at once.
    fine, coarser = np.abs(second[:, 0]), np.abs(second[:, 1])
    shrinks = (nature == Nature.SMOOTH) & (8 * fine <= coarser) & (coarser <= 600 * fine)
    noise = np.where(shrinks, np.minimum(noise, np.maximum(fine / _SECOND_DIFFERENCE, floor)), noise)
    error = 4 * noise[:, None, :] / h
    agreed = _largest_agreed(quotient, error)
    similar = _largest_agreed(quotient, error + SIMILAR * np.abs(quotient).max(axis=1, keepdims=True))
    pick = np.take_along_axis
    all_steps = np.broadcast_to(h, quotient.shape)
    step = pick(all_steps, agreed[:, None, :], axis=1)[:, 0]
    wide_step = pick(all_steps, similar[:, None, :], axis=1)[:, 0]
    step, wide_step = _as_far_as_bends_agree(second, h, 40 * rounding, nature, one_sided, step, wide_step)
    left, right, error = _one_sided_slopes(h, up, down, centre, noise)
    at_kink = nature == Nature.KINK
    return Rungs(
        nature=nature,
        quotient=pick(quotient, agreed[:, None, :], axis=1)[:, 0] * unit,
        step=step,
        wide_step=np.maximum(step, wide_step),
        noise=noise * unit,
        left=np.where(at_kink, left * unit, np.nan),
        right=np.where(at_kink, right * unit, np.nan),
        slope_error=np.where(at_kink, error * unit, np.nan),
    )


def _as_far_as_bends_agree(
    second: Array,
    h: Array,
    noise: Array,
    nature: np.ndarray[tuple[int, ...], np.dtype[np.int8]],
    one_sided: BoolArray,
    step: Array,
    wide_step: Array,
) -> tuple[Array, Array]:
    """Steps, (d, m), that see the same bend as the finest ones where the quotients agree at every step.

    On the top of a peak, or at the corner of a rounded kink, the quotients of all steps agree and say nothing about how
    wide it is.
    """
    bend = second / h**2
    seen = np.abs(second) > noise
    first = np.argmax(seen, axis=1)[:, None, :]
    reference = np.abs(np.take_along_axis(bend, first, axis=1))
    agreed = _largest_agreed(
        bend, 0.2 * noise / h**2 + np.where(seen.any(axis=1, keepdims=True), 0.3 * reference, np.inf)
    )
    cap = np.maximum(np.take_along_axis(np.broadcast_to(h, bend.shape), agreed[:, None, :], axis=1)[:, 0], h[:, 0])
    blind = (nature == Nature.SMOOTH) & ~one_sided[:, None] & seen.any(axis=1) & (step >= 0.9 * h[:, -1])
    return np.where(blind, np.minimum(step, cap), step), np.where(blind, np.minimum(wide_step, cap), wide_step)


def without_waves(rungs: Rungs, step: Array, finest: Array, up: Array, down: Array, centre: Array) -> Rungs:
    """Rungs on which a wave that was too fast for the ladder no longer counts as noise.

    Parameters
    ----------
    rungs : Rungs
    step : ndarray, shape (d,)
        Second step of the ladder.
    finest : ndarray, shape (d, 2)
        Two steps finer than the ladder, increasing.
    up, down : ndarray, shape (d, 2, m)
        Values at + and − these.
    centre : ndarray, shape (m,)

    Returns
    -------
    Rungs
        Where the values on the finest steps are smooth, and bent enough to make the noise of the ladder, they are
        smooth with the larger of these steps. Values that are smooth and straight there, however steep, belong to a
        model that jumps, as the last digits of a cancelled sum do: that is noise.
    """
    floor = ROUNDING * np.spacing(np.maximum(np.abs(up).max(axis=1), np.abs(centre)))
    heard = np.fmax(rungs.noise, floor)
    second = up + down - 2 * centre
    level = np.sqrt(np.mean(second**2, axis=1)) / _SECOND_DIFFERENCE
    h = finest[:, 1:]
    bend = np.abs(second[:, 1]) / 2
    explained = (bend > SEEN * floor) & (bend * (step[:, None] / h) ** 2 > EXPLAINED * heard)
    wave = (rungs.nature == Nature.NOISE) & (level < KEPT * heard) & explained
    return replace(
        rungs,
        nature=np.where(wave, np.int8(Nature.SMOOTH), rungs.nature),
        quotient=np.where(wave, (up[:, 1] - down[:, 1]) / (2 * h), rungs.quotient),
        step=np.where(wave, h, rungs.step),
        wide_step=np.where(wave, h, rungs.wide_step),
        noise=np.where(wave, np.fmax(level, floor), rungs.noise),
    )


def _stays(size: Array, noise: Array, *, rungs: int, within: float) -> BoolArray:
    """(d, m): sizes (d, r, m) stay the same, but for a share `within`, on the finest `rungs` above noise."""
    r = size.shape[1]
    seen = size > noise
    first = np.argmax(seen, axis=1)  # finest rung above noise
    enough = seen.any(axis=1) & (first <= r - rungs)
    rows = np.minimum(first, r - rungs)[:, None, :] + np.arange(rungs)[None, :, None]
    looked_at = np.take_along_axis(size, rows, axis=1)
    visible = np.take_along_axis(seen, rows, axis=1).all(axis=1)
    steady = looked_at.max(axis=1) <= (1 + within) * looked_at.min(axis=1)
    result: BoolArray = enough & visible & steady
    return result


def _does_not_shrink(second: Array, floor: Array) -> BoolArray:
    """(d, m): second differences of the two finest rungs are as large as those of the next two, and well above
    rounding.

    Those of a smooth function shrink by 64 a rung.
    """
    fine, next_two = (np.sqrt(np.mean(second[:, rungs] ** 2, axis=1)) for rungs in (slice(0, 2), slice(2, 4)))
    result: BoolArray = (fine > 8 * floor) & (fine > 0.1 * next_two)
    return result


def _largest_agreed(quotient: Array, error: Array) -> IntArray:
    """(d, m): index of the largest step whose quotient agrees, within errors, with those of all finer steps."""
    # Interval of values that all finer rungs allow; a rung agrees if it meets the interval.
    low = np.maximum.accumulate(quotient - error, axis=1)
    high = np.minimum.accumulate(quotient + error, axis=1)
    agrees = low <= high
    agrees[:, 0] = True
    run = np.cumprod(agrees, axis=1).sum(axis=1) - 1
    result: IntArray = run.astype(np.intp)
    return result


def _one_sided_slopes(h: Array, up: Array, down: Array, centre: Array, noise: Array) -> tuple[Array, Array, Array]:
    """Slopes to the left and right, extrapolated from two rungs, with an error from rungs and noise."""
    right = (up - centre) / h
    left = (centre - down) / h
    # The quotient has error c·h + noise/h: the best single rung balances both; its neighbour shows c·h.
    change = np.abs(np.diff(right, axis=1)) + np.abs(np.diff(left, axis=1))
    total = change + 4 * noise[:, None, :] / h[:, :-1]
    best = np.argmin(total, axis=1)[:, None, :]
    extrapolated = [(8 * side[:, :-1] - side[:, 1:]) / 7 for side in (left, right)]
    picked = [np.take_along_axis(side, best, axis=1)[:, 0] for side in (*extrapolated, total)]
    return picked[0], picked[1], picked[2]
