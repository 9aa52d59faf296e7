"""Systems of equations with sparse Jacobians, of any size, from the problems of Moré, Garbow & Hillstrom.

J. J. Moré, B. S. Garbow, K. E. Hillstrom, "Testing unconstrained optimization software", ACM TOMS 7 (1981) 17-41. The
formulas and the starting points are typed from memory; problems 28 and 30 also stand in `more_garbow_hillstrom`, where
they are held against 50-digit values.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import sparse


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SparseSystem:
    """One system: function (n,) -> (n,), Jacobian, start for n variables, and the groups of columns it needs."""

    name: str
    function: Callable[[Any], Any]
    jacobian: Callable[[Any], Any]
    start: Callable[[int], Any]
    groups: int


def _boundary_grid(n: int) -> tuple[float, Any]:
    h = 1.0 / (n + 1)
    return h, h * np.arange(1, n + 1)


def discrete_boundary_value(x: Any) -> Any:
    """Problem 28: 2x_i − x_(i−1) − x_(i+1) + h²(x_i + t_i + 1)³/2."""
    h, t = _boundary_grid(x.size)
    padded = np.concatenate([[0.0], x, [0.0]])
    return 2.0 * x - padded[:-2] - padded[2:] + h**2 * (x + t + 1.0) ** 3 / 2.0


def discrete_boundary_value_jacobian(x: Any) -> Any:
    h, t = _boundary_grid(x.size)
    ones = np.ones(x.size - 1)
    return sparse.diags_array([-ones, 2.0 + 1.5 * h**2 * (x + t + 1.0) ** 2, -ones], offsets=[-1, 0, 1]).tocsr()


def discrete_boundary_value_start(n: int) -> Any:
    _, t = _boundary_grid(n)
    return t * (t - 1.0)


def broyden_tridiagonal(x: Any) -> Any:
    """Problem 30: (3 − 2x_i)x_i − x_(i−1) − 2x_(i+1) + 1."""
    padded = np.concatenate([[0.0], x, [0.0]])
    return (3.0 - 2.0 * x) * x - padded[:-2] - 2.0 * padded[2:] + 1.0


def broyden_tridiagonal_jacobian(x: Any) -> Any:
    ones = np.ones(x.size - 1)
    return sparse.diags_array([-ones, 3.0 - 4.0 * x, -2.0 * ones], offsets=[-1, 0, 1]).tocsr()


#: Problem 31 couples a variable to so many before it, and so many after it.
BEFORE, AFTER = 5, 1


def broyden_banded(x: Any) -> Any:
    """Problem 31: x_i(2 + 5x_i²) + 1 − Σ x_j(1 + x_j) over the neighbours j from i − 5 to i + 1, j ≠ i."""
    terms = np.concatenate([np.zeros(BEFORE), x * (1.0 + x), np.zeros(AFTER)])
    # Summed window by window: differences of running sums would round with the whole vector.
    neighbours = [terms[at : at + x.size] for at in range(BEFORE + AFTER + 1) if at != BEFORE]
    return x * (2.0 + 5.0 * x**2) + 1.0 - np.sum(neighbours, axis=0)


def broyden_banded_jacobian(x: Any) -> Any:
    slopes = -(1.0 + 2.0 * x)
    offsets = [away for away in range(-BEFORE, AFTER + 1) if away]
    diagonals = [slopes[: x.size + away] if away < 0 else slopes[away:] for away in offsets]
    return (sparse.diags_array(diagonals, offsets=offsets) + sparse.diags_array(2.0 + 15.0 * x**2)).tocsr()


SPARSE_SYSTEMS = (
    SparseSystem(
        name="discrete boundary value",
        function=discrete_boundary_value,
        jacobian=discrete_boundary_value_jacobian,
        start=discrete_boundary_value_start,
        groups=3,
    ),
    SparseSystem(
        name="Broyden tridiagonal",
        function=broyden_tridiagonal,
        jacobian=broyden_tridiagonal_jacobian,
        start=lambda n: np.full(n, -1.0),
        groups=3,
    ),
    SparseSystem(
        name="Broyden banded",
        function=broyden_banded,
        jacobian=broyden_banded_jacobian,
        start=lambda n: np.full(n, -1.0),
        groups=BEFORE + AFTER + 1,
    ),
)
