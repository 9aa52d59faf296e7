"""Nested inputs <-> one vector (n,), with a readable name for every entry."""

from bisect import bisect_right
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.problem.arguments import Arguments, Points, args, argument_names, points, wanted_arguments
from gradcheck.problem.containers import Given
from gradcheck.problem.input_parts import InputParts
from gradcheck.problem.numbers import real_numbers
from gradcheck.problem.parts_of_claims import nested_vector
from gradcheck.problem.template import (
    Leaf,
    Node,
    Place,
    Read,
    Step,
    Template,
    Untouched,
    filled,
    filled_from,
    program_of,
    steps_of,
    template_of,
)
from gradcheck.records.arrays import Array, IntArray
from gradcheck.wording import brief

__all__ = [
    "Arguments",
    "Layout",
    "Leaf",
    "Points",
    "args",
    "layout_of",
    "points",
    "real_numbers",
]


@dataclass(frozen=True, eq=False)
class Layout:
    """The way between what the model takes and one vector.

    Attributes
    ----------
    template : nested
        The structure, with a `Leaf` or `Untouched` in each place.
    leaves : tuple of Leaf
        In the order of the vector.
    notices : tuple of str
        What was changed on the way in.
    names : tuple of str
        The user's own names of all entries, where given.
    """

    template: Template
    leaves: tuple[Leaf, ...]
    notices: tuple[str, ...] = ()
    names: tuple[str, ...] = ()
    _program: tuple[Template, ...] = field(init=False, repr=False)
    _steps: tuple[Step, ...] = field(init=False, repr=False)
    _starts: tuple[int, ...] = field(init=False, repr=False)
    #: Whether the nesting is that of several arguments.
    _several: bool = field(init=False, repr=False)
    #: Leaves whose axes do not stand in C's order in memory.
    turned: tuple[Leaf, ...] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "_program", program_of(self.template))
        object.__setattr__(self, "_steps", steps_of(self._program))
        several = isinstance(self.template, Node) and isinstance(self.template.container, Given)
        object.__setattr__(self, "_several", several)
        object.__setattr__(self, "_starts", tuple(leaf.start for leaf in self.leaves))
        object.__setattr__(self, "turned", tuple(leaf for leaf in self.leaves if leaf.axes is not None))

    @property
    def size(self) -> int:
        return self.leaves[-1].stop if self.leaves else 0

    @property
    def single(self) -> Leaf | None:
        """The only leaf, where the input is one array or number: claims then have its shape."""
        return self.template if isinstance(self.template, Leaf) else None

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape of a gradient claim for a scalar model."""
        return self.single.shape if self.single is not None else (self.size,)

    @property
    def holds_jax(self) -> bool:
        """Whether the model receives arrays of jax."""
        return any(leaf.jax for leaf in self.leaves)

    def restore(self, vector: Array) -> tuple[tuple[Any, ...], dict[str, Any]]:
        """Positional and keyword arguments for one call of the model, all of them fresh copies."""
        return self.arguments(lambda leaf: leaf.restore(vector))

    def arguments(self, of_leaf: Callable[[Leaf], Any]) -> tuple[tuple[Any, ...], dict[str, Any]]:
        """Positional and keyword arguments with ``of_leaf(leaf)`` in each variable place (AD tracers, say)."""
        whole = filled(self._program, of_leaf)
        return whole if self._several else ((whole,), {})

    def received(self, memory: NDArray[Any]) -> tuple[tuple[Any, ...], dict[str, Any]]:
        """Positional and keyword arguments that are views of a vector in order of memory; nothing is copied."""
        whole = filled_from(self._steps, memory)
        return whole if self._several else ((whole,), {})

    def in_memory_order(self, vector: NDArray[Any], *, own: bool = False) -> NDArray[Any]:
        """The vector with the entries of each leaf as they stand in memory; the vector itself where it is the caller's
        `own` to give away and nothing has to move, else a copy.
        """
        if own and not self.turned:
            return vector
        memory = vector.copy()
        for leaf in self.turned:
            part = vector[leaf.start : leaf.stop].reshape(leaf.shape)
            memory[leaf.start : leaf.stop] = part.transpose(leaf.axes).reshape(-1)
        return memory

    def memory_positions(self, entries: IntArray) -> IntArray:
        """Where entries of the vector stand in order of memory."""
        if not self.turned:
            return entries
        positions = entries.copy()
        for leaf in self.turned:
            here = (entries >= leaf.start) & (entries < leaf.stop)
            if here.any():
                index = np.unravel_index(entries[here] - leaf.start, leaf.shape)
                turned = tuple(index[axis] for axis in leaf.axes or ())
                positions[here] = leaf.start + np.ravel_multi_index(turned, leaf.shape_in_memory)
        return positions

    def name(self, index: int) -> str:
        """Readable name of one entry, made only when it is shown."""
        if self.names:
            return self.names[index]
        if not 0 <= index < self.size:
            raise IndexError(index)
        return self.leaves[bisect_right(self._starts, index) - 1].name(index)

    def flatten(self, nested: Any, what: str) -> Array:
        """Vector (n,) of a claim that has the structure of the input (or is already flat).

        Raises
        ------
        UsageError
            If the structures differ: both are shown.
        """
        return nested_vector(self.template, self.leaves, nested, what)


def layout_of(at: Any, *, root: str = "x", wrt: Any = None, function: Any = None) -> tuple[Layout, Array]:
    """The layout of an input, and the input as a vector.

    A rectangular list or tuple of plain numbers is a float array of that shape; ``0.3`` is a scalar; anything that
    holds an array, a dict or parts of unequal shape is a nesting and reaches the model as such. Arrays reach the model
    in double precision and in their own order of memory, those of jax as arrays of jax; masked, complex and object
    arrays are refused.

    Raises
    ------
    UsageError
        If the input is empty, complex, masked, not numeric, holds itself, or `wrt` names no argument.
    """
    read = InputParts()
    template = _arguments(at, wrt, function, read) if isinstance(at, Arguments) else _one(at, root, wrt, read)
    if sum(value.size for value in read.values) == 0:
        raise UsageError(
            f"`at` is {brief(at)}: it holds no real number to differentiate with respect to"
            + ("; whole numbers beside text, flags or None are no variables: write 1.0" if read.met_integers else "")
        )
    return Layout(template, tuple(read.leaves), read.notices()), np.concatenate(list(map(np.ravel, read.values)))


def _one(at: Any, root: str, wrt: Any, read: InputParts) -> Template:
    if wrt is not None and wrt not in (root, [root], (root,)):
        raise UsageError(f"wrt={wrt!r} names an argument, but `at` holds one only; give them by at=gradcheck.args(...)")
    return template_of(at, root, lambda part, place: read(part, place, top=place.parent is None))


def _arguments(at: Arguments, wrt: Any, function: Any, read: InputParts) -> Template:
    """The template of several arguments; the vector holds the wanted ones in the order of `wrt`."""
    wanted = wanted_arguments(function, at, wrt)
    names = argument_names(function, at)
    given = [*at.positional, *at.keywords.values()]

    def inner(part: Any, place: Place) -> Read:
        return read(part, place, top=False)

    parts: list[Template] = [Untouched(value) for value in given]
    for i in wanted:
        parts[i] = template_of(given[i], names[i], inner)
    return Node(Given(len(at.positional), tuple(at.keywords), names, wanted), tuple(parts), Place(None, ""))
