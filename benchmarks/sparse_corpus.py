"""Models with sparse Jacobians of known shape, their right derivatives, and mistakes planted in them.

The Jacobians are written down entry by entry, not made by the functions: each term of a model is a sum over its edges
(row, column), with a nonlinear coupling between neighbouring columns of a row.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import sparse

#: Mistakes that are planted together, one in each of three rows.
PLANTED = ("wrong", "misplaced", "missing")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SparseModel:
    """A function (n,) -> (m,) with its right Jacobian and its point."""

    name: str
    function: Callable[[Any], Any]
    jacobian: Callable[[Any], Any]
    x0: Any


def model_of(name: str, pattern: Any, seed: int) -> SparseModel:
    """Row i is the sine of a weighted sum over its entries plus weighted squares of its variables.

    The sum couples all variables of a row; every entry of the pattern is nonzero at almost every point.
    """
    rng = np.random.default_rng(seed)
    pattern = sparse.csr_array(pattern)
    pattern.sum_duplicates()
    shape = pattern.shape
    rows = np.repeat(np.arange(shape[0]), np.diff(pattern.indptr))
    counts = np.diff(pattern.indptr)[rows]
    linear = pattern.copy()
    linear.data = rng.uniform(0.2, 1.0, pattern.nnz) * rng.choice([-1.0, 1.0], pattern.nnz) / np.sqrt(counts)
    square = pattern.copy()
    square.data = rng.uniform(0.2, 1.0, pattern.nnz) / np.sqrt(counts)
    x0 = rng.uniform(0.5, 2.0, shape[1])

    def function(x: Any) -> Any:
        return np.sin(linear @ x) + square @ (x * x)

    def jacobian(x: Any) -> Any:
        result = linear.copy()
        result.data = np.cos(linear @ x)[rows] * linear.data + 2 * square.data * x[square.indices]
        return result

    return SparseModel(name=name, function=function, jacobian=jacobian, x0=x0)


def band(n: int, width: int) -> Any:
    """A band of `width` diagonals."""
    half = width // 2
    diagonals = [np.ones(n - abs(k)) for k in range(-half, half + 1)]
    return sparse.diags_array(diagonals, offsets=range(-half, half + 1), shape=(n, n))


def five_point_grid(n: int) -> Any:
    """The couplings of a square grid of about n points to their four neighbours."""
    side = round(n**0.5)
    line, one = band(side, 3), sparse.eye_array(side)
    return sparse.kron(line, one) + sparse.kron(one, line)


def arrow(n: int) -> Any:
    """A tridiagonal matrix with a full column, and two rows that depend on every variable."""
    whole = sparse.coo_array(band(n, 3))
    rows, columns = np.arange(n), np.zeros(n, np.intp)
    full = [np.full(n, row) for row in (n // 3, n // 2)]
    return sparse.coo_array(
        (
            np.ones(whole.nnz + 3 * n),
            (
                np.concatenate([whole.row, rows, *full]),
                np.concatenate([whole.col, columns, np.arange(n), np.arange(n)]),
            ),
        ),
        shape=(n, n),
    )


def scattered(n: int, seed: int) -> Any:
    """Four entries a row in random places, and the diagonal."""
    rng = np.random.default_rng(seed)
    rows = np.repeat(np.arange(n), 4)
    places = np.concatenate([np.arange(n), rows]), np.concatenate([np.arange(n), rng.integers(0, n, 4 * n)])
    return sparse.coo_array((np.ones(5 * n), places), shape=(n, n))


SHAPES: dict[str, Callable[[int, int], Any]] = {
    "tridiagonal": lambda n, seed: band(n, 3),
    "band 5": lambda n, seed: band(n, 5),
    "band 7": lambda n, seed: band(n, 7),
    "5-point grid": lambda n, seed: five_point_grid(n),
    "arrow, 2 full rows": lambda n, seed: arrow(n),
    "scattered": lambda n, seed: scattered(n, seed),
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Planted:
    """A wrong claim, and what is wrong with it: (row, column), misplaced ones with where they belong."""

    claim: Any
    wrong: tuple[int, int]
    misplaced: tuple[int, int, int, int]
    missing: tuple[int, int]

    @property
    def places(self) -> set[tuple[int, int]]:
        """Every place at fault."""
        return {self.wrong, self.misplaced[:2], self.misplaced[2:], self.missing}


def planted(right: Any, factor: float, seed: int) -> Planted:
    """Three mistakes in three different rows of a right Jacobian, none in a row with very many entries."""
    rng = np.random.default_rng(seed)
    claim = right.tolil()
    counts = np.diff(right.indptr)
    rows = rng.choice(np.flatnonzero((counts >= 2) & (counts <= 20)), 3, replace=False)

    def some_entry(row: int) -> int:
        return int(rng.choice(right.indices[right.indptr[row] : right.indptr[row + 1]]))

    wrong = int(rows[0]), some_entry(int(rows[0]))
    claim[wrong] *= factor
    row, column = int(rows[1]), some_entry(int(rows[1]))
    own = set(right.indices[right.indptr[row] : right.indptr[row + 1]].tolist())
    free = [at for away in range(1, 40) for at in (column - away, column + away) if 0 <= at < right.shape[1]]
    place = int(rng.choice([at for at in free if at not in own][:6]))
    claim[row, place] = claim[row, column]
    claim[row, column] = 0
    missing = int(rows[2]), some_entry(int(rows[2]))
    claim[missing] = 0
    claim = claim.tocsr()
    claim.eliminate_zeros()
    return Planted(claim=claim, wrong=wrong, misplaced=(row, place, row, column), missing=missing)
