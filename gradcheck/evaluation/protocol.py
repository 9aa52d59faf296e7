"""How algorithms ask for values: they yield requests, a gate replies.

An inquiry is a generator that yields a `Request` and receives a `Reply`. It is pure: it knows no executor, budget,
cache or journal, and is tested with a lambda. Inquiries compose with ``yield from``.
"""

from collections.abc import Callable, Generator, Sequence
from dataclasses import dataclass
from enum import IntEnum
from typing import Any, TypeAlias, TypeVar

import numpy as np
from numpy.typing import NDArray

from gradcheck.records.arrays import Array, IntArray

Result = TypeVar("Result")
Directions: TypeAlias = Array | IntArray


class Status(IntEnum):
    """What became of one evaluation. Small numbers, because replies hold arrays of them."""

    OK = 0
    NONFINITE = 1  # a NaN or an infinity among the outputs
    CRASH = 2  # an exception
    TIMEOUT = 3
    REFUSED = 4  # not evaluated: budget or time spent


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Request:
    """Values of one function at ``base + offset · direction``.

    Attributes
    ----------
    base : ndarray, shape (n,)
        Read-only.
    directions : ndarray
        Either ``(d,)`` integers, coordinate indices, or ``(d, n)`` rows.
    offsets : ndarray, shape (d, k)
        Displacements along each direction, in units of the direction; complex for complex arithmetic.
    arithmetic : str
        ``"real"``, ``"complex"``, ``"jvp"`` (value: J·direction at each offset 0), ``"vjp"``
        (directions are ``(d, m)`` cotangents; value: Jᵀ·cotangent), ``"hvp"`` (value: H·direction); or a way in which
        a rule is tried, such as ``"jit reverse"``: directions are the rows of
        `evaluation.arithmetic.jax_transforms`, values the rows it gives.
    source : str
        ``"model"``, ``"jax"``, ``"autograd"``; a claim at the point itself, such as ``"claim:gradient"`` (a matrix) or
        ``"claim:jvp"`` (one product for each direction); or a claim as a function of its own, such as
        ``"slope:gradient"`` (its flat values at every point asked for).
    function : str
        Which function of the problem; algorithms leave it empty and `addressed` fills it in.
    level : int
        Which level of the model's own tolerance.
    fresh : bool
        Repeatability: no cache may answer.
    worth : float
        Who goes first when the budget is short; larger goes first.
    """

    base: Array
    directions: Directions
    offsets: NDArray[Any]
    arithmetic: str = "real"
    source: str = "model"
    function: str = ""
    level: int = 0
    fresh: bool = False
    worth: float = 1.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Reply:
    """The values asked for.

    Attributes
    ----------
    values : ndarray, shape (d, k, m)
        NaN where the status is not OK or NONFINITE. ``m`` is 1 for a scalar model. Complex if complex was asked for.
    status : ndarray of int8, shape (d, k)
        A `Status` each.
    spent : int
        Evaluations that this reply cost (cached ones cost nothing).
    """

    values: NDArray[Any]
    status: NDArray[np.int8]
    spent: int

    @property
    def finite(self) -> NDArray[np.bool_]:
        """(d, k): where every output is a finite number."""
        return self._where(Status.OK)

    @property
    def refused(self) -> NDArray[np.bool_]:
        """(d, k): what was not evaluated, the budget or the time being spent."""
        return self._where(Status.REFUSED)

    def _where(self, status: Status) -> NDArray[np.bool_]:
        # Numpy takes twenty times as long to compare with a member of an enumeration as with its plain number.
        found: NDArray[np.bool_] = self.status == status.value
        return found


Inquiry: TypeAlias = Generator[Request, Reply, Result]
Gate: TypeAlias = Callable[[Sequence[Request]], Sequence[Reply]]
