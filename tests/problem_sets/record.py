"""What a problem with a known derivative consists of."""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScalarProblem:
    """A smooth scalar function of several variables.

    Attributes
    ----------
    name, source : str
        The source says whose values these are, or that the problem is our own.
    function : callable
        (n,) -> float; takes complex arrays as well.
    gradient : callable
        (n,) -> (n,), the right one, written by hand.
    x0 : ndarray, shape (n,)
        Read-only.
    value0, gradient0 : float and ndarray, shape (n,)
        Published values at `x0`; NaN and empty where there are none.
    """

    name: str
    source: str
    function: Callable[[Any], Any]
    gradient: Callable[[Any], Any]
    x0: np.ndarray
    value0: float = float("nan")
    gradient0: np.ndarray = field(default_factory=lambda: np.empty(0))

    def __post_init__(self) -> None:
        _freeze(self, "x0", "gradient0")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class VectorProblem:
    """A smooth function of several variables with several outputs.

    Attributes
    ----------
    function : callable
        (n,) -> (m,); takes complex arrays as well.
    jacobian : callable
        (n,) -> (m, n), the right one, written by hand.
    x0 : ndarray, shape (n,)
        Read-only.
    residuals0, jacobian0 : ndarray, shapes (m,) and (m, n)
        Published values at `x0`; empty where there are none.
    minima : tuple of float
        Published minima of the sum of squares.
    minimisers : tuple of tuple of float
        Published minimisers, in the order of `minima` as far as they are known.
    """

    name: str
    source: str
    function: Callable[[Any], Any]
    jacobian: Callable[[Any], Any]
    x0: np.ndarray
    residuals0: np.ndarray = field(default_factory=lambda: np.empty(0))
    jacobian0: np.ndarray = field(default_factory=lambda: np.empty(0))
    minima: tuple[float, ...] = ()
    minimisers: tuple[tuple[float, ...], ...] = ()

    def __post_init__(self) -> None:
        _freeze(self, "x0", "residuals0", "jacobian0")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OneVariable:
    """A smooth function of one number, with its derivatives at one point.

    Attributes
    ----------
    function : callable
        float -> float.
    exact : callable
        ``exact(mp, x)``: the same in the digits of an mpmath context.
    x, value, derivative : float
    second : float
        Second derivative; NaN where the source gives none.
    """

    name: str
    source: str
    function: Callable[[float], float]
    exact: Callable[[Any, Any], Any]
    x: float
    value: float
    derivative: float
    second: float = float("nan")


def sum_of_squares(problem: VectorProblem, value0: float, gradient0: np.ndarray) -> ScalarProblem:
    """F = Σ r², whose gradient is 2 Jᵀ r."""

    def function(x: Any) -> Any:
        residuals = problem.function(x)
        return residuals @ residuals

    def gradient(x: Any) -> Any:
        return 2.0 * problem.jacobian(x).T @ problem.function(x)

    return ScalarProblem(
        name=problem.name,
        source=problem.source,
        function=function,
        gradient=gradient,
        x0=problem.x0,
        value0=value0,
        gradient0=gradient0,
    )


def _freeze(record: Any, *names: str) -> None:
    """Read-only copies, so that a model that writes into its input cannot spoil the next test."""
    for name in names:
        array = np.array(getattr(record, name), dtype=float)
        array.setflags(write=False)
        object.__setattr__(record, name, array)
