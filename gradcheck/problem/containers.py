"""Mappings, sequences and arguments without their parts, and how they are made again from others."""

import copy
import json
from collections.abc import Mapping, MutableMapping
from dataclasses import dataclass
from typing import Any, Protocol, TypeAlias


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


def mapping(value: Mapping[Any, Any]) -> Opened:
    labels, parts = tuple(value), list(value.values())
    original = value if isinstance(value, MutableMapping) else None
    for container in (Items(type(value), labels, original), Items(type(value), labels)):
        if type(attempt(container, parts)) is type(value):
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


def sequence(value: list[Any] | tuple[Any, ...]) -> Opened:
    container, parts = Places(type(value), len(value)), list(value)
    if type(attempt(container, parts)) is type(value):
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


def attempt(container: Container, parts: list[Any]) -> Any:
    """The container made again; None where that does not work."""
    try:
        return container.make(list(parts))
    except Exception:
        return None
