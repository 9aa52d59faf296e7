"""Sparse Jacobian claims and declared patterns: what may come in, and how it travels.

Through the layers behind the gate a sparse claim travels as its stored entries, one record (row, column, value) each,
in the order of rows: plain data that can be cached and sent, and never more than a few times what the user holds.
"""

import math
import sys
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import DerivativeShapeError, UsageError
from gradcheck.records.arrays import Array, IntArray
from gradcheck.wording import count

#: One stored entry of a sparse matrix.
STORED = np.dtype([("row", np.intp), ("column", np.intp), ("value", float)])


def is_sparse(value: Any) -> bool:
    """Whether this is a sparse matrix or array of scipy, of any format."""
    # Who holds a sparse matrix has loaded scipy.sparse; loading it here would slow every start down.
    loaded = sys.modules.get("scipy.sparse")
    return loaded is not None and bool(loaded.issparse(value))


def is_stored(values: NDArray[Any]) -> bool:
    """Whether these values are the stored entries of a sparse claim."""
    return values.dtype == STORED


def stored_entries(
    kind: str, raw: Any, columns: int, output_shape: tuple[int, ...], input_shape: tuple[int, ...]
) -> tuple[NDArray[Any], tuple[str, ...]]:
    """The stored entries (k,) of a sparse claim, row by row, and what is to be said about them.

    Parameters
    ----------
    kind : str
    raw : sparse matrix or array
        Of any format; it is not changed.
    columns : int
        n.
    output_shape, input_shape : tuple of int
        Of what the model returns and takes; the claim is ``(m, n)`` with both flat.

    Raises
    ------
    DerivativeShapeError
        If the shape does not fit; names both shapes, and says whether the transpose would fit.
    UsageError
        If the entries are no real numbers, or it is a gradient.

    Notes
    -----
    Entries that are stored more than once are summed, as every sparse format means it. Explicit zeros stay: they belong
    to the pattern (but for those that fill the blocks of a block matrix). NaN and infinities stay, to be refuted.
    """
    _refuse_shape(kind, tuple(int(size) for size in raw.shape), columns, output_shape, input_shape)
    if raw.dtype.kind == "c":
        raise UsageError(f"the {kind} claim is complex ({raw.dtype}); derivatives of a real model are real")
    if raw.dtype.kind not in "fiub":
        raise UsageError(f"the {kind} claim is a sparse matrix of {raw.dtype}; real numbers are needed")
    flat = raw.tocoo()
    row, column = (np.asarray(axis, dtype=np.intp) for axis in (flat.row, flat.col))
    value = np.asarray(flat.data, dtype=float)
    if raw.format == "bsr":
        # Blocks cannot but store zeros; they say nothing about a pattern.
        row, column, value = row[value != 0], column[value != 0], value[value != 0]
    notices = []
    order = np.lexsort((column, row))
    row, column, value = row[order], column[order], value[order]
    again = np.zeros(row.size, bool)
    again[1:] = (row[1:] == row[:-1]) & (column[1:] == column[:-1])
    if again.any():
        starts = np.flatnonzero(~again)
        value = np.add.reduceat(value, starts)
        row, column = row[starts], column[starts]
        times = int(again.sum())
        notices.append(
            f"the {kind} claim stores {count(times, 'entry', 'entries')} more than once; what stands in one place was "
            "summed, as sparse matrices mean it"
        )
    zeros = int((value == 0).sum())
    if zeros:
        notices.append(
            f"the {kind} claim stores {count(zeros, 'explicit zero')}: kept as part of its pattern, claimed zero here"
        )
    entries = np.empty(row.size, dtype=STORED)
    entries["row"], entries["column"], entries["value"] = row, column, value
    return entries, tuple(notices)


def dense_of(entries: NDArray[Any], rows: int, columns: int) -> Array:
    """The claim (m, n) in full; for small ones."""
    whole = np.zeros((rows, columns))
    whole[entries["row"], entries["column"]] = entries["value"]
    return whole


def matrix_of(entries: NDArray[Any], rows: int, columns: int) -> Any:
    """The claim as a `scipy.sparse.csr_array` (m, n); explicit zeros are stored."""
    from scipy import sparse

    return sparse.csr_array((entries["value"], entries["column"], _pointers(entries["row"], rows)), (rows, columns))


def _pointers(row: IntArray, rows: int) -> IntArray:
    return np.concatenate([[0], np.cumsum(np.bincount(row, minlength=rows))]).astype(np.intp)


def _refuse_shape(
    kind: str, found: tuple[int, ...], columns: int, output_shape: tuple[int, ...], input_shape: tuple[int, ...]
) -> None:
    expected = (math.prod(output_shape), columns)
    if found == expected or (kind == "gradient" and found == expected[:1]):
        return
    returns = "a number" if output_shape == () else f"shape {output_shape}"
    text = (
        f"the {kind} claim is a sparse matrix of shape {found}, but x has shape {input_shape} and the model returns "
        f"{returns}, so shape {expected} is expected"
    )
    if found[::-1] == expected:
        text += "; its transpose would fit: return `claim.T`"
    raise DerivativeShapeError(text + ".", name=kind, expected=expected, found=found)


def declared_pattern(pattern: Any, rows: int, columns: int) -> Any:
    """A declared pattern as a `scipy.sparse.csr_array` (m, n) of True at the entries that may differ from zero.

    Parameters
    ----------
    pattern : sparse matrix, or boolean array (m, n)
        Of a sparse matrix every stored entry counts, whatever its value; of an array what is True (or not zero).

    Raises
    ------
    UsageError
        If it has another shape (both are named, and whether the transpose fits) or is no pattern.
    """
    from scipy import sparse

    if is_sparse(pattern):
        flat = pattern.tocoo()
        shape, row, column = tuple(int(size) for size in flat.shape), flat.row, flat.col
    else:
        try:
            array = np.asarray(pattern)
        except ValueError:
            array = np.empty(0, object)
        if array.ndim != 2 or array.dtype.kind not in "biuf":
            raise UsageError(
                f"pattern is {pattern!r:.80} ({type(pattern).__name__}); give a scipy.sparse matrix or a boolean array "
                f"of shape ({rows}, {columns})"
            )
        shape = array.shape
        row, column = np.nonzero(array)
    if shape != (rows, columns):
        fits = "; its transpose would fit: pattern.T" if shape[::-1] == (rows, columns) else ""
        raise UsageError(f"pattern has shape {shape}, but the Jacobian has shape ({rows}, {columns}){fits}")
    place = np.unique(row.astype(np.intp) * columns + column.astype(np.intp))
    row, column = np.divmod(place, columns)
    return sparse.csr_array((np.ones(place.size, bool), column, _pointers(row, rows)), (rows, columns))
