"""What jax knows, where it is loaded already: its arrays, and the classes that are registered with it."""

import sys
from dataclasses import dataclass
from typing import Any

from gradcheck.problem.containers import Opened, step_of_key


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


def registered(value: Any) -> Opened | None:
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
