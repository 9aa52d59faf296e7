"""Objects with named fields: dataclasses, attrs classes, plain namespaces."""

import copy
from dataclasses import dataclass, fields, is_dataclass
from functools import cached_property
from types import SimpleNamespace
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.containers import attempt


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


def field_names(value: Any) -> tuple[str, ...] | None:
    """Names of the fields that a constructor is given; None where the object has none. The others it derives."""
    if is_dataclass(value):
        return tuple(field.name for field in fields(value) if field.init and hasattr(value, field.name))
    if hasattr(type(value), "__attrs_attrs__"):
        return tuple(field.name for field in type(value).__attrs_attrs__ if field.init and hasattr(value, field.name))
    return tuple(vars(value)) if isinstance(value, SimpleNamespace) else None


def object_of(value: Any, names: tuple[str, ...], parts: list[Any]) -> Fields:
    kind = type(value)
    keywords = names
    if hasattr(kind, "__attrs_attrs__"):
        alias = {field.name: getattr(field, "alias", field.name) for field in kind.__attrs_attrs__}
        keywords = tuple(alias[name] for name in names)
    derived = _derived_names(value)
    again = attempt(Fields(kind, names, keywords), parts)
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


def _same(left: Any, right: Any) -> bool:
    if left is right:
        return True
    try:
        return type(left) is type(right) and bool(np.all(np.asarray(left == right)))
    except Exception:
        return False
