"""What a model returns, where that is a nesting: its numbers as one vector (m,), with a readable name for each."""

from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.containers import Items
from gradcheck.problem.jax_trees import is_jax_array
from gradcheck.problem.layout import Layout
from gradcheck.problem.numbers import is_floating, lowest_precision, plain_rectangle, real_numbers
from gradcheck.problem.opening import opened
from gradcheck.problem.parts_of_claims import matched, refused
from gradcheck.problem.structure_text import Difference
from gradcheck.problem.template import Leaf, Node, Place, Read, Template, Untouched, template_of
from gradcheck.records.arrays import Array
from gradcheck.wording import listed

#: So many parts are named in a notice.
_NAMED = 5


def output_layout(result: Any, name: str) -> Layout:
    """The layout of a nesting that a model returned.

    Whole numbers, flags and text beside real numbers are left out, with a notice.

    Raises
    ------
    UsageError
        If it holds no real number, or complex ones.
    """
    leaves: list[Leaf] = []
    left_out: list[str] = []

    def read(value: Any, place: Place) -> Read:
        array = _numbers(value)
        if array is None:
            found = opened(value)
            if found is not None:
                return found
        elif array.dtype.kind == "c":
            raise UsageError(f"{place} is complex ({array.dtype}); return real numbers, or pick others with output=...")
        elif is_floating(array.dtype):
            scalar = isinstance(value, float)
            leaves.append(Leaf(place, leaves[-1].stop if leaves else 0, array.shape, scalar, array.dtype))
            return leaves[-1]
        left_out.append(f"{place} ({type(value).__name__ if array is None or not array.ndim else array.dtype})")
        return Untouched(value)

    template = template_of(result, name, read)
    layout = Layout(template, tuple(leaves), _told(left_out))
    if layout.size == 0:
        raise UsageError(
            f"{name} returned {type(result).__name__} without a real number; pick one output with "
            "output=lambda result: ..."
        )
    return layout


def output_vector(layout: Layout, result: Any, name: str) -> Array:
    """The numbers of a nesting as a vector (m,).

    Raises
    ------
    DerivativeShapeError
        If its structure is another one than at first; the text shows both.
    UsageError
        If a part is None or no real number.
    """
    vector = np.empty(layout.size)
    usual = _as_at_first(layout.template, result)
    if usual is not None and all(_fill(vector, leaf, part) for leaf, part in zip(layout.leaves, usual, strict=True)):
        return vector
    try:
        for leaf, part, way in matched(layout.template, result):
            found = real_numbers(part, leaf.path)
            if found.shape != leaf.shape:
                raise Difference(f"shape {leaf.shape} and then {found.shape} at {leaf.path}", way, leaf, part)
            vector[leaf.start : leaf.stop] = found.reshape(-1)
    except Difference as difference:
        raise refused(difference, f"what {name} returns", "the same structure everywhere") from None
    return vector


def _as_at_first(template: Template, result: Any) -> list[Any] | None:
    """The parts of a result that is made of the very same containers of Python, which most are; None for others."""
    parts: list[Any] = []
    waiting = [(template, result)]
    while waiting:
        part, found = waiting.pop()
        if isinstance(part, Leaf):
            parts.append(found)
        elif isinstance(part, Node):
            labels = part.container.labels
            keyed = isinstance(part.container, Items)
            if keyed and type(found) is dict and found.keys() == set(labels):
                held = [found[label] for label in labels]
            elif not keyed and isinstance(found, list | tuple) and len(found) == len(part.parts):
                held = list(found)
            else:
                return None
            waiting.extend(zip(reversed(part.parts), reversed(held), strict=True))
    return parts


def _fill(vector: Array, leaf: Leaf, part: Any) -> bool:
    """Whether the part is of the usual form; it then stands in the vector."""
    if type(part) is float and leaf.shape == ():
        vector[leaf.start] = part
        return True
    if type(part) is np.ndarray and part.shape == leaf.shape and part.dtype.kind == "f":
        vector[leaf.start : leaf.stop] = part.reshape(-1)
        return True
    return False


def output_parts(layout: Layout, result: Any) -> list[Any]:
    """The parts of a nesting that are numbers, in order; what they are is not looked at (AD tracers, say).

    Raises
    ------
    DerivativeShapeError
        If its structure is another one than at first.
    """
    try:
        return [part for _, part, _ in matched(layout.template, result)]
    except Difference as difference:
        raise refused(difference, "what the model returns", "the same structure everywhere") from None


def precision_of(nested: Any) -> str:
    """The type of the numbers that a claim holds, the one with the fewest digits where there are several."""
    dtype = getattr(nested, "dtype", None)
    if dtype is not None:
        return str(dtype)
    kinds: set[str] = set()

    def read(value: Any, place: Place) -> Read:
        found = None if hasattr(value, "dtype") else opened(value)
        if found is not None and not _plain_list(value):
            return found
        dtype = getattr(value, "dtype", None)
        if dtype is not None and is_floating(np.dtype(dtype) if not hasattr(dtype, "kind") else dtype):
            kinds.add(str(dtype))
        return Untouched(None)

    template_of(nested, "", read)
    return lowest_precision(sorted(kinds)) if kinds else "float64"


def _plain_list(value: Any) -> bool:
    """Lists of Python's own numbers hold doubles; they may be long."""
    return type(value) in (list, tuple) and bool(value) and set(map(type, value)) <= {float, int}


def _numbers(value: Any) -> np.ndarray[Any, Any] | None:
    """A part of an output as an array; None where it is no array of numbers."""
    if isinstance(value, int | float | complex | np.generic | np.ndarray):
        array = np.asarray(value)
    elif type(value) in (list, tuple):
        return plain_rectangle(value)
    elif is_jax_array(value) or (hasattr(value, "__array__") and opened(value) is None):
        try:
            array = np.asarray(value)
        except Exception:
            return None
    else:
        return None
    return array if array.dtype.kind in "fciub" or is_floating(array.dtype) else None


def _told(left_out: list[str]) -> tuple[str, ...]:
    if not left_out:
        return ()
    more = f" and {len(left_out) - _NAMED:,} more" if len(left_out) > _NAMED else ""
    names = ", ".join(left_out[:_NAMED]) if more else listed(left_out, limit=_NAMED, width=100)
    return (f"left out of what the model returned, being no real numbers: {names}{more}",)
