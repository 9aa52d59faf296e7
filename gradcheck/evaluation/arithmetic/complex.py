"""How x and f travel in complex numbers."""

import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
from numpy.exceptions import ComplexWarning
from numpy.typing import NDArray

from gradcheck.evaluation.moves import Moves
from gradcheck.problem.layout import Layout

#: What cannot hold an imaginary part of 1e-20 beside a real part of 1.
_SHORT = (np.complex64, np.float32, np.float16)


class LostImaginaryPart(ArithmeticError):
    """The model does not carry an imaginary part through: it returned single precision or no array of numbers."""


def sender(
    function: Callable[..., Any], layout: Layout, moves: Moves, *, batched: bool = False
) -> Callable[[Any], Any]:
    """What calls `function` at the complex points of `moves`; it receives its own copy, and may discard no imaginary
    part.

    Parameters
    ----------
    function : callable
    layout : Layout
    moves : Moves
    batched : bool
        Whether the function takes all points at once, ``(k, n)``, or ``(k,)`` where x is one number.
    """

    def at_once(part: slice) -> Any:
        points = moves[part].points()
        single = layout.single
        with _nothing_discarded():
            return function(points[:, 0].copy() if single is not None and single.scalar else points)

    def one_by_one(i: int) -> Any:
        return call(function, layout, moves.point(i))

    return at_once if batched else one_by_one


def call(function: Callable[..., Any], layout: Layout, vector: NDArray[np.complex128]) -> Any:
    """What the function returns at a complex point; it receives its own copy, and may discard no imaginary part."""
    positional, keywords = layout.restore(vector)  # type: ignore[arg-type]
    with _nothing_discarded():
        return function(*positional, **keywords)


def picked(result: Any, pick: Callable[[Any], Any] | None, shape: tuple[int, ...] | None) -> NDArray[np.complex128]:
    """One output of what a model returned, as an own complex array; real numbers get imaginary parts of exactly zero.

    Parameters
    ----------
    result
        What the model returned.
    pick : callable or None
        Takes the output; may discard no imaginary part.
    shape : tuple of int or None
        What the output has for real numbers, where that is known.

    Raises
    ------
    LostImaginaryPart
        If the output has another shape than for real numbers (an array of pairs, say), or as `as_array`.
    """
    with _nothing_discarded():
        array = as_array(result if pick is None else pick(result))
    if shape is not None and array.shape != shape:
        raise LostImaginaryPart(f"returned shape {array.shape} for complex numbers, and shape {shape} for real ones")
    return array


@contextmanager
def _nothing_discarded() -> Iterator[None]:
    """A discarded imaginary part (ComplexWarning) is an error; numpy merely warns, and the derivative would be lost."""
    with warnings.catch_warnings():
        warnings.simplefilter("error", ComplexWarning)
        yield


def as_array(result: Any) -> NDArray[np.complex128]:
    """An own complex array.

    Raises
    ------
    LostImaginaryPart
        If `result` is in single precision (an imaginary part of 1e-20 would drown) or no array of numbers.
    """
    array = np.array(result)
    if array.dtype.kind == "O":
        array = array.astype(complex)
    if result is None or array.dtype.kind not in "fciub":
        raise LostImaginaryPart(f"returned {type(result).__name__}, which is no array of numbers")
    if array.dtype in _SHORT:
        raise LostImaginaryPart(f"returned {array.dtype}: single precision")
    return array.astype(np.complex128)
