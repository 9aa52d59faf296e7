"""Any container and its parts, one level at a time.

No registry of our own: the standard library knows mappings, sequences, named tuples and dataclasses, and jax, where it
is loaded already, knows what was registered with it.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np

from gradcheck.problem.arguments import Arguments
from gradcheck.problem.containers import Given, Items, NamedPlaces, Opened, Places, mapping, sequence
from gradcheck.problem.fields import field_names, object_of
from gradcheck.problem.jax_trees import registered


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
    return registered(value) or _other(value)


def _other(value: Any) -> Opened | None:
    if isinstance(value, Arguments):
        given = Given(len(value.positional), tuple(value.keywords))
        return given, [*value.positional, *value.keywords.values()]
    if isinstance(value, Mapping):
        return mapping(value)
    if isinstance(value, list | tuple):
        return sequence(value)
    names = field_names(value)
    if names is None:
        return None
    parts = [getattr(value, name) for name in names]
    return object_of(value, names, parts), parts
