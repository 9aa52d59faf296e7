"""The entries of a sparse claim with what was seen of each: parallel arrays in the order of rows."""

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.records.arrays import Array, BoolArray, IntArray

UNDECIDED, CONFIRMED, REFUTED = 0, 1, 2


@dataclass(slots=True, kw_only=True, eq=False)
class EntryTable:
    """Entries that are known of: those of the claim and of the declared pattern, and those found beside them.

    All arrays have shape (k,), ordered by row, then column.

    Attributes
    ----------
    shape : (int, int)
    row, column : ndarray of int
    claim : ndarray
        Claimed value; 0 where nothing is claimed.
    inside : ndarray of bool
        Whether the entry belongs to the pattern, that of the claim or the declared one.
    value, bound, left, right : ndarray
        What was seen, in units of the entry.
    verdict : ndarray of int8
    reason : ndarray of object
    """

    shape: tuple[int, int]
    row: IntArray
    column: IntArray
    claim: Array
    inside: BoolArray
    value: Array = field(default_factory=lambda: np.empty(0))
    bound: Array = field(default_factory=lambda: np.empty(0))
    left: Array = field(default_factory=lambda: np.empty(0))
    right: Array = field(default_factory=lambda: np.empty(0))
    verdict: NDArray[np.int8] = field(default_factory=lambda: np.empty(0, np.int8))
    reason: NDArray[np.object_] = field(default_factory=lambda: np.empty(0, object))

    def __post_init__(self) -> None:
        k = self.row.size
        for name in ("value", "left", "right"):
            setattr(self, name, np.full(k, np.nan))
        self.bound = np.full(k, np.inf)
        self.verdict = np.zeros(k, np.int8)
        self.reason = np.full(k, "", dtype=object)

    @staticmethod
    def of(claim: Any, pattern: Any | None) -> "EntryTable":
        """The stored entries of a claim, and those of a declared pattern; csr arrays of one shape.

        Where a pattern is declared, claimed entries outside it are outside.
        """
        m, n = claim.shape
        rows = np.repeat(np.arange(m), np.diff(claim.indptr))
        key = rows * n + claim.indices
        if pattern is None:
            return EntryTable(
                shape=(m, n),
                row=rows,
                column=claim.indices.astype(np.intp),
                claim=claim.data,
                inside=np.ones(key.size, bool),
            )
        declared = np.repeat(np.arange(m), np.diff(pattern.indptr)) * n + pattern.indices
        whole = np.union1d(key, declared)
        values = np.zeros(whole.size)
        values[np.searchsorted(whole, key)] = claim.data
        row, column = np.divmod(whole, n)
        return EntryTable(shape=(m, n), row=row, column=column, claim=values, inside=np.isin(whole, declared))

    def __len__(self) -> int:
        return int(self.row.size)

    @property
    def key(self) -> IntArray:
        """One number for each place, increasing."""
        return self.row * self.shape[1] + self.column

    def find(self, rows: IntArray, columns: IntArray) -> IntArray:
        """Positions of these places in the table; −1 where they are not in it."""
        wanted, key = rows * self.shape[1] + columns, self.key
        at = np.minimum(np.searchsorted(key, wanted), max(key.size - 1, 0))
        if key.size == 0:
            return np.full(wanted.size, -1)
        return np.where(key[at] == wanted, at, -1)

    def add(self, rows: IntArray, columns: IntArray) -> int:
        """Take up places outside the pattern, where zero is claimed; how many were new."""
        wanted = np.unique(rows * self.shape[1] + columns)
        key = self.key
        wanted = wanted[~np.isin(wanted, key)]
        if wanted.size == 0:
            return 0
        at = np.searchsorted(key, wanted)
        row, column = np.divmod(wanted, self.shape[1])
        fresh: dict[str, Any] = {
            "row": row,
            "column": column,
            "claim": 0.0,
            "inside": False,
            "value": np.nan,
            "bound": np.inf,
        }
        fresh |= {"left": np.nan, "right": np.nan, "verdict": UNDECIDED, "reason": ""}
        for name, values in fresh.items():
            setattr(self, name, np.insert(getattr(self, name), at, values))
        return int(wanted.size)

    def drop(self, which: BoolArray) -> None:
        """Forget entries: places that were suspected and hold nothing."""
        for name in ("row", "column", "claim", "inside", "value", "bound", "left", "right", "verdict", "reason"):
            setattr(self, name, getattr(self, name)[~which])

    def product(self, direction: Array, values: Array) -> Array:
        """(m,): these values of the entries, as a matrix, times a direction (n,)."""
        terms = values * direction[self.column]
        return np.asarray(np.bincount(self.row, weights=terms, minlength=self.shape[0]), dtype=float)

    def root_of_squares(self, direction: Array, values: Array) -> Array:
        """(m,): the root of the sum of squares of the terms of such a product."""
        squares = np.bincount(self.row, weights=(values * direction[self.column]) ** 2, minlength=self.shape[0])
        return np.asarray(np.sqrt(squares))

    def pattern(self, rows: IntArray | None = None, which: BoolArray | None = None) -> Any:
        """The places as a csr_array of some rows, in their order; of some entries only if asked for."""
        from scipy import sparse

        chosen = np.ones(len(self), bool) if which is None else which
        row, column = self.row[chosen], self.column[chosen]
        counts = np.bincount(row, minlength=self.shape[0])
        pointers = np.concatenate([[0], np.cumsum(counts)])
        whole = sparse.csr_array((np.ones(row.size, bool), column, pointers), self.shape)
        return whole if rows is None else whole[rows]

    @property
    def best(self) -> Array:
        """The best known value of each entry: the claim where it is confirmed, else what was seen, else the claim."""
        known = (self.verdict != CONFIRMED) & np.isfinite(self.value)
        values = np.where(known, self.value, self.claim)
        return np.where(np.isfinite(values), values, 0.0)

    @property
    def error(self) -> Array:
        """How far `best` may be off; 0 where nothing was seen."""
        measured = (self.verdict != CONFIRMED) & np.isfinite(self.value) & np.isfinite(self.bound)
        return np.where(measured, self.bound, 0.0)
