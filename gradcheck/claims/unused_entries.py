"""Does an output depend on a variable at all, although the entry is zero at the point?

An entry of the pattern that is zero here may be nonzero elsewhere. So the variables are moved far, here and at another
point: an output that does not change by a single bit in any of these values does not depend on them, as far as can be
seen. What changes only far away, from one level to another, is a staircase, whose zero means nothing.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.claims.wide_plateaus import BESIDE, FAR
from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.steps import Room

#: How far the variables are moved at the other point, in units of their moves.
AT_ANOTHER_POINT = np.array([0.2371, -0.1193, 0.0411])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Influence:
    """What became of entries that are zero at the point; arrays of one shape.

    Attributes
    ----------
    changes : ndarray of bool
        The output changed in some value.
    stairs : ndarray of bool
        It is flat at the point, and flat on other levels farther away.
    looked : ndarray of bool
        Whether anything was seen.
    """

    changes: BoolArray
    stairs: BoolArray
    looked: BoolArray

    @staticmethod
    def unknown(size: int) -> "Influence":
        """Where nothing was looked at."""
        return Influence(changes=np.zeros(size, bool), stairs=np.zeros(size, bool), looked=np.zeros(size, bool))


def influence_along(base: Array, direction: Array, room: Room, centre: Array, elsewhere: Array) -> Inquiry[Influence]:
    """Whether m outputs change at all along one direction (1, n), here and at another point.

    Notes
    -----
    Twelve evaluations. What fails there shows nothing.
    """
    up, down = (np.minimum(FAR, side[0] / (1 + BESIDE)) for side in (room.above, room.below))
    far = np.concatenate([up, -down])
    k = far.size
    here = yield Request(base=base, directions=direction, offsets=np.concatenate([far, far * (1 + BESIDE)])[None, :])
    seen = (here.finite[0, :k] & here.finite[0, k:] & (far != 0))[:, None]
    values, beside = here.values[0, :k], here.values[0, k:]
    with np.errstate(invalid="ignore"):
        changed = seen & (values != centre)
        sloping = seen & (values != beside)
        stairs = changed.any(axis=0) & (sloping.sum(axis=0) <= changed.sum(axis=0) // 2)
    # Inwards from wherever the other point is: no value leaves the bounds that the move itself keeps.
    offsets = np.concatenate([[0.0], AT_ANOTHER_POINT * np.where(room.below[0] > 0, 1.0, np.sign(AT_ANOTHER_POINT))])
    moved = np.clip(offsets, -room.below[0] / 2, room.above[0] / 2)
    there = yield Request(base=elsewhere, directions=direction, offsets=moved[None, :])
    with np.errstate(invalid="ignore"):
        differs = there.finite[0, 1:, None] & there.finite[0, :1, None] & (there.values[0, 1:] != there.values[0, 0])
    looked = np.full(centre.size, bool(seen.any()) or bool(there.finite[0].any()))
    return Influence(changes=changed.any(axis=0) | differs.any(axis=0), stairs=stairs, looked=looked)
