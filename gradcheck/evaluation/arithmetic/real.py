"""How x and f travel in ordinary floating-point numbers."""

from collections.abc import Callable
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.layout import Layout, Leaf
from gradcheck.records.arrays import Array


def call(function: Callable[..., Any], layout: Layout, vector: Array) -> tuple[Any, bool]:
    """What the function returns at `vector`, and whether it wrote into its input.

    The function always receives its own copy, so nothing it does to x reaches anybody else.
    """
    passed: list[tuple[Leaf, Any]] = []

    def copy(leaf: Leaf) -> Any:
        part = leaf.restore(vector)
        if isinstance(part, np.ndarray):
            passed.append((leaf, part))
        return part

    positional, keywords = layout.arguments(copy)
    result = function(*positional, **keywords)
    mutated = any(not (part.ravel() == vector[leaf.start : leaf.stop]).all() for leaf, part in passed)
    return result, mutated


def is_single_precision_jax(result: Any) -> bool:
    """Whether a model returned jax arrays (or a nesting of them) in single precision, as jax does by itself."""
    if isinstance(result, list | tuple):
        return any(is_single_precision_jax(part) for part in result)
    if isinstance(result, dict):
        return any(is_single_precision_jax(part) for part in result.values())
    return type(result).__module__.startswith("jax") and getattr(result, "dtype", None) == np.float32


def as_array(result: Any, who: str) -> np.ndarray[Any, Any]:
    """What a model returned, as an own array of real numbers of any shape (the model may reuse its buffer).

    Raises
    ------
    UsageError
        If it is None, text, complex, ragged or otherwise no array of real numbers; says which, and the mend.
    """
    if result is None:
        raise UsageError(f"{who} returned None; does it lack a return statement?")
    try:
        array = np.array(result)
    except ValueError:
        raise UsageError(
            f"{who} returned parts of unequal shape; return one array, or pick one with output=..."
        ) from None
    except Exception as error:
        raise UsageError(f"{who} returned {type(result).__name__}, which is no array of numbers: {error}") from None
    if array.dtype.kind == "c":
        raise UsageError(
            f"{who} returned complex numbers ({array.dtype}); return real ones: the real and imaginary part as two "
            "outputs, or the modulus"
        )
    if array.dtype.kind == "O":
        array = _from_objects(array, result, who)
    if array.dtype.kind not in "fiub":
        raise UsageError(f"{who} returned {result!r:.80} ({type(result).__name__}); a number or an array is needed")
    if array.size == 0:
        raise UsageError(f"{who} returned an empty array; there is nothing to differentiate")
    return array


def _from_objects(array: np.ndarray[Any, Any], result: Any, who: str) -> np.ndarray[Any, Any]:
    try:
        return array.astype(float)
    except (TypeError, ValueError):
        keys = f" with keys {sorted(map(str, result))}" if isinstance(result, dict) else ""
        raise UsageError(
            f"{who} returned {type(result).__name__}{keys}; a number or an array is needed: pick one output with "
            "output=lambda result: ..."
        ) from None
