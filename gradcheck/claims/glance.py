"""The cheap part of an examination by itself: which of very many entries a quick look confirms, and which look wrong.

What it leaves open is for the whole examination, which can be kept to those entries.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.claims.desk import Desk
from gradcheck.claims.rule import REFUTING_BOUNDS
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.quick_look import close_look, quick_look, wider_look
from gradcheck.witnesses.steps import Room


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Glance:
    """What a quick look along one direction says of many outputs; arrays have shape (m,).

    Attributes
    ----------
    value, bound : ndarray
    confirmed : ndarray of bool
    off : ndarray of bool
        Entries that differ by more than the tolerance and three bounds: a quick look may not refute them.
    excess : ndarray
        The difference in units of what may be; infinite where claim or value is no number.
    cut_short : bool
        Whether the budget or the time ended; nothing is known then.
    """

    value: Array
    bound: Array
    confirmed: BoolArray
    off: BoolArray
    excess: Array
    cut_short: bool


def glance(
    base: Array,
    direction: IntArray,
    claim: Array,
    room: Room,
    centre: Array,
    typical: Array,
    *,
    rel_tol: float,
    abs_tol: float | Array,
    unit_roundoff: float,
    magnitude: Array,
) -> Inquiry[Glance]:
    """A quick look at one column (m, 1) of a claim; parameters as in `examine`, for a single direction."""
    desk = Desk(claim, centre, typical, rel_tol, abs_tol, unit_roundoff, magnitude)
    only = np.zeros(1, dtype=np.intp)
    seen = yield from quick_look(base, direction, room, centre)
    if not seen.cut_short:
        desk.hear(seen.testimony, only, final=False)
        if desk.open_columns().size:
            desk.hear((yield from wider_look(base, direction, room, centre, seen, only)), only, final=False)
        if desk.confirmed.any():
            desk.doubt((yield from close_look(base, direction, room, claim, centre)))
    value, bound = desk.value[:, 0], desk.bound[:, 0]
    with np.errstate(invalid="ignore", over="ignore"):
        allowed = desk.tolerance(only).of(claim, desk.value)[:, 0] + REFUTING_BOUNDS * bound
        gap = np.abs(claim[:, 0] - value)
        excess = np.where(allowed > 0, gap / np.where(allowed > 0, allowed, 1.0), np.where(gap > 0, np.inf, 0.0))
    excess = np.where(np.isfinite(claim[:, 0]) & ~np.isnan(excess), excess, np.inf)
    off = ~desk.confirmed[:, 0] & np.isfinite(bound) & (excess > 1)
    return Glance(
        value=value,
        bound=bound,
        confirmed=desk.confirmed[:, 0],
        off=off,
        excess=excess,
        cut_short=seen.cut_short,
    )
