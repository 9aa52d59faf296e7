"""Nested inputs <-> one vector (n,), with a readable name for every entry."""

import inspect
import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.records.arrays import Array


@dataclass(frozen=True, slots=True, eq=False)
class Arguments:
    """Several arguments for one model; made by `args`."""

    positional: tuple[Any, ...]
    keywords: Mapping[str, Any]


@dataclass(frozen=True, slots=True, eq=False)
class Points:
    """Several points for one check; made by `points`."""

    each: tuple[Any, ...]


def args(*positional: Any, **keywords: Any) -> Arguments:
    """The arguments of a model that takes several: ``at=gradcheck.args(a, b, mode="fast")``.

    Examples
    --------
    >>> import gradcheck
    >>> gradcheck.check(lambda a, b: a * b, at=gradcheck.args(2.0, 3.0), gradient=lambda a, b: (b, a))
    """
    return Arguments(positional, keywords)


def points(*each: Any) -> Points:
    """Several points, each checked: ``at=gradcheck.points(p1, p2)``. A 2-d array is one argument, never k points.

    Raises
    ------
    UsageError
        If no point is given.

    Examples
    --------
    >>> import gradcheck
    >>> len(gradcheck.points([1.0, 2.0], [3.0, 4.0]).each)
    2
    """
    if not each:
        raise UsageError("gradcheck.points() holds no point; give at least one")
    return Points(each)


@dataclass(frozen=True, slots=True)
class Leaf:
    """Part of the vector: where it stands, and the shape in which the model receives it."""

    path: str
    start: int
    shape: tuple[int, ...]
    scalar: bool
    dtype: np.dtype[Any] = field(default=np.dtype(float))

    @property
    def stop(self) -> int:
        return self.start + math.prod(self.shape)

    def restore(self, vector: Array) -> Any:
        """The model's own copy of this part."""
        if self.scalar:
            return vector[self.start].item()
        return vector[self.start : self.stop].reshape(self.shape).copy()

    def name(self, index: int) -> str:
        """Name of the entry at `index` of the whole vector."""
        if not self.shape:
            return self.path
        if len(self.shape) == 1:
            return f"{self.path}[{index - self.start}]"
        inner = np.unravel_index(index - self.start, self.shape)
        return f"{self.path}[{', '.join(str(int(i)) for i in inner)}]"


@dataclass(frozen=True, slots=True)
class Untouched:
    """A part that is no variable: text, flags, integers inside a nesting, arguments outside `wrt`."""

    value: Any


@dataclass(frozen=True, slots=True, eq=False)
class Layout:
    """The way between what the model takes and one vector.

    Attributes
    ----------
    template : nested
        The structure, with a `Leaf` or `Untouched` in each place.
    leaves : tuple of Leaf
    notices : tuple of str
        What was changed on the way in.
    """

    template: Any
    leaves: tuple[Leaf, ...]
    notices: tuple[str, ...] = ()
    names: tuple[str, ...] = ()

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

    def restore(self, vector: Array) -> tuple[tuple[Any, ...], dict[str, Any]]:
        """Positional and keyword arguments for one call of the model, all of them fresh copies."""
        return self.arguments(lambda leaf: leaf.restore(vector))

    def arguments(self, of_leaf: Callable[[Leaf], Any]) -> tuple[tuple[Any, ...], dict[str, Any]]:
        """Positional and keyword arguments with ``of_leaf(leaf)`` in each variable place (AD tracers, say)."""
        filled = _walk(self.template, of_leaf)
        if isinstance(filled, Arguments):
            return filled.positional, dict(filled.keywords)
        return (filled,), {}

    def name(self, index: int) -> str:
        """Readable name of one entry, made only when it is shown."""
        if self.names:
            return self.names[index]
        for leaf in self.leaves:
            if leaf.start <= index < leaf.stop:
                return leaf.name(index)
        raise IndexError(index)

    def flatten(self, nested: Any, what: str) -> Array:
        """Vector (n,) of a claim that has the structure of the input (or is already flat).

        Raises
        ------
        UsageError
            If the structures differ.
        """
        parts = list(_parts(self.template, nested, what))
        return np.concatenate([np.ravel(part) for part in parts]) if parts else np.empty(0)


def layout_of(at: Any, *, root: str = "x", wrt: Any = None, function: Any = None) -> tuple[Layout, Array]:
    """The layout of an input, and the input as a vector.

    A rectangular list or tuple of plain numbers is a float array of that shape; ``0.3`` is a scalar; anything that
    holds an array, a dict or parts of unequal shape is a nesting and reaches the model as such.

    Raises
    ------
    UsageError
        If the input is empty, complex, not numeric, or `wrt` names no argument.
    """
    if wrt is not None and not isinstance(at, Arguments):
        raise UsageError(f"wrt={wrt!r} names an argument, but `at` holds one only; give them by at=gradcheck.args(...)")
    builder = _Builder(function=function, wrt=wrt)
    template = builder.build(at, root, top=True)
    if not builder.values or sum(value.size for value in builder.values) == 0:
        raise UsageError(
            f"`at` is {at!r:.80}: it holds no real number to differentiate with respect to"
            + ("; whole numbers beside text, flags or None are no variables: write 1.0" if _passed_on(template) else "")
        )
    layout = Layout(template, tuple(builder.leaves), tuple(dict.fromkeys(builder.notices)))
    return layout, np.concatenate([np.ravel(value) for value in builder.values])


class _Builder:
    """Walks a nesting once; collects leaves, their values and the notices."""

    def __init__(self, function: Any, wrt: Any) -> None:
        self.function = function
        self.wrt = None if wrt is None else {wrt} if isinstance(wrt, str | int) else set(wrt)
        self.leaves: list[Leaf] = []
        self.values: list[Array] = []
        self.notices: list[str] = []

    def build(self, value: Any, path: str, *, top: bool = False) -> Any:
        if isinstance(value, Arguments):
            return self._arguments(value)
        if isinstance(value, Mapping):
            return {key: self.build(part, f"{path}[{key!r}]") for key, part in value.items()}
        if isinstance(value, list | tuple):
            array = _rectangle(value)
            if array is None:
                return _like(value, [self.build(part, f"{path}[{i}]") for i, part in enumerate(value)])
            return self._leaf(array, path, scalar=False, top=True)
        if isinstance(value, bool | str | bytes) or value is None:
            return self._refuse_or_keep(value, path, top)
        if isinstance(value, int | float | complex | np.generic):
            return self._leaf(np.asarray(value), path, scalar=True, top=top)
        if hasattr(value, "__array__"):
            if not isinstance(value, np.ndarray):
                self.notices.append(f"{path} was given as {type(value).__name__}; the model received a numpy array")
            return self._leaf(np.asarray(value), path, scalar=False, top=top)
        return self._refuse_or_keep(value, path, top)

    def _leaf(self, array: np.ndarray[Any, Any], path: str, *, scalar: bool, top: bool) -> Any:
        if array.dtype.kind == "c":
            raise UsageError(
                f"{path} is complex ({array.dtype}); parameters must be real: pass real and imaginary parts as two "
                "entries and put them together inside the model"
            )
        if array.dtype.kind in "iub":
            if not top or array.dtype.kind == "b":
                self.notices.append(f"{path} holds integers ({array.dtype}) and was passed through untouched")
                return Untouched(array.item() if scalar else array)
            self.notices.append(f"{path} was given as integers; the model received float64")
        elif array.dtype.kind != "f":
            return self._refuse_or_keep(array, path, top)
        elif array.dtype.itemsize < 8:
            self.notices.append(f"{path} was given as {array.dtype}; the model received float64")
        values = array.astype(float)
        bad = np.flatnonzero(~np.isfinite(values))
        start = self.leaves[-1].stop if self.leaves else 0
        leaf = Leaf(path, start, values.shape, scalar, array.dtype)
        if bad.size:
            name = leaf.name(start + int(bad[0]))
            raise UsageError(f"`at` holds {np.ravel(values)[bad[0]]} at {name}; every entry must be finite")
        self.leaves.append(leaf)
        self.values.append(values)
        return leaf

    def _refuse_or_keep(self, value: Any, path: str, top: bool) -> Untouched:
        if top:
            raise UsageError(
                f"`at` is {value!r} ({type(value).__name__}); numbers are needed: a float, a list, an array, or a "
                "nesting of them"
            )
        return Untouched(value)

    def _arguments(self, value: Arguments) -> Arguments:
        names = _parameter_names(self.function, len(value.positional))
        known = [*names, *value.keywords]
        if self.wrt is not None:
            wanted = {names[name] if isinstance(name, int) and name < len(names) else name for name in self.wrt}
            unknown = sorted(str(name) for name in wanted if name not in known)
            if unknown:
                raise UsageError(f"wrt names {', '.join(unknown)}, but the arguments are {', '.join(known)}")
        else:
            wanted = set(known)

        def part(name: str, argument: Any) -> Any:
            return self.build(argument, name) if name in wanted else Untouched(argument)

        return Arguments(
            tuple(part(name, argument) for name, argument in zip(names, value.positional, strict=True)),
            {name: part(name, argument) for name, argument in value.keywords.items()},
        )


def real_numbers(value: Any, what: str) -> Array:
    """`value` as an array of float64.

    Raises
    ------
    UsageError
        If it is complex, text, or otherwise no array of real numbers.
    """
    if value is None:
        raise UsageError(f"{what} returned None; does the function lack a return statement?")
    try:
        array = np.asarray(value)
        if array.dtype.kind == "c":
            raise UsageError(f"{what} is complex ({array.dtype}); derivatives of a real model are real")
        return array.astype(float)
    except (TypeError, ValueError) as error:
        if isinstance(error, UsageError):
            raise
        raise UsageError(
            f"{what} is {type(value).__name__} {value!r:.80}; an array of real numbers is needed"
        ) from None


def _rectangle(value: list[Any] | tuple[Any, ...]) -> np.ndarray[Any, Any] | None:
    """Array of a rectangular list of plain numbers; None for anything else."""

    def plain_numbers(part: Any) -> bool:
        if isinstance(part, list | tuple):
            return all(plain_numbers(inner) for inner in part)
        return isinstance(part, int | float | complex | np.number) and not isinstance(part, bool)

    if not plain_numbers(value):
        return None
    try:
        return np.asarray(value)
    except ValueError:  # parts of unequal shape: a nesting
        return None


def _parameter_names(function: Any, count: int) -> list[str]:
    fallback = [f"argument {i}" for i in range(count)]
    try:
        parameters = [
            p.name
            for p in inspect.signature(function).parameters.values()
            if p.kind in (p.POSITIONAL_ONLY, p.POSITIONAL_OR_KEYWORD)
        ]
    except (TypeError, ValueError):
        return fallback
    return [*parameters[:count], *fallback[len(parameters) :]]


def _walk(template: Any, of_leaf: Callable[[Leaf], Any]) -> Any:
    if isinstance(template, Leaf):
        return of_leaf(template)
    if isinstance(template, Untouched):
        return template.value
    if isinstance(template, Arguments):
        return Arguments(
            tuple(_walk(part, of_leaf) for part in template.positional),
            {name: _walk(part, of_leaf) for name, part in template.keywords.items()},
        )
    if isinstance(template, dict):
        return {key: _walk(part, of_leaf) for key, part in template.items()}
    return _like(template, [_walk(part, of_leaf) for part in template])


def _like(sequence: Any, parts: list[Any]) -> Any:
    """The parts in a sequence of the same type; a named tuple takes them one by one."""
    return type(sequence)(*parts) if hasattr(sequence, "_fields") else type(sequence)(parts)


def _passed_on(template: Any) -> bool:
    """Whether a part of a template is a whole number that the model receives as it is."""
    if isinstance(template, Untouched):
        return isinstance(template.value, int) and not isinstance(template.value, bool)
    parts = template.values() if isinstance(template, dict) else template
    return isinstance(parts, Iterable) and any(map(_passed_on, parts))


def _varies(template: Any) -> bool:
    """Whether a part of a template holds any variable."""
    if isinstance(template, dict):
        return any(map(_varies, template.values()))
    return isinstance(template, Leaf) or (isinstance(template, list | tuple) and any(map(_varies, template)))


def _parts(template: Any, nested: Any, what: str) -> Iterator[Array]:
    """The parts of a claim that stand where the template has leaves, in order."""
    if isinstance(template, Leaf):
        found = real_numbers(nested, f"{what} at {template.path}")
        if found.size != template.stop - template.start:
            raise UsageError(
                f"{what} has shape {found.shape} at {template.path}, where the input has shape {template.shape}"
            )
        yield found
    elif isinstance(template, Arguments):
        yield from _argument_parts(template, nested, what)
    elif isinstance(template, dict):
        needed = {key: part for key, part in template.items() if _varies(part)}
        if not isinstance(nested, Mapping) or not set(needed) <= set(nested):
            raise UsageError(
                f"{what} must have the structure of the input, a dict with {sorted(map(str, needed))}; found "
                + (f"keys {sorted(map(str, nested))}" if isinstance(nested, Mapping) else type(nested).__name__)
            )
        for key, part in needed.items():
            yield from _parts(part, nested[key], what)
    elif isinstance(template, list | tuple):
        if not isinstance(nested, list | tuple) or len(nested) != len(template):
            raise UsageError(f"{what} must have the structure of the input: a sequence of {len(template)} parts")
        for part, found in zip(template, nested, strict=True):
            yield from _parts(part, found, what)


def _argument_parts(template: Arguments, nested: Any, what: str) -> Iterator[Array]:
    slots = [part for part in (*template.positional, *template.keywords.values()) if not isinstance(part, Untouched)]
    found = [nested] if len(slots) == 1 and not (isinstance(nested, tuple) and len(nested) == 1) else nested
    if not isinstance(found, list | tuple) or len(found) != len(slots):
        raise UsageError(f"{what} must give one part per differentiated argument: {len(slots)} are needed")
    for part, value in zip(slots, found, strict=True):
        yield from _parts(part, value, what)
