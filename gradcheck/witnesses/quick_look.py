"""The cheap difference witness: three pairs a direction, enough to confirm most right claims.

Central differences at steps of ratio 2 and Richardson's extrapolation in h² (Richardson 1911). It is never the last
word on a claim it does not confirm.
"""

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Request, Status
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.finite_difference import SOURCE
from gradcheck.witnesses.polynomial_fit import ROUNDING
from gradcheck.witnesses.steps import Room, rounded_half_width
from gradcheck.witnesses.testimony import Testimony

#: Largest step in units of the variable's size. Not a round number: on a staircase whose stairs are a round part of x,
#: round steps go from stair to stair and see a straight line.
STEP = 0.01 * 0.8637
#: A variable this much smaller than its typical size is stepped as if it were larger.
SMALLEST_SHARE = 0.1
#: Step of the close look in units of the variables' sizes; what it may be off by rounding, in units in the last place,
#: and as a share of its terms.
CLOSE, CLOSE_DEVIATIONS, CLOSE_SHARE = 2.0**-20, 30.0, 1e-6
#: Half-width of the bound in standard deviations of rounding.
DEVIATIONS = 8.0
#: Weights of the three quotients (steps h, h/2, h/4) in the extrapolated value: exact to order 6.
_VALUE = np.array([1.0, -20.0, 64.0]) / 45
#: Their weights in the difference of the two extrapolated values of order 4, over 15: the error of the better of the
#: two.
_CHANGE = np.array([1.0, -5.0, 4.0]) / 45
#: Rounding of the value in units of (rounding of f)/h, each quotient having 1/(√2·step).
#: Weights of second differences at steps h, h/2, h/4 that leave only a part ∝ h (a kink at the point): k·h.
_KINK = np.array([1.0, -20.0, 64.0]) / 7
#: Standard deviation of k·h for independent errors of size 1: three values each time, the middle one counted twice.
_KINK_NOISE = float(np.sqrt(6 * np.sum(_KINK**2)))
_AMPLIFICATION = float(np.sqrt(np.sum((_VALUE * np.array([1.0, 2.0, 4.0])) ** 2) / 2))


def quick_look(base: Array, directions: Directions, room: Room, centre: Array) -> Inquiry[Testimony]:
    """Value ± bound along each direction from six evaluations.

    Parameters
    ----------
    base, directions, room, centre
        As in `finite_difference`.

    Returns
    -------
    Testimony
        Bound infinite where the bounds leave no room on both sides or the model fails. The bound covers truncation,
        rounding and a kink at the point (central differences give its mean slope for every step, so this must be asked
        for), not noise inside the model: use it to confirm, never to refute.
    """
    d, m = len(directions), centre.size
    wanted = STEP * np.maximum(room.scale, SMALLEST_SHARE * room.typical)
    narrow = np.minimum(room.below, room.above)
    able = narrow >= 0.1 * wanted
    value, bound = np.full((d, m), np.nan), np.full((d, m), np.inf)
    step = np.full((d, m), np.nan)
    rows = np.flatnonzero(able)
    if rows.size == 0:
        return Testimony(value=value, bound=bound, source=SOURCE)
    h = rounded_half_width(np.minimum(wanted, narrow)[rows], room.grain[rows])
    offsets = h[:, None] * np.array([1.0, -1.0, 0.5, -0.5, 0.25, -0.25])
    moved = offsets
    if directions.ndim == 1:
        x = base[directions[rows]][:, None]
        moved = (x + offsets) - x
    reply = yield Request(base=base, directions=directions[rows], offsets=moved)
    up, down = reply.values[:, 0::2], reply.values[:, 1::2]
    with np.errstate(invalid="ignore", over="ignore"):
        quotients = (up - down) / (moved[:, 0::2] - moved[:, 1::2])[:, :, None]
        value[rows] = np.einsum("k,dkm->dm", _VALUE, quotients)
        change = np.abs(np.einsum("k,dkm->dm", _CHANGE, quotients))
        bend = np.abs(np.einsum("k,dkm->dm", _KINK, up + down - 2 * centre)) / h[:, None]
        largest = np.maximum(np.abs(reply.values).max(axis=1), np.abs(centre))
        floor = ROUNDING * np.spacing(np.where(largest > 0, largest, float(np.abs(centre).max()) or 1.0))
    # Where the values of an output cancel, its rounding is larger than their size tells; the parts of second
    # differences that belong to no smooth function show it, and the median over all directions is not misled by a kink
    # in one.
    with np.errstate(invalid="ignore"):
        heard = _median(bend * h[:, None])
    sigma = np.fmax(floor, heard / _KINK_NOISE / 0.67)
    rounding = DEVIATIONS * _AMPLIFICATION * sigma / h[:, None]
    works: BoolArray = np.asarray(reply.finite.all(axis=1))
    good = works[:, None] & np.isfinite(value[rows])
    bound[rows] = np.where(good, 1.5 * change + bend / 2 + rounding, np.inf)
    step[rows] = h[:, None]
    refused = (reply.status == Status.REFUSED).any(axis=1)
    reasons = {(int(rows[i]), j): "the budget was spent" for i in np.flatnonzero(refused) for j in range(m)}
    return Testimony(value=value, bound=bound, step=step, source=SOURCE, spent=reply.spent, reasons=reasons)


def close_look(base: Array, columns: IntArray, room: Room, claim: Array, centre: Array) -> Inquiry[BoolArray]:
    """Outputs whose slope close to the point is not what a claim says along one direction that moves all variables.

    All steps of a quick look are wide beside a narrow feature at the point (a resonance, a saturation): it sees the
    slope around the feature. Two evaluations for all variables together find that out.

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : ndarray of int, shape (d,)
    room : Room
        Along these coordinates.
    claim : ndarray, shape (m, d)
    centre : ndarray, shape (m,)

    Returns
    -------
    ndarray of bool, shape (m,)
        False where nothing speaks against the claim, or the bounds or the model leave no room for a pair of values.
    """
    reach = np.minimum(room.below, room.above) / CLOSE
    signs = np.where(np.arange(columns.size) % 2 == 0, 1.0, -1.0)
    row = np.zeros(base.size)
    row[columns] = signs * np.minimum(room.scale, reach)
    reply = yield Request(base=base, directions=row[None, :], offsets=np.array([[CLOSE, -CLOSE]]))
    if not reply.finite.all():
        return np.zeros(centre.size, bool)
    slope = (reply.values[0, 0] - reply.values[0, 1]) / (2 * CLOSE)
    with np.errstate(invalid="ignore", over="ignore"):
        terms = np.where(np.isfinite(claim), claim, 0.0) * row[columns]
        # Rounding of f, and of every variable, over the small step; the moves are the variables' own sizes.
        rounding = CLOSE_DEVIATIONS * np.finfo(float).eps * (np.abs(centre) + np.abs(terms).sum(axis=1)) / CLOSE
        apart = np.abs(slope - terms.sum(axis=1)) > rounding + CLOSE_SHARE * np.abs(terms).sum(axis=1)
    result: BoolArray = apart
    return result


def _median(values: Array) -> Array:
    """Median over the directions of the finite values (d, m); 0 where there are none."""
    finite = np.isfinite(values)
    ordered = np.sort(np.where(finite, values, np.inf), axis=0)
    middle = np.maximum(finite.sum(axis=0) - 1, 0) // 2
    median = np.take_along_axis(ordered, middle[None, :], axis=0)[0]
    return np.where(np.isfinite(median), median, 0.0)
