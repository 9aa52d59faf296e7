"""What a container is made of, and how it is made again from other parts: one level at a time.

No registry of our own: the standard library knows mappings, sequences, named tuples and dataclasses, and jax, where it
is loaded already, knows what was registered with it.
"""

import copy
import json
import sys
from collections.abc import Mapping, MutableMapping
from dataclasses import dataclass, fields, is_dataclass
from functools import cached_property
from types import SimpleNamespace
from typing import Any, Protocol, TypeAlias

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.arguments import Arguments


class Container(Protocol):
    """One container without its parts.

    Attributes
    ----------
    word : str
        What it is, in words: ``"dict"``, ``"Beam"``.
    labels : sequence
        What each part is asked for by: keys, positions, names of attributes.
    named : bool
        Whether the labels are names or keys, so that another container with the same ones can stand for it.
    """

    @property
    def word(self) -> str: ...
    @property
    def labels(self) -> tuple[Any, ...]: ...
    @property
    def named(self) -> bool: ...

    def step(self, i: int) -> str:
        """What stands in a name for part `i`: ``["a"]``, ``[0]``, ``.w``."""

    def make(self, parts: list[Any]) -> Any:
        """A container like this one, of these parts."""


Opened: TypeAlias = tuple[Container, list[Any]]


def opened(value: Any) -> Opened | None:
    """A container and its parts; None for anything that is none."""
    kind = type(value)
    if kind is dict:
        return Items(dict, tuple(value)), list(value.values())
    if kind is list or kind is tuple:
        return Places(kind, len(value)), list(value)
    if isinstance(value, np.ndarray | np.generic | str | bytes | int | float | type(None) | type):
        return None
    if isinstance(value, tuple) and hasattr(value, "_fields"):
        return NamedPlaces(kind, tuple(value._fields)), list(value)
    return _registered(value) or _other(value)


def _other(value: Any) -> Opened | None:
    if isinstance(value, Arguments):
        given = Given(len(value.positional), tuple(value.keywords))
        return given, [*value.positional, *value.keywords.values()]
    if isinstance(value, Mapping):
        return _mapping(value)
    if isinstance(value, list | tuple):
        return _sequence(value)
    names = _field_names(value)
    if names is None:
        return None
    parts = [getattr(value, name) for name in names]
    return _object(value, names, parts), parts


# --- mappings and sequences ------------------------------------------------------------------------------------------


def step_of_key(key: Any) -> str:
    """``["a"]``, ``[3]``, ``[(0, 1)]``."""
    return f"[{json.dumps(key, ensure_ascii=False) if isinstance(key, str) else repr(key)}]"


@dataclass(frozen=True, slots=True, eq=False)
class Items:
    """A mapping. `original` holds what else there is to know, such as the default of a ``defaultdict``."""

    kind: Any
    labels: tuple[Any, ...]
    original: Any = None

    named = True

    @property
    def word(self) -> str:
        return str(self.kind.__name__)

    def step(self, i: int) -> str:
        return step_of_key(self.labels[i])

    def make(self, parts: list[Any]) -> Any:
        content = dict(zip(self.labels, parts, strict=True))
        if self.kind is dict:
            return content
        if self.original is None:
            return self.kind(content)
        again = copy.copy(self.original)
        again.update(content)
        return again


def _mapping(value: Mapping[Any, Any]) -> Opened:
    labels, parts = tuple(value), list(value.values())
    original = value if isinstance(value, MutableMapping) else None
    for container in (Items(type(value), labels, original), Items(type(value), labels)):
        if type(_attempt(container, parts)) is type(value):
            return container, parts
    return Items(dict, labels), parts


@dataclass(frozen=True, slots=True, eq=False)
class Places:
    """A list or a tuple, or a class derived from them."""

    kind: Any
    count: int

    named = False

    @property
    def word(self) -> str:
        return str(self.kind.__name__)

    @property
    def labels(self) -> tuple[int, ...]:
        return tuple(range(self.count))

    def step(self, i: int) -> str:
        return f"[{i}]"

    def make(self, parts: list[Any]) -> Any:
        return parts if self.kind is list else self.kind(parts)


def _sequence(value: list[Any] | tuple[Any, ...]) -> Opened:
    container, parts = Places(type(value), len(value)), list(value)
    if type(_attempt(container, parts)) is type(value):
        return container, parts
    return Places(list if isinstance(value, list) else tuple, len(value)), parts


@dataclass(frozen=True, slots=True, eq=False)
class NamedPlaces:
    """A named tuple."""

    kind: Any
    labels: tuple[str, ...]

    named = True

    @property
    def word(self) -> str:
        return str(self.kind.__name__)

    def step(self, i: int) -> str:
        return f".{self.labels[i]}"

    def make(self, parts: list[Any]) -> Any:
        return self.kind._make(parts)


@dataclass(frozen=True, slots=True, eq=False)
class Given:
    """The arguments of one call; made again as positional and keyword arguments."""

    positional: int
    keywords: tuple[str, ...]
    names: tuple[str, ...] = ()
    #: Which of them are differentiated, in the order of claims.
    wanted: tuple[int, ...] = ()

    named = False
    word = "arguments"

    @property
    def labels(self) -> tuple[str, ...]:
        return self.names or (*(f"argument {i}" for i in range(self.positional)), *self.keywords)

    def step(self, i: int) -> str:
        return self.labels[i]

    def make(self, parts: list[Any]) -> tuple[tuple[Any, ...], dict[str, Any]]:
        return tuple(parts[: self.positional]), dict(zip(self.keywords, parts[self.positional :], strict=True))


# --- objects with named fields ---------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Fields:
    """An object with named fields: a dataclass, an attrs class, a ``SimpleNamespace``.

    Made again by its own constructor, so that what the class derives from its fields follows them. Where that does not
    give the object back (the constructor takes other things, or changes them), a copy gets the fields one by one.
    """

    kind: Any
    labels: tuple[str, ...]
    keywords: tuple[str, ...]
    original: Any = None
    carried: tuple[tuple[str, Any], ...] = ()
    stale: tuple[str, ...] = ()
    #: Fields that no constructor is given; a claim may hold them, and is not asked for them.
    derived: tuple[str, ...] = ()

    named = True

    @property
    def word(self) -> str:
        return str(self.kind.__name__)

    def step(self, i: int) -> str:
        return f".{self.labels[i]}"

    def make(self, parts: list[Any]) -> Any:
        if self.original is None:
            again = self.kind(**dict(zip(self.keywords, parts, strict=True)))
            for name, value in self.carried:
                object.__setattr__(again, name, value)
            return again
        again = copy.copy(self.original)
        for name, part in zip(self.labels, parts, strict=True):
            object.__setattr__(again, name, part)
        for name in self.stale:
            again.__dict__.pop(name, None)
        return again


def _field_names(value: Any) -> tuple[str, ...] | None:
    """Names of the fields that a constructor is given; None where the object has none. The others it derives."""
    if is_dataclass(value):
        return tuple(field.name for field in fields(value) if field.init and hasattr(value, field.name))
    if hasattr(type(value), "__attrs_attrs__"):
        return tuple(field.name for field in type(value).__attrs_attrs__ if field.init and hasattr(value, field.name))
    return tuple(vars(value)) if isinstance(value, SimpleNamespace) else None


def _object(value: Any, names: tuple[str, ...], parts: list[Any]) -> Fields:
    kind = type(value)
    keywords = names
    if hasattr(kind, "__attrs_attrs__"):
        alias = {field.name: getattr(field, "alias", field.name) for field in kind.__attrs_attrs__}
        keywords = tuple(alias[name] for name in names)
    derived = _derived_names(value)
    again = _attempt(Fields(kind, names, keywords), parts)
    # A derived field that the constructor does not set was set by hand: it travels along.
    carried = tuple((name, getattr(value, name)) for name in derived if not hasattr(again, name))
    everything = [*names, *(name for name in derived if hasattr(again, name))]
    if type(again) is kind and all(_same(getattr(again, name, None), getattr(value, name)) for name in everything):
        return Fields(kind, names, keywords, carried=carried, derived=tuple(derived))
    stale = [name for name in getattr(value, "__dict__", ()) if isinstance(getattr(kind, name, None), cached_property)]
    copied = Fields(kind, names, keywords, original=value, stale=tuple(stale), derived=tuple(derived))
    try:
        copied.make(parts)
    except Exception as error:
        raise UsageError(
            f"an object of {kind.__name__} cannot be made again with other values ({type(error).__name__}: {error}); "
            "wrap the model so that it takes plain arrays or a dict"
        ) from error
    return copied


def _derived_names(value: Any) -> list[str]:
    """Fields that no constructor is given."""
    declared = fields(value) if is_dataclass(value) else getattr(type(value), "__attrs_attrs__", ())
    return [field.name for field in declared if not field.init and hasattr(value, field.name)]


def _attempt(container: Container, parts: list[Any]) -> Any:
    """The container made again; None where that does not work."""
    try:
        return container.make(list(parts))
    except Exception:
        return None


def _same(left: Any, right: Any) -> bool:
    if left is right:
        return True
    try:
        return type(left) is type(right) and bool(np.all(np.asarray(left == right)))
    except Exception:
        return False


# --- what is registered with jax -------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Registered:
    """A node of a jax pytree, taken apart and made again by its own rules."""

    kind: Any
    labels: tuple[Any, ...]
    steps: tuple[str, ...]
    structure: Any

    named = True

    @property
    def word(self) -> str:
        return str(self.kind.__name__)

    def step(self, i: int) -> str:
        return self.steps[i]

    def make(self, parts: list[Any]) -> Any:
        return self.structure.unflatten(parts)


def _registered(value: Any) -> Opened | None:
    trees = sys.modules.get("jax.tree_util")
    if trees is None or is_jax_array(value):
        return None
    below, structure = trees.tree_flatten_with_path(value, is_leaf=lambda part: part is not value)
    if trees.treedef_is_leaf(structure):
        return None
    parts = [part for _, part in below]
    keys = [path[0] for path, _ in below]
    known = [_label(value, key, part) for key, part in zip(keys, parts, strict=True)]
    return Registered(
        type(value), tuple(label for label, _ in known), tuple(step for _, step in known), structure
    ), parts


def _label(value: Any, key: Any, part: Any) -> tuple[Any, str]:
    """By what a part is asked for, and how that reads in a name."""
    if hasattr(key, "name"):
        return key.name, f".{key.name}"
    if hasattr(key, "idx"):
        return key.idx, f"[{key.idx}]"
    if type(key).__name__ == "FlattenedIndexKey":  # registered without names: the attribute that holds it is one
        holding = [name for name, held in getattr(value, "__dict__", {}).items() if held is part]
        return (holding[0], f".{holding[0]}") if len(holding) == 1 else (key.key, f"[{key.key}]")
    return (key.key, step_of_key(key.key)) if hasattr(key, "key") else (str(key), str(key))


def is_jax_array(value: Any) -> bool:
    """Whether it is an array of jax; jax is not loaded for the question."""
    jax = sys.modules.get("jax")
    return jax is not None and hasattr(jax, "Array") and isinstance(value, jax.Array)
