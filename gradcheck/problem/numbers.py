"""What counts as numbers: arrays of them, plain lists of them, and what only looks like them."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.records.arrays import Array
from gradcheck.wording import brief

#: Deeper lists are no arrays: numpy has no more axes.
_AXES_MOST = 64


def real_numbers(value: Any, what: str) -> Array:
    """`value` as an array of float64.

    Raises
    ------
    UsageError
        If it is complex, text, masked, or otherwise no array of real numbers.
    """
    if value is None:
        raise UsageError(f"{what} returned None; does the function lack a return statement?")
    if isinstance(value, np.ma.MaskedArray) and np.ma.is_masked(value):
        raise UsageError(f"{what} has masked entries, which say nothing; give numbers there: value.filled(0.0)")
    try:
        array = np.asarray(value)
        if array.dtype.kind == "c":
            raise UsageError(f"{what} is complex ({array.dtype}); derivatives of a real model are real")
        if array.dtype.kind in "MmUS" or array.dtype == _FLOAT0:
            raise UsageError(f"{what} is {_said(array)}; an array of real numbers is needed")
        return array.astype(float)
    except (TypeError, ValueError) as error:
        if isinstance(error, UsageError):
            raise
        raise UsageError(
            f"{what} is {type(value).__name__} {brief(value)}; an array of real numbers is needed"
        ) from None


#: What jax gives in the place of a derivative by a whole number.
_FLOAT0 = np.dtype([("float0", np.void, 0)])


def _said(array: NDArray[Any]) -> str:
    if array.dtype == _FLOAT0:
        return "float0, jax's mark of a whole number without derivative"
    return {"M": "dates", "m": "time spans"}.get(array.dtype.kind, "text") + f" ({array.dtype})"


def is_floating(dtype: Any) -> bool:
    """Whether numbers of this type vary continuously; also those that numpy itself does not know (bfloat16)."""
    return dtype.kind == "f" or (dtype.kind == "V" and dtype.names is None and "float" in dtype.name)


def rectangle(value: list[Any] | tuple[Any, ...], known: dict[int, bool]) -> NDArray[Any] | None:
    """Array of a rectangular list of plain numbers; None for anything else.

    `known` remembers, by `id`, which lists hold plain numbers only: no list is looked through twice.
    """
    if not _plain(value, known, _AXES_MOST):
        return None
    try:
        return np.asarray(value)
    except ValueError:  # parts of unequal shape: a nesting
        return None


def _plain(value: list[Any] | tuple[Any, ...], known: dict[int, bool], depth: int) -> bool:
    found = known.get(id(value))
    if found is None:
        kinds = set(map(type, value))
        if kinds <= {list, tuple}:
            found = depth > 0 and all(_plain(part, known, depth - 1) for part in value)
        else:
            found = all(issubclass(kind, int | float | complex | np.number) and kind is not bool for kind in kinds)
        known[id(value)] = found
    return found


def plain_rectangle(value: Any) -> NDArray[Any] | None:
    """Array of a plain list or tuple of numbers, rectangular; None for anything else."""
    return rectangle(value, {}) if type(value) in (list, tuple) else None


def lowest_precision(kinds: list[str]) -> str:
    """The type with the fewest digits among the names of types; ``"float64"`` where none has fewer."""
    for short in ("bfloat16", "float16", "float32"):
        if short in kinds:
            return short
    return kinds[0] if len(kinds) == 1 else "float64"
