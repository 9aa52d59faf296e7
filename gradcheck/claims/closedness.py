"""Is a part of a claim the derivative of any function at all?

The derivatives of a gradient are symmetric (Schwarz 1873). Where several refuted entries of a claim keep to that, their
formulas belong together: they differentiate another function than the model, one that lacks a term, say.
Entries with slips of their own are not symmetric. Only the claim is called, at eight points; the model never.
"""

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request, Status
from gradcheck.records.arrays import Array, IntArray

#: Steps, in units of each variable's size: differences at two widths, extrapolated.
STEP = 1e-3
#: Both sides must be this much above what the differences leave in doubt.
SIGNAL = 50.0
#: Relative difference up to which both sides are the same.
SAME = 1e-5


def derivative_of_something(
    base: Array, columns: IntArray, row: int, scale: Array, lower: Array, upper: Array, kind: str
) -> Inquiry[bool | None]:
    """Whether the claim's derivatives among these columns are symmetric.

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : ndarray of int
        Two at least.
    row : int
        Of the claim.
    scale, lower, upper : ndarray, shape (n,)
        Sizes and bounds of all variables.
    kind : str
        Which claim is called.

    Returns
    -------
    bool or None
        None if nothing can be said: too near a bound, a claim that raises, or variables that do not interact.
    """
    if columns.size < 2:
        return None
    # Disjoint sets, so that what one variable does alone, which is always symmetric, is not seen.
    one, other = (_weights(columns[part::2], scale) for part in (0, 1))
    sides, doubts = [], []
    for along, seen in ((one, other), (other, one)):
        slopes, largest = [], 0.0
        for step in (STEP, STEP / 2):
            ahead = yield from _claimed(base + step * along, lower, upper, kind, row)
            behind = yield from _claimed(base - step * along, lower, upper, kind, row)
            if ahead is None or behind is None:
                return None
            largest = float(np.abs(ahead) @ np.abs(seen))
            slopes.append(float((ahead - behind) @ seen) / (2 * step))
        sides.append((4 * slopes[1] - slopes[0]) / 3)
        doubts.append(abs(slopes[1] - slopes[0]) * 4 * STEP**2 + 1e-15 * largest / STEP)
    size, doubt = max(map(abs, sides)), max(doubts)
    if not np.isfinite(size) or size <= SIGNAL * doubt:
        return None
    return bool(abs(sides[0] - sides[1]) <= SAME * size + doubt)


def _weights(columns: IntArray, scale: Array) -> Array:
    """A direction that moves each of these variables by another share of its size."""
    weights = np.zeros(scale.size)
    weights[columns] = scale[columns] * (0.6 + 0.4 * np.cos(1.0 + 2.4 * np.arange(columns.size)))
    return weights


def _claimed(point: Array, lower: Array, upper: Array, kind: str, row: int) -> Inquiry[Array | None]:
    """One row of the claim at a point; None outside the bounds, or where it raises."""
    if (point < lower).any() or (point > upper).any():
        return None
    reply = yield Request(
        base=point,
        directions=np.zeros(1, dtype=np.intp),
        offsets=np.zeros((1, 1)),
        source=f"claim:{kind}",
    )
    return np.asarray(reply.values[0][row]) if int(reply.status[0, 0]) == Status.OK else None
