"""Which column of a row is at fault: read from directions that are the same but for weights that tell positions.

If one entry (i, j) of row i is off by e, a direction d is off by e·d_j, and the same direction with every move
multiplied by a weight p by e·d_j·p_j: the quotient is the weight, and the weight tells j. With an entry of the pattern
in the same group, whose value is not known either, two more weightings eliminate it (the method of Prony 1795 for a sum
of two powers, one of them known).
"""

from collections.abc import Sequence

import numpy as np

from gradcheck.claims.entry_table import EntryTable
from gradcheck.records.arrays import Array, BoolArray, IntArray

#: A quotient tells a column if it is off by no more than so many of its bounds.
WITHIN = 1.5
#: What is off by less than so many bounds is not searched.
APART = 3.0
#: Columns on each side of a quotient that are looked at. Where more fit, the quotient tells nothing.
NEIGHBOURS = 4

#: A direction (n,), what it leaves unexplained of each row, and what may be left: (m,) each.
Evidence = tuple[Array, Array, Array]


def single_faults(
    table: EntryTable,
    rows: IntArray,
    evidence: Sequence[Evidence],
    weighted: tuple[Array, Array],
    weights: Array,
    columns: BoolArray,
    *,
    most: int = 2 * NEIGHBOURS,
) -> tuple[IntArray, IntArray, BoolArray]:
    """Columns at which one single fault explains all that is seen of a row.

    Parameters
    ----------
    table : EntryTable
    rows : ndarray of int
        Rows that disagree.
    evidence : sequence of (direction, gap, slack)
        The first one is that of the weighted direction without its weights.
    weighted : (gap, slack)
        Of the weighted direction.
    weights : ndarray, shape (n,)
    columns : ndarray of bool, shape (n,)
        Columns that were moved.
    most : int
        Candidates outside the pattern of one row.

    Returns
    -------
    rows, columns : ndarray of int
        The candidates: of a row with fitting entries in its pattern the best one of them, else places beside it.
    outside : ndarray of bool
        Which are such places.
    """
    inner_rows, inner_columns = _fitting_entries(table, rows, evidence, weighted, weights, columns)
    rest = rows[~np.isin(rows, inner_rows)]
    direction, gap, slack = evidence[0]
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        quotient = weighted[0][rest] / gap[rest]
        within = WITHIN * (weighted[1][rest] + np.abs(quotient) * slack[rest]) / np.abs(gap[rest])
    row, column = _near(rest, quotient, within, weights, columns & (direction != 0))
    fits = _consistent(row, column, evidence) & (table.find(row, column) < 0)
    row, column = _first_of_each(row[fits], column[fits], most)
    found_rows, found_columns = np.concatenate([inner_rows, row]), np.concatenate([inner_columns, column])
    return found_rows, found_columns, np.arange(found_rows.size) >= inner_rows.size


def _fitting_entries(
    table: EntryTable,
    rows: IntArray,
    evidence: Sequence[Evidence],
    weighted: tuple[Array, Array],
    weights: Array,
    columns: BoolArray,
) -> tuple[IntArray, IntArray]:
    """Of each row the entry of the pattern that fits best, if any fits."""
    wanted = np.zeros(table.shape[0], bool)
    wanted[rows] = True
    direction, gap, slack = evidence[0]
    own = np.flatnonzero(wanted[table.row] & columns[table.column] & (direction[table.column] != 0))
    row, column = table.row[own], table.column[own]
    with np.errstate(invalid="ignore"):
        off = np.abs(weighted[0][row] - weights[column] * gap[row])
        allowed = WITHIN * (weighted[1][row] + weights[column] * slack[row])
        fits = np.isfinite(off) & (off <= allowed) & _consistent(row, column, evidence)
    row, column, off = row[fits], column[fits], off[fits]
    order = np.lexsort((off, row))
    return _first_of_each(row[order], column[order], 1)


def _consistent(row: IntArray, column: IntArray, evidence: Sequence[Evidence]) -> BoolArray:
    """Candidates at which all directions see an error of one size."""
    fits = np.ones(row.size, bool)
    direction, gap, slack = evidence[0]
    for other, apart, spread in evidence[1:]:
        with np.errstate(invalid="ignore"):
            off = np.abs(apart[row] * direction[column] - gap[row] * other[column])
            allowed = spread[row] * np.abs(direction[column]) + slack[row] * np.abs(other[column])
            # Where a direction saw nothing it does not object.
            fits &= (off <= WITHIN * allowed) | ~np.isfinite(allowed)
    return fits


def _near(
    rows: IntArray, quotient: Array, within: Array, weights: Array, columns: BoolArray
) -> tuple[IntArray, IntArray]:
    """Candidates (rows, columns): the columns whose weights are closest to the quotients, nearest first."""
    allowed = np.flatnonzero(columns)
    if allowed.size == 0 or rows.size == 0:
        return np.empty(0, np.intp), np.empty(0, np.intp)
    order = allowed[np.argsort(weights[allowed])]
    ranked = weights[order]
    known = np.isfinite(quotient) & np.isfinite(within)
    rows, quotient, within = rows[known], quotient[known], within[known] + 1e-12
    # A window that holds more columns than are looked at tells nothing.
    low, high = np.searchsorted(ranked, quotient - within), np.searchsorted(ranked, quotient + within, side="right")
    told = (high > low) & (high - low <= 2 * NEIGHBOURS)
    rows, quotient, low, high = rows[told], quotient[told], low[told], high[told]
    counts = high - low
    place = np.repeat(low, counts) + np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
    which = np.repeat(np.arange(rows.size), counts)
    distance = np.abs(ranked[place] - quotient[which])
    nearest = np.lexsort((distance, which))
    return rows[which[nearest]], order[place[nearest]]


def _first_of_each(rows: IntArray, columns: IntArray, most: int) -> tuple[IntArray, IntArray]:
    """At most so many candidates of each row; rows stand together."""
    if rows.size == 0:
        return rows, columns
    starts = np.flatnonzero(np.concatenate([[True], rows[1:] != rows[:-1]]))
    counts = np.diff(np.append(starts, rows.size))
    kept = np.arange(rows.size) - np.repeat(starts, counts) < most
    return rows[kept], columns[kept]


def faults_of_group(
    table: EntryTable,
    rows: IntArray,
    members: BoolArray,
    plain: Array,
    three: Sequence[tuple[Array, Array]],
    weights: Array,
) -> tuple[IntArray, IntArray]:
    """Places outside the pattern that explain what a group of columns shows of some rows, one a row.

    Parameters
    ----------
    table : EntryTable
        Its entries meet each of these rows at most once in the group.
    rows : ndarray of int, shape (r,)
    members : ndarray of bool, shape (n,)
        The group.
    plain : ndarray, shape (n,)
        The direction that moves it.
    three : three pairs (value, bound), each (r,)
        Along the direction, along it times the weights, and along it times their squares.
    weights : ndarray, shape (n,)

    Returns
    -------
    rows, columns : ndarray of int
        Candidates; a few columns a row where the weights leave the choice.
    """
    place = np.full(table.shape[0], -1)
    place[rows] = np.arange(rows.size)
    own = np.flatnonzero((place[table.row] >= 0) & members[table.column])
    known = np.zeros(rows.size)
    filled = np.zeros(rows.size, bool)
    known[place[table.row[own]]] = weights[table.column[own]]
    filled[place[table.row[own]]] = True
    (a, of_a), (b, of_b), (c, of_c) = three
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        first, of_first = np.where(filled, b - known * a, a), np.where(filled, of_b + known * of_a, of_a)
        second, of_second = np.where(filled, c - known * b, b), np.where(filled, of_c + known * of_b, of_b)
        apart = np.isfinite(of_first) & np.isfinite(of_second) & (np.abs(first) > APART * of_first)
        quotient = second / first
        within = WITHIN * (of_second + np.abs(quotient) * of_first) / np.abs(first)
    at = np.flatnonzero(apart)
    row, column = _near(rows[at], quotient[at], within[at], weights, members & (plain != 0))
    new = table.find(row, column) < 0
    return row[new], column[new]
