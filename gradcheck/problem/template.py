"""A nesting with its numbers taken out: where they stand in one vector, and how the nesting is filled again."""

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from gradcheck.errors import UsageError
from gradcheck.problem.containers import Container, Opened


@dataclass(frozen=True, slots=True, eq=False)
class Place:
    """Where a part of a nesting stands; turned into text only when it is shown."""

    parent: "Place | None"
    step: "str | tuple[Container, int]"

    def __str__(self) -> str:
        steps: list[str] = []
        place: Place | None = self
        while place is not None:
            steps.append(place.step if isinstance(place.step, str) else place.step[0].step(place.step[1]))
            place = place.parent
        return "".join(reversed(steps))


@dataclass(frozen=True, slots=True, eq=False)
class Leaf:
    """Part of the vector: where it stands, and the form in which the model receives it.

    Attributes
    ----------
    place : Place
    start, stop : int
        Its entries in the vector.
    shape : tuple of int
    scalar : bool
        A plain number, not an array without axes.
    dtype : dtype
        As it was given.
    axes : tuple of int or None
        Order of the axes in memory, where that is not C's.
    jax : bool
        Whether the model receives an array of jax.
    """

    place: Place
    start: int
    shape: tuple[int, ...]
    scalar: bool = False
    dtype: np.dtype[Any] = field(default=np.dtype(float))
    axes: tuple[int, ...] | None = None
    jax: bool = False
    stop: int = field(init=False)
    #: Takes the axes in memory back to those of the array.
    inverse: tuple[int, ...] | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        object.__setattr__(self, "stop", self.start + math.prod(self.shape))
        if self.axes is not None:
            object.__setattr__(self, "inverse", tuple(self.axes.index(axis) for axis in range(len(self.axes))))

    @property
    def path(self) -> str:
        return str(self.place)

    @property
    def plain(self) -> bool:
        """Whether the model receives an ordinary numpy array."""
        return self.axes is None and not self.jax

    @property
    def shape_in_memory(self) -> tuple[int, ...]:
        return self.shape if self.axes is None else tuple(self.shape[axis] for axis in self.axes)

    def received(self, memory: NDArray[Any]) -> Any:
        """What the model receives: a view of a vector in order of memory, or an array of jax."""
        if self.scalar:
            return memory.item(self.start)
        part = memory[self.start : self.stop]
        if self.axes is not None:
            part = part.reshape(self.shape_in_memory).transpose(self.inverse)
        elif len(self.shape) != 1:
            part = part.reshape(self.shape)
        return to_jax(part) if self.jax else part

    def restore(self, vector: NDArray[Any]) -> Any:
        """The model's own copy of this part."""
        if self.scalar:
            return vector[self.start].item()
        part = vector[self.start : self.stop].reshape(self.shape)
        if self.axes is not None:
            return part.transpose(self.axes).copy().transpose(self.inverse)
        return to_jax(part.copy()) if self.jax else part.copy()

    def name(self, index: int) -> str:
        """Name of the entry at `index` of the whole vector."""
        if not self.shape:
            return self.path
        if len(self.shape) == 1:
            return f"{self.path}[{index - self.start}]"
        inner = np.unravel_index(index - self.start, self.shape)
        return f"{self.path}[{', '.join(str(int(i)) for i in inner)}]"


@dataclass(frozen=True, slots=True, eq=False)
class Untouched:
    """A part that is no variable: text, flags, integers inside a nesting, arguments outside `wrt`."""

    value: Any


@dataclass(frozen=True, slots=True, eq=False)
class Node:
    """A container in which something varies."""

    container: Container
    parts: tuple["Template", ...]
    place: Place


Template: TypeAlias = Leaf | Untouched | Node
#: What a reader makes of a value: a leaf, something that is passed on, or a container to be walked.
Read: TypeAlias = Leaf | Untouched | Opened


def template_of(value: Any, root: str, read: Callable[[Any, Place], Read]) -> Template:
    """The template of a nesting, of any depth; `read` is asked about every part, in order.

    Raises
    ------
    UsageError
        If a container holds itself.
    """
    frames: list[_Frame] = []
    inside: set[int] = set()
    done: Template | None = _enter(value, Place(None, root), read, frames, inside)
    while frames:
        frame = frames[-1]
        if done is not None:
            frame.parts.append(done)
        i = len(frame.parts)
        if i < len(frame.values):
            done = _enter(frame.values[i], Place(frame.place, (frame.container, i)), read, frames, inside)
        else:
            frames.pop()
            inside.discard(id(frame.value))
            done = frame.closed()
    assert done is not None  # the last frame was closed
    return done


@dataclass(slots=True)
class _Frame:
    """A container that is being walked."""

    value: Any
    place: Place
    container: Container
    values: list[Any]
    parts: list[Template] = field(default_factory=list)

    def closed(self) -> Template:
        """What holds no variable at all is passed on as the very object that was given."""
        if all(type(part) is Untouched for part in self.parts):
            return Untouched(self.value)
        return Node(self.container, tuple(self.parts), self.place)


def _enter(
    value: Any, place: Place, read: Callable[[Any, Place], Read], frames: list[_Frame], inside: set[int]
) -> Template | None:
    found = read(value, place)
    if not isinstance(found, tuple):
        return found
    if id(value) in inside:
        raise UsageError(f"{_shortened(place)} is a {found[0].word} that holds itself; a nesting must end somewhere")
    inside.add(id(value))
    frames.append(_Frame(value, place, *found))
    return None


def _shortened(place: Place) -> str:
    text = str(place)
    return text if len(text) <= 80 else f"{text[:40]}…{text[-39:]}"


def program_of(template: Template) -> tuple[Template, ...]:
    """All parts of a template, each container after what it holds: the order in which it is filled."""
    order: list[Template] = []
    waiting = [template]
    while waiting:
        part = waiting.pop()
        order.append(part)
        if isinstance(part, Node):
            waiting.extend(part.parts)
    return tuple(reversed(order))


def filled(program: Iterable[Template], of_leaf: Callable[[Leaf], Any]) -> Any:
    """The nesting with ``of_leaf(leaf)`` in the place of each leaf."""
    ready: list[Any] = []
    for part in program:
        if type(part) is Leaf:
            ready.append(of_leaf(part))
        elif type(part) is Untouched:
            ready.append(part.value)
        else:
            assert isinstance(part, Node)
            count = len(part.parts)
            held = ready[-count:]
            del ready[-count:]
            ready.append(part.container.make(held))
    return ready[0]


#: A step of filling a nesting with parts of a vector: what to do, with what, and a shape.
Step: TypeAlias = tuple[int, Any, Any]
_LINE, _SHAPED, _NUMBER, _LEAF, _GIVEN, _CONTAINER = range(6)


def steps_of(program: Iterable[Template]) -> tuple[Step, ...]:
    """The same order, prepared for `filled_from`: a model is called far more often than its input is read."""
    return tuple(map(_step_of, program))


def _step_of(part: Template) -> Step:
    if isinstance(part, Untouched):
        return _GIVEN, part.value, None
    if isinstance(part, Node):
        return _CONTAINER, part.container.make, len(part.parts)
    if part.scalar:
        return _NUMBER, part.start, None
    if not part.plain:
        return _LEAF, part, None
    entries = slice(part.start, part.stop)
    return (_LINE, entries, None) if len(part.shape) == 1 else (_SHAPED, entries, part.shape)


def filled_from(steps: Iterable[Step], memory: NDArray[Any]) -> Any:
    """The nesting of views of a vector in order of memory."""
    ready: list[Any] = []
    for kind, what, shape in steps:
        if kind == _LINE:
            ready.append(memory[what])
        elif kind == _SHAPED:
            ready.append(memory[what].reshape(shape))
        elif kind == _NUMBER:
            ready.append(memory.item(what))
        elif kind == _CONTAINER:
            held = ready[-shape:]
            del ready[-shape:]
            ready.append(what(held))
        else:
            ready.append(what if kind == _GIVEN else what.received(memory))
    return ready[0]


def to_jax(array: NDArray[Any]) -> Any:
    """The array as one of jax; not a copy where jax can do without."""
    import jax.numpy as jnp  # loaded: the leaf was given as one

    return jnp.asarray(array)
