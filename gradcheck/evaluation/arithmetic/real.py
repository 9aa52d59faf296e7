"""How x and f travel in ordinary floating-point numbers."""

import sys
from collections.abc import Callable
from typing import Any, TypeAlias

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.evaluation.moves import Moves, same_content
from gradcheck.problem.jax_trees import is_jax_array
from gradcheck.problem.layout import Layout, Leaf
from gradcheck.problem.opening import opened
from gradcheck.problem.template import to_jax
from gradcheck.records.arrays import Array

#: Calls the model at the point of this number, or at all points at once.
Sender: TypeAlias = Callable[[Any], Any]
#: Numbers that are compared at once.
_PIECE = 1 << 16

#: Points of more bytes are never copied.
LONG = 1_000_000


def sender(
    function: Callable[..., Any], layout: Layout, moves: Moves, mutated: Callable[[], None], *, batched: bool = False
) -> Sender:
    """What calls `function` at the points of `moves`, and calls `mutated` where it wrote into its input.

    The function always receives arrays of its own, so nothing it does to x reaches anybody else.

    Parameters
    ----------
    function : callable
    layout : Layout
    moves : Moves
    mutated : callable
    batched : bool
        Whether the function takes all points at once, ``(k, n)``, or ``(k,)`` where x is one number.
    """
    single = layout.single
    if single is not None and batched:
        return _at_once(function, single, moves, mutated)
    if single is not None and single.scalar:
        return _with_number(function, moves)
    if single is not None and moves.along_axes and single.shape and single.plain:
        return _with_one_entry_moved(function, single, moves, mutated)
    if moves.along_axes:
        return _with_one_part_moved(function, layout, moves, mutated)
    return _with_all_moved(function, layout, moves, mutated)


def _with_number(function: Callable[..., Any], moves: Moves) -> Sender:
    numbers = moves.entries()[1].tolist() if moves.along_axes else moves.points()[:, 0].tolist()
    return lambda i: function(numbers[i])


def _with_one_entry_moved(
    function: Callable[..., Any], leaf: Leaf, moves: Moves, mutated: Callable[[], None]
) -> Sender:
    entries, values = moves.entries()
    numbers = values.tolist()
    places: list[Any] = entries.tolist()
    if len(leaf.shape) != 1:
        places = list(zip(*(index.tolist() for index in np.unravel_index(entries, leaf.shape)), strict=True))
    base = moves.base.reshape(leaf.shape)
    # A second picture of what the model receives, for the comparison afterwards: one entry is set, and set back.
    content = bytearray(base.tobytes())
    picture = np.frombuffer(content).reshape(leaf.shape)

    def send(i: int) -> Any:
        place, number = places[i], numbers[i]
        x = base.copy()
        x[place] = number
        result = function(x)
        picture[place] = number
        if not same_content(content, x):
            mutated()
        picture[place] = base[place]
        return result

    return send


def _with_one_part_moved(
    function: Callable[..., Any], layout: Layout, moves: Moves, mutated: Callable[[], None]
) -> Sender:
    """The same for a nesting: its parts are views of one vector that belongs to the model."""
    entries, values = moves.entries()
    places, numbers = layout.memory_positions(entries).tolist(), values.tolist()
    base = layout.in_memory_order(moves.base, own=True)  # only read
    content = bytearray(base.tobytes())
    picture = np.frombuffer(content)

    def send(i: int) -> Any:
        place, number = places[i], numbers[i]
        memory = base.copy()
        memory[place] = number
        positional, keywords = layout.received(memory)
        result = function(*positional, **keywords)
        picture[place] = number
        if not same_content(content, memory):
            mutated()
        picture[place] = base[place]
        return result

    return send


def _with_all_moved(function: Callable[..., Any], layout: Layout, moves: Moves, mutated: Callable[[], None]) -> Sender:
    def send(i: int) -> Any:
        memory = layout.in_memory_order(moves.point(i), own=True)
        # A long point is made again in parts afterwards; a copy of it would cost more than the time.
        long = memory.nbytes > LONG and not layout.turned
        content = bytearray() if long else bytearray(memory.data)
        positional, keywords = layout.received(memory)
        result = function(*positional, **keywords)
        if not (moves.is_point(i, memory) if long else same_content(content, memory)):
            mutated()
        return result

    return send


def _at_once(function: Callable[..., Any], leaf: Leaf, moves: Moves, mutated: Callable[[], None]) -> Sender:
    def send(part: slice) -> Any:
        points = moves[part].points()
        points = points[:, 0].copy() if leaf.scalar else points
        content = bytearray(points.data)
        result = function(to_jax(points) if leaf.jax else points)
        if not same_content(content, points):
            mutated()
        return result

    return send


def call(function: Callable[..., Any], layout: Layout, vector: Array, *more: Any) -> tuple[Any, bool]:
    """What the function returns at `vector`, and whether it wrote into its input.

    The function always receives its own copy, so nothing it does to x reaches anybody else. What is given in `more`
    follows its positional arguments as it is.
    """
    memory = layout.in_memory_order(vector)
    content = bytearray(memory.data) if layout.turned else bytearray()
    positional, keywords = layout.received(memory)
    result = function(*positional, *more, **keywords)
    return result, not same_content(content, memory) if layout.turned else _written(vector, memory)


def _written(given: Array, part: np.ndarray[Any, Any]) -> bool:
    """Whether an array no longer holds, bit by bit, what was given; compared piece by piece, for it may be large."""
    if given.size <= _PIECE:
        return not same_content(bytearray(given.data), part)
    if part.size != given.size or part.dtype != given.dtype:
        return True
    now = part.reshape(-1)
    pieces = (slice(first, first + _PIECE) for first in range(0, given.size, _PIECE))
    return any(now[piece].tobytes() != given[piece].tobytes() for piece in pieces)


def is_single_precision_jax(result: Any) -> bool:
    """Whether a model returned jax arrays (or a nesting of them) in single precision, as jax does by itself."""
    if type(result) is np.ndarray or "jax" not in sys.modules:
        return False
    waiting = [result]
    while waiting:
        part = waiting.pop()
        if is_jax_array(part):
            if part.dtype == np.float32:
                return True
        elif not isinstance(part, np.ndarray | np.generic | int | float | str):
            found = opened(part)
            waiting += found[1] if found is not None else ()
    return False


def as_array(result: Any, who: str) -> np.ndarray[Any, Any]:
    """What a model returned, as an own array of real numbers of any shape (the model may reuse its buffer).

    Raises
    ------
    UsageError
        If it is None, text, complex, ragged or otherwise no array of real numbers; says which, and the mend.
    """
    if result is None:
        raise UsageError(f"{who} returned None; does it lack a return statement?")
    if isinstance(result, np.ma.MaskedArray) and np.ma.is_masked(result):
        raise UsageError(f"{who} returned masked entries, which are no numbers; pick the valid ones with output=...")
    try:
        array = np.array(result)
    except ValueError:
        raise UsageError(
            f"{who} returned parts of unequal shape{_what_it_is(result)}; return one array, or pick one with "
            f"output={picking(result)}"
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
            f"{who} returned {type(result).__name__}{keys}{_what_it_is(result)}; a number or an array is needed: pick "
            f"one output with output={picking(result)}"
        ) from None


def _what_it_is(result: Any) -> str:
    """A word on a value that comes with something beside it."""
    first = result[0] if isinstance(result, list | tuple) and len(result) > 1 else None
    number = isinstance(first, int | float | np.number) or getattr(first, "shape", None) == ()
    return ", a value and something beside it" if number else ""


def picking(result: Any) -> str:
    """How to pick the first part that is numbers."""
    found = opened(result)
    if found is None:
        return "lambda result: ..."
    container, parts = found
    for i, part in enumerate(parts):
        if isinstance(part, float | np.floating) or getattr(getattr(part, "dtype", None), "kind", "") == "f":
            return f"lambda r: r{container.step(i)}"
    return f"lambda r: r{container.step(0)}" if parts else "lambda result: ..."
