"""Which outputs depend on which variables, from function values alone, in far fewer values than there are variables.

Moving one variable at a time tells it in n values. Moving a random share of them tells, of every output that did not
change by a single bit, that it depends on none of these: with about k variables an output and a share of 1/(k + 1), a
value excludes a place with probability 1/(e·(k + 1)), so that some e·(k + 1)·ln(m·n) values leave hardly anything but
the pattern. This is group testing without going back (Dorfman 1943; the decoder that keeps whatever no test
excludes).

What is seen is the pattern at one point. An entry that is zero there, or too small to change a value, is not in it.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.records.arrays import Array, BoolArray, IntArray

#: Places (outputs times variables) that are held in memory, one byte each.
PLACES_MOST = 4_000_000
#: Values that are asked for together.
AT_ONCE = 12
#: How far the variables move, in units of their moves; no round number.
DISPLACEMENT = 0.0371 * 0.9643
#: The search ends when a false place would have been excluded by the values since the last exclusion but for this
#: probability.
LEFT_OVER = 1e-2
#: It is given up where it would take more than this share of the values that single moves take.
SHARE_MOST = 0.75


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Detected:
    """The pattern that was seen.

    Attributes
    ----------
    rows, columns : ndarray of int
        Its places; of the outputs that were asked about, in their order.
    evaluations : int
    complete : bool
        False where the budget ended, or so many places were left that single moves would be cheaper: then nothing is
        told.
    """

    rows: IntArray
    columns: IntArray
    evaluations: int
    complete: bool


def detect_pattern(
    base: Array, moves: Array, columns: BoolArray, centre: Array, *, entries: float, seed: int = 0
) -> Inquiry[Detected]:
    """The places at which outputs depend on variables.

    Parameters
    ----------
    base : ndarray, shape (n,)
    moves : ndarray, shape (n,)
        How far each variable moves at the most, and which way.
    columns : ndarray of bool, shape (n,)
        Variables that may be moved.
    centre : ndarray, shape (m,)
        m·n at the most `PLACES_MOST`.
    entries : float
        A guess of how many variables an output depends on.
    seed : int

    Returns
    -------
    Detected
    """
    n = columns.size
    rng = np.random.default_rng(seed)
    possible = np.broadcast_to(columns, (centre.size, n)).copy()
    share, spent, quiet = 1 / (entries + 2), 0, 0.0
    while True:
        chosen = columns & (rng.random((AT_ONCE, n)) < share)
        size = moves * rng.uniform(0.5, 1.0, (AT_ONCE, n))
        reply = yield Request(
            base=base, directions=np.where(chosen, size, 0.0), offsets=np.full((AT_ONCE, 1), DISPLACEMENT)
        )
        spent += AT_ONCE
        if reply.refused.any():
            return _nothing(spent)
        same = np.asarray(reply.values[:, 0] == centre)
        before = int(possible.sum())
        for moved, still in zip(chosen, same, strict=True):
            possible[np.ix_(still, moved)] = False
        removed = before - int(possible.sum())
        unchanged = float(np.clip(same.mean(), 1e-3, 1 - 1e-3))
        quiet = 0.0 if removed else quiet + AT_ONCE * share * unchanged
        if quiet >= -np.log(LEFT_OVER):
            rows, places = np.nonzero(possible)
            return Detected(rows=rows, columns=places, evaluations=spent, complete=True)
        if spent > SHARE_MOST * columns.sum():
            return _nothing(spent)
        depends = np.log(unchanged) / np.log1p(-share)
        share = float(np.clip(1 / (depends + 1), 1 / n, 0.5))


def _nothing(spent: int) -> Detected:
    empty = np.empty(0, np.intp)
    return Detected(rows=empty, columns=empty, evaluations=spent, complete=False)
