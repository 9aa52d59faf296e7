"""Which columns of a sparse Jacobian may move together: structurally orthogonal ones share a direction.

Columns that have no row in common can be told apart in one directional derivative (Curtis, Powell & Reid 1974). To
divide them into few groups is to colour the graph in which columns with a common row are neighbours (Coleman & Moré
1983): greedily, each column taking the first group that none of its rows has met. The rows remember the groups they
have met as the bits of one number, so that the work is proportional to the stored entries.

A row with very many entries would force as many groups upon all the others; such rows are set apart.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np

from gradcheck.records.arrays import Array, BoolArray, IntArray

#: A row is set apart if it has more entries than this, and than so many times what most rows have.
LEAST_DENSE, DENSE_TIMES = 24, 3.0
#: "Most rows": this share of them.
MOST_ROWS = 0.98


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Colouring:
    """Groups of structurally orthogonal columns.

    Attributes
    ----------
    colour : ndarray of int, shape (n,)
        The group of each column; −1 for columns that are not to be moved.
    count : int
        How many groups.
    """

    colour: IntArray
    count: int


def dense_rows(pattern: Any) -> BoolArray:
    """Rows (m,) of a pattern that have so many entries that they are better set apart.

    Parameters
    ----------
    pattern : csr_array, shape (m, n)
    """
    counts = np.diff(pattern.indptr)
    if counts.size == 0:
        return np.zeros(0, bool)
    usual = np.quantile(counts, MOST_ROWS, method="lower")
    if counts.size < 1 / (1 - MOST_ROWS):  # among few rows one is a large share
        usual = np.median(counts)
    result: BoolArray = counts > max(LEAST_DENSE, DENSE_TIMES * float(usual))
    return result


def coloured(
    pattern: Any, columns: BoolArray, *, most: int | None = None, order: IntArray | None = None
) -> Colouring | None:
    """Groups of columns such that no row of the pattern meets a group twice.

    Parameters
    ----------
    pattern : csr_array, shape (m, n)
    columns : ndarray of bool, shape (n,)
        Which columns are to be moved.
    most : int, optional
        More groups are of no use: None is returned then.
    order : ndarray of int, shape (n,), optional
        In which order to take the columns, all of them; for other groups than the usual ones.

    Returns
    -------
    Colouring or None

    Notes
    -----
    The columns are taken in their natural order, which is best possible for bands; where that needs more groups than
    the fullest row has entries, also in the order of falling degree, and the better result counts. It may still be a
    few groups above the least possible number, which is hard to find in general.

    Examples
    --------
    >>> import numpy
    >>> from scipy import sparse
    >>> tridiagonal = sparse.diags_array([1.0, 1.0, 1.0], offsets=[-1, 0, 1], shape=(6, 6)).tocsr()
    >>> coloured(tridiagonal, numpy.ones(6, bool)).count
    3
    """
    fullest = int(np.diff(pattern.indptr).max(initial=0))
    if most is not None and fullest > most and columns.all():
        return None
    by_column = pattern.tocsc()
    pointers, rows = by_column.indptr.tolist(), by_column.indices.tolist()
    if order is not None:
        return _greedy(pointers, rows, order[columns[order]], pattern.shape, most)
    natural = np.flatnonzero(columns)
    found = _greedy(pointers, rows, natural, pattern.shape, most)
    if found is None or found.count > fullest:
        degree = _degrees(pattern, by_column)[natural]
        by_degree = natural[np.argsort(-degree, kind="stable")]
        other = _greedy(pointers, rows, by_degree, pattern.shape, most if found is None else found.count - 1)
        found = other or found
    return found


def _degrees(pattern: Any, by_column: Any) -> Array:
    """(n,): an upper bound of how many other columns share a row with each column."""
    counts = np.diff(pattern.indptr).astype(float)
    columns = np.repeat(np.arange(pattern.shape[1]), np.diff(by_column.indptr))
    return np.asarray(np.bincount(columns, weights=counts[by_column.indices], minlength=pattern.shape[1]), dtype=float)


def _greedy(
    pointers: list[int], rows: list[int], order: IntArray, shape: tuple[int, int], most: int | None
) -> Colouring | None:
    met = [0] * shape[0]
    colour = np.full(shape[1], -1, dtype=np.intp)
    chosen: list[int] = []
    count = 0
    for column in order.tolist():
        own = rows[pointers[column] : pointers[column + 1]]
        taken = 0
        for row in own:
            taken |= met[row]
        bit = ~taken & (taken + 1)  # the lowest bit that is not set
        for row in own:
            met[row] |= bit
        group = bit.bit_length()
        if group > count:
            count = group
            if most is not None and count > most:
                return None
        chosen.append(group - 1)
    colour[order] = chosen
    return Colouring(colour=colour, count=count)
