"""Is a derivative of zero that of a variable without influence, or the flat of a staircase?

On the flat of a staircase (rounded or integer-cast values, counts, argmax) every difference close to the point is zero,
and so is what AD says; an optimizer that believes it never moves. Values farther away tell: where the function changes
there and is flat again, it is a staircase. A part that is switched off (a hinge, a penalty) changes too, but is not
flat there; its zero is right.
"""

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.steps import Room

#: How far to look, in units of the variable's typical size, to each side; no round numbers, for stairs are.
FAR = np.array([1.3719, 0.4313])
#: A second value beside each far one, at this share of the typical size: is the function flat there as well?
BESIDE = 0.0137


def staircases(base: Array, columns: IntArray, room: Room, centre: Array) -> Inquiry[BoolArray]:
    """Outputs that are flat at the point along a variable, and flat on another level farther away.

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : ndarray of int, shape (d,)
        Variables along which no output changes close to the point.
    room : Room
        Along these.
    centre : ndarray, shape (m,)

    Returns
    -------
    ndarray of bool, shape (m, d)
        False where the bounds leave no room, or the model fails.

    Notes
    -----
    Eight evaluations a variable.
    """
    size = room.typical
    up, down = (np.minimum(FAR * size[:, None], side[:, None] / (1 + BESIDE)) for side in (room.above, room.below))
    far = np.concatenate([up, -down], axis=1)
    offsets = np.concatenate([far, far * (1 + BESIDE)], axis=1)
    reply = yield Request(base=base, directions=columns, offsets=offsets)
    k = far.shape[1]
    values, beside = reply.values[:, :k], reply.values[:, k:]
    seen = (reply.finite[:, :k] & reply.finite[:, k:] & (far != 0))[:, :, None]
    with np.errstate(invalid="ignore"):
        changed = seen & (values != centre)
        sloping = seen & (values != beside)
        # Where it slopes at most places the flat at the point is the exception: a part that is switched off.
        stairs = changed.any(axis=1) & (sloping.sum(axis=1) <= changed.sum(axis=1) // 2)
    return np.asarray(stairs.T)
