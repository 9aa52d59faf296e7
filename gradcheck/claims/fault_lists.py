"""Faults of a sparse claim sorted into lists: missing, unused, wrong, misplaced; and which of them repeat regularly."""

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.claims.entry_table import CONFIRMED, REFUTED, EntryTable
from gradcheck.claims.unused_entries import Influence
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.sparsity import Repetition

#: A value that stands in another place agrees with the entry there to this share, or within the bounds.
SAME_VALUE = 1e-6
#: Fewer faults than this are no repetition.
REPEATED_LEAST = 4
#: So many following faults are looked at for the step to the next one of its kind.
AHEAD = 12
#: Repetitions that are told apart in one list, and the faults among which they are sought.
REPETITIONS_MOST, SOUGHT_MOST = 12, 200_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Faults:
    """Positions in the table.

    Attributes
    ----------
    missing, unused, wrong : ndarray of int
    misplaced : ndarray of int, shape (k, 2)
        A wrong entry, and the missing one whose value it holds.
    """

    missing: IntArray
    unused: IntArray
    wrong: IntArray
    misplaced: IntArray


def faults_of(table: EntryTable, influence: Influence) -> Faults:
    """The lists for an examined table."""
    refuted = table.verdict == REFUTED
    with np.errstate(invalid="ignore"):
        there = np.isfinite(table.bound) & (np.abs(table.value) > 3 * table.bound)
    # A claimed entry outside a declared pattern may be right: then the pattern is wrong.
    missing = ~table.inside & (
        (refuted & (table.claim == 0)) | ((table.claim != 0) & there & (refuted | (table.verdict == CONFIRMED)))
    )
    wrong = refuted & (table.inside | (table.claim != 0)) & ~(missing & (table.claim == 0))
    # Where a value is claimed that should be zero, that value is wrong, and told there.
    unused = table.inside & (table.value == 0) & (table.claim == 0) & influence.looked & ~influence.changes
    places = np.flatnonzero(missing & (table.claim == 0))
    return Faults(
        missing=np.flatnonzero(missing),
        unused=np.flatnonzero(unused),
        wrong=np.flatnonzero(wrong),
        misplaced=_misplaced(table, np.flatnonzero(wrong), places),
    )


def _misplaced(table: EntryTable, wrong: IntArray, missing: IntArray) -> IntArray:
    """Pairs (wrong, missing) of one row, or one column, where the claim at the first is the derivative at the second.

    Only entries whose own derivative is zero: a value stands where there should be none.
    """
    with np.errstate(invalid="ignore"):
        empty = wrong[np.abs(table.value[wrong]) <= 3 * table.bound[wrong]]
    pairs: list[tuple[int, int]] = []
    taken: set[int] = set()
    for axis in (table.row, table.column):
        order = missing[np.argsort(axis[missing], kind="stable")]
        low = np.searchsorted(axis[order], axis[empty])
        high = np.searchsorted(axis[order], axis[empty], side="right")
        for i in np.flatnonzero(high > low).tolist():
            place = int(empty[i])
            if place in taken:
                continue
            beside = order[low[i] : high[i]]
            fits = beside[_same(table, place, beside) & ~np.isin(beside, list(taken))]
            if fits.size:
                # Of several that fit the nearest: a slip of one or two places is likelier than one of many.
                away = np.abs(table.row[fits] - table.row[place]) + np.abs(table.column[fits] - table.column[place])
                found = int(fits[away.argmin()])
                pairs.append((place, found))
                taken |= {place, found}
    return np.array(sorted(pairs), dtype=np.intp).reshape(-1, 2)


def _same(table: EntryTable, place: int, others: IntArray) -> BoolArray:
    claimed = table.claim[place]
    off = np.abs(table.value[others] - claimed)
    return np.asarray(off <= np.maximum(SAME_VALUE * abs(claimed), 3 * table.bound[others]))


def repetitions(kind: str, rows: IntArray, columns: IntArray) -> tuple[list[Repetition], BoolArray]:
    """Faults that repeat with a step of rows and columns, the longest first; and which faults these are.

    A model that is discretised in time or over cells makes the same mistake in every step: rows r, r + s,
    r + 2s, ... with columns c, c + t, c + 2t, ...

    Parameters
    ----------
    kind : str
    rows, columns : ndarray of int, shape (k,)
        Places of faults, ordered by row.
    """
    left = np.ones(rows.size, bool)
    if rows.size > SOUGHT_MOST:
        return [], ~left
    found: list[Repetition] = []
    while left.sum() >= REPEATED_LEAST and len(found) < REPETITIONS_MOST:
        at = np.flatnonzero(left)
        best = max(
            (_longest(rows[at], columns[at], step) for step in _likely_steps(rows[at], columns[at])),
            key=lambda chain: chain.size,
            default=np.empty(0, np.intp),
        )
        if best.size < REPEATED_LEAST:
            break
        chain = at[best]
        first, second = int(chain[0]), int(chain[1])
        found.append(
            Repetition(
                kind=kind,
                row=int(rows[first]),
                column=int(columns[first]),
                row_step=int(rows[second] - rows[first]),
                column_step=int(columns[second] - columns[first]),
                count=int(chain.size),
            )
        )
        left[chain] = False
    return found, ~left


def _likely_steps(rows: IntArray, columns: IntArray) -> Sequence[tuple[int, int]]:
    """Steps (rows, columns) that lead from many faults to another one; rows never go back."""
    steps: Counter[tuple[int, int]] = Counter()
    for ahead in range(1, min(AHEAD, rows.size - 1) + 1):
        down, right = rows[ahead:] - rows[:-ahead], columns[ahead:] - columns[:-ahead]
        pairs, counts = np.unique(np.stack([down, right]), axis=1, return_counts=True)
        common = np.argsort(-counts, kind="stable")[:4]
        steps.update({(int(pairs[0, i]), int(pairs[1, i])): int(counts[i]) for i in common})
    return [step for step, _ in steps.most_common(6)]


def _longest(rows: IntArray, columns: IntArray, step: tuple[int, int]) -> IntArray:
    """Positions of the longest chain of faults that are one such step apart."""
    down, right = step
    if step == (0, 0):
        return np.empty(0, np.intp)
    # Where on its line a fault stands, and what all faults of one line have in common.
    if down:
        place, line = rows // down, np.stack([rows % down, columns - right * (rows // down)])
    else:
        place, line = columns // right, np.stack([rows, columns % right])
    order = np.lexsort((place, line[1], line[0]))
    ends = (np.diff(line[:, order]) != 0).any(axis=0) | (np.diff(place[order]) != 1)
    starts = np.concatenate([[0], np.flatnonzero(ends) + 1, [rows.size]])
    longest = int(np.diff(starts).argmax())
    return np.asarray(order[starts[longest] : starts[longest + 1]])


def ratio_in_common(claim: Array, value: Array) -> float:
    """The one factor by which all claims differ from the derivatives; NaN if there is none."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = claim / value
    if not np.isfinite(ratio).all() or ratio.size == 0:
        return float("nan")
    middle = float(np.median(ratio))
    return middle if bool((np.abs(ratio - middle) <= SAME_VALUE * abs(middle)).all()) else float("nan")
