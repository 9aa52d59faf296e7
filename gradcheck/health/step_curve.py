"""The error of a central difference as a function of its step, against the best answer from function values."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Request
from gradcheck.records.arrays import Array
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import Room, rounded_half_width
from gradcheck.witnesses.testimony import Testimony

#: Steps in units of the variable's size: four a decade, from a third of the size down to its rounding.
LADDER = 10.0 ** np.arange(-13.5, -0.4, 0.25)
#: Steps on each side whose errors are looked at together: one quotient may be right by luck.
NEIGHBOURS = 1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepCurve:
    """The curve of one direction and one output; arrays of shape (k,), steps increasing.

    Attributes
    ----------
    steps, values, errors : ndarray
        Step taken, difference quotient, estimated absolute error.
    best : int
        Index of the best step.
    order : float
        Slope of log(error) over log(step) on the truncation branch; NaN if no branch shows.
    reference : Testimony
        The answer that errors are measured against, one direction and one output.
    """

    steps: Array
    values: Array
    errors: Array
    best: int
    order: float
    reference: Testimony


def step_curve(base: Array, directions: Directions, room: Room, centre: Array) -> Inquiry[StepCurve]:
    """Quotients at all steps of the ladder that the bounds allow, with their errors.

    Parameters
    ----------
    base, room, centre
        As in `finite_difference`; one output.
    directions : ndarray
        One coordinate index (1,) or one row (1, n).

    Returns
    -------
    StepCurve
        Where one side has no room the quotients are one-sided (three points, second order).
    """
    reference = yield from finite_difference(base, directions, room, centre)
    both = min(room.below[0], room.above[0]) >= 1e-3 * room.scale[0]
    reach = min(room.below[0], room.above[0]) if both else max(room.below[0], room.above[0]) / 2
    sign = 1.0 if both or room.above[0] >= room.below[0] else -1.0
    wanted = LADDER[LADDER * room.scale[0] <= reach] * room.scale[0]
    steps = np.unique(rounded_half_width(wanted, np.full(wanted.size, room.grain[0] * 2.0**-12)))
    offsets = np.concatenate([steps, -steps if both else 2 * steps]) * sign
    if directions.ndim == 1:
        x = base[directions[0]]
        offsets = (x + offsets) - x
    reply = yield Request(base=base, directions=directions, offsets=offsets[None, :])
    k = steps.size
    first, second = reply.values[0, :k, 0], reply.values[0, k:, 0]
    near, far = offsets[:k], offsets[k:]
    with np.errstate(divide="ignore", invalid="ignore"):
        if both:
            values = (first - second) / (near - far)
        else:
            values = (first - centre[0]) / near * far / (far - near) - (second - centre[0]) / far * near / (far - near)
    errors = _errors(values, reference)
    best = _best(errors)
    return StepCurve(
        steps=np.abs(near),
        values=values,
        errors=errors,
        best=best,
        order=_order(np.abs(near), errors, best, float(reference.bound[0, 0])),
        reference=reference,
    )


def _errors(values: Array, reference: Testimony) -> Array:
    """Distance to the reference; where it has no finite value, the distance to the neighbouring quotients."""
    if np.isfinite(reference.value[0, 0]):
        distance: Array = np.abs(values - reference.value[0, 0])
        return distance
    change = np.abs(np.diff(values, prepend=values[:1], append=values[-1:]))
    return np.maximum(change[:-1], change[1:])


def _best(errors: Array) -> int:
    """Index of the smallest error, each step judged by the worst of itself and its neighbours."""
    padded = np.pad(np.nan_to_num(errors, nan=np.inf), NEIGHBOURS, constant_values=0.0)
    windows = np.lib.stride_tricks.sliding_window_view(padded, 2 * NEIGHBOURS + 1)
    return int(np.argmin(windows.max(axis=1)))


def _order(steps: Array, errors: Array, best: int, bound: float) -> float:
    """Median slope of the errors above the best step, where they exceed what the reference resolves."""
    known = np.isfinite(errors) & (errors > 0)
    branch = np.flatnonzero(known & (np.arange(errors.size) > best + NEIGHBOURS))
    if np.isfinite(bound):
        branch = branch[errors[branch] > 10 * bound]
    if branch.size < 4:
        return float("nan")
    slopes = np.diff(np.log(errors[branch])) / np.diff(np.log(steps[branch]))
    # The lower half of the branch is nearest to the limit where one term rules.
    return float(np.median(slopes[: max(3, slopes.size // 2)]))
