"""The error of a central difference as a function of its step, against the best answer from function values."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Request
from gradcheck.health.curve_branches import roundoff_branch, truncation_branch
from gradcheck.records.arrays import Array
from gradcheck.records.estimate import Branch
from gradcheck.witnesses.difference_reasons import REASONS
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.ladder import Nature
from gradcheck.witnesses.polynomial_fit import ROUNDING
from gradcheck.witnesses.steps import Room
from gradcheck.witnesses.testimony import Testimony

#: Steps in units of the variable's size: four a decade, from a third of the size down to its rounding.
LADDER = 10.0 ** np.arange(-13.5, -0.4, 0.25)
#: Steps on each side whose errors are looked at together: one quotient may be right by luck.
NEIGHBOURS = 1
#: A side with less room than this share of the variable's size is none.
LEAST_ROOM = 1e-3
#: A bound so many times wider than the smallest change from quotient to quotient says less than the quotients.
BLURRED = 30.0
#: Noise of so many times that of the reference, which met none, is a wave that the reference resolved.
SEEN_THROUGH = 10.0
#: Steps whose errors differ by no more than this factor are equally good.
ALIKE = 1.05
#: Where one of these holds, quotients of no step approximate a derivative.
NO_DERIVATIVE = tuple(REASONS[nature] for nature in (Nature.KINK, Nature.JUMP, Nature.PLATEAU, Nature.STEEP))
#: Euclidean norm of the weights at a step of 1: what independent errors of the values are multiplied by.
CENTRAL_NORM, ONE_SIDED_NORM = np.sqrt(0.5), np.sqrt(6.5)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepCurve:
    """The curve of one direction and one output; arrays of shape (k,), steps increasing.

    Attributes
    ----------
    steps, values, errors : ndarray
        Step taken, difference quotient, estimated absolute error.
    best : int
        Index of the best step; -1 if no quotient is finite.
    best_error : float
        Largest error of the best step and its neighbours.
    floor : float
        What `noise` leaves at the best step; at a kink, half the difference of the slopes; NaN where there is neither.
    truncation, roundoff : Branch or None
    one_sided : bool
        Three values on one side instead of two around the point.
    reference : Testimony
        The answer that errors are measured against, one direction and one output.
    noise : float
        Standard deviation of one value.
    """

    steps: Array
    values: Array
    errors: Array
    best: int
    best_error: float
    floor: float
    truncation: Branch | None
    roundoff: Branch | None
    one_sided: bool
    reference: Testimony
    noise: float


def step_curve(
    base: Array, directions: Directions, room: Room, centre: Array, noise: float = np.nan
) -> Inquiry[StepCurve]:
    """Quotients at all steps of the ladder that the bounds allow, with their errors.

    Parameters
    ----------
    base, room, centre
        As in `finite_difference`; one output.
    directions : ndarray
        One coordinate index (1,) or one row (1, n).
    noise : float
        Standard deviation of one value, if it was measured; else that of the reference.

    Returns
    -------
    StepCurve
        Where one side has no room the quotients are one-sided (three points, second order).
    """
    reference = yield from finite_difference(base, directions, room, centre)
    both = min(room.below[0], room.above[0]) >= LEAST_ROOM * room.scale[0]
    reach = min(room.below[0], room.above[0]) if both else max(room.below[0], room.above[0]) / 2
    sign = 1.0 if both or room.above[0] >= room.below[0] else -1.0
    # No rounding to a convenient grid: on one, rounding inside the model may cancel that meets a solver in full.
    steps = LADDER[LADDER * room.scale[0] <= reach] * room.scale[0]
    offsets = np.concatenate([steps, -steps if both else 2 * steps]) * sign
    if directions.ndim == 1:
        x = base[directions[0]]
        offsets = (x + offsets) - x
    reply = yield Request(base=base, directions=directions, offsets=offsets[None, :])
    k = steps.size
    near, far = offsets[:k], offsets[k:]
    values = quotients(near, far, reply.values[0, :k, 0], reply.values[0, k:, 0], None if both else float(centre[0]))
    taken = np.abs(near - far) / 2 if both else np.abs(near)
    return _read(taken, values, reference, _believed(noise, reference, float(centre[0])), one_sided=not both)


def _believed(noise: float, reference: Testimony, centre: float) -> float:
    """The noise that was measured, unless the reference saw through it: a faint fast wave is part of the function."""
    own = float(reference.noise[0])
    if np.isfinite(own) and not reference.doubtful[0, 0] and not noise <= SEEN_THROUGH * own:
        return own
    return next(level for level in (noise, own, ROUNDING * float(np.spacing(abs(centre)))) if np.isfinite(level))


def quotients(near: Array, far: Array, first: Array, second: Array, centre: float | None) -> Array:
    """(k,): slopes from values at two displacements each, and at the point itself if `centre` is given."""
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        if centre is None:
            return np.asarray((first - second) / (near - far))
        spread = far - near
        return np.asarray((first - centre) / near * far / spread - (second - centre) / far * near / spread)


def _read(steps: Array, values: Array, reference: Testimony, noise: float, *, one_sided: bool) -> StepCurve:
    """Errors, best step and branches of measured quotients."""
    left_by_noise = (ONE_SIDED_NORM if one_sided else CENTRAL_NORM) * noise / steps
    errors, resolved = _errors(values, reference, left_by_noise)
    # A first best step, from what was seen alone, parts the branches; the branches then tell luck from exactness.
    seen = _with_neighbours(errors)
    roundoff = roundoff_branch(steps, errors, int(np.argmin(np.fmax(seen, left_by_noise))), resolved)
    expected = left_by_noise if roundoff is None else roundoff.errors
    judged = np.fmax(seen, expected)
    best = _best(np.where(np.isfinite(values), judged, np.inf), reference)
    half_gap = float(abs(reference.right[0, 0] - reference.left[0, 0]) / 2)
    return StepCurve(
        steps=steps,
        values=values,
        errors=errors,
        best=best,
        best_error=float(seen[best]) if best >= 0 else float("nan"),
        floor=float(left_by_noise[best]) if best >= 0 else half_gap,
        # Beside a jump quotients grow as 1/step as well, but that is no noise.
        truncation=truncation_branch(steps, errors, best, np.maximum(expected, resolved)) if best >= 0 else None,
        roundoff=roundoff if best >= 0 else None,
        one_sided=one_sided,
        noise=noise,
        reference=reference,
    )


def _best(judged: Array, reference: Testimony) -> int:
    """Index of the best step: of several equally good ones the middle; -1 if no step is any good."""
    least = float(judged.min(initial=np.inf))
    if not np.isfinite(least) or any(reason in NO_DERIVATIVE for reason in reference.reasons.values()):
        return -1
    alike = np.flatnonzero(judged <= ALIKE * least)
    return int(alike[alike.size // 2])


def _errors(values: Array, reference: Testimony, expected: Array) -> tuple[Array, float]:
    """(k,) errors, and the size below which the reference does not resolve them.

    The distance to the reference; at a kink to the farther of its two slopes. Where the reference knows less than the
    quotients do among themselves, the distance to the neighbouring quotients.
    """
    left, right = reference.left[0, 0], reference.right[0, 0]
    if np.isfinite(left) and np.isfinite(right):
        return np.asarray(np.maximum(np.abs(values - left), np.abs(values - right))), 0.0
    value, bound = float(reference.value[0, 0]), float(reference.bound[0, 0])
    change = np.abs(np.diff(values, prepend=values[:1], append=values[-1:]))
    changes = np.maximum(change[:-1], change[1:])
    settled = np.fmax(_with_neighbours(changes), expected)
    least = float(np.nanmin(settled, initial=np.inf))
    if not (np.isfinite(value) and np.isfinite(bound)) or bound > max(abs(value), BLURRED * least):
        return np.asarray(changes), 0.0
    return np.asarray(np.abs(values - value)), 2 * bound


def _with_neighbours(errors: Array) -> Array:
    """(k,): the largest error of each step and its neighbours; infinite where one of them is unknown."""
    padded = np.pad(np.nan_to_num(errors, nan=np.inf), NEIGHBOURS, constant_values=0.0)
    return np.asarray(np.lib.stride_tricks.sliding_window_view(padded, 2 * NEIGHBOURS + 1).max(axis=1))
