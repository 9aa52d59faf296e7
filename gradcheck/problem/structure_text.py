"""Two structures side by side, as few lines as show where they first differ."""

from dataclasses import dataclass
from itertools import zip_longest
from typing import Any

import numpy as np

from gradcheck.problem.containers import Given
from gradcheck.problem.opening import opened
from gradcheck.problem.template import Leaf, Node, Place, Template, Untouched

#: Parts shown before and after the first difference, and containers shown around it.
_BESIDE, _AROUND = 2, 4
_WIDEST = 44

#: What is missing on one side.
NOTHING = object()


@dataclass(frozen=True, slots=True, eq=False)
class Way:
    """One container on the way to a difference: what is expected, what was found, and which part comes next."""

    before: "Way | None"
    node: Node
    found: Any
    next: int

    @property
    def step(self) -> str:
        """Name of the part that comes next."""
        return self.node.container.step(self.next)

    @property
    def path(self) -> str:
        """Name of that part from the top."""
        return str(Place(self.node.place, (self.node.container, self.next)))


@dataclass(eq=False)
class Difference(Exception):
    """The first difference between two structures.

    Attributes
    ----------
    said : str
        In words.
    way : Way or None
        The containers that hold it, innermost first.
    expected, found : Template or value
        The two that differ; `NOTHING` for one that is missing.
    leading : tuple of int
        Axes that each expected array has before those of the input: those of the output.
    label : str
        Name of a part that is one too many.
    """

    said: str
    way: Way | None
    expected: Any
    found: Any
    leading: tuple[int, ...] = ()
    label: str = ""


def side_by_side(difference: Difference) -> str:
    """Both structures in some lines, the first difference marked by ``>``."""
    trail: list[Way] = []
    way = difference.way
    while way is not None:
        trail.append(way)
        way = way.before
    trail.reverse()
    rows: list[tuple[str, str, str]] = [(" ", "expected", "found")]
    far = range(1, len(trail) - _AROUND + 1)
    for depth, step in enumerate(trail):
        if depth in far:
            rows += [(" ", "  …", "  …")] if depth == 1 else []
            continue
        label = trail[depth - 1].step if depth else _root(step.node)
        rows.append(_row(" ", depth - max(0, len(far) - 1) * (depth > 1), label, step.node, step.found, difference))
    if trail:
        rows += _children(trail[-1], difference, len(trail) - max(0, len(far) - 1))
    else:
        rows.append(_row(">", 0, _root(difference.expected), difference.expected, difference.found, difference))
        rows += _only_one_side(difference)
    left = max(len(row[1]) for row in rows)
    return "\n".join(f"  {mark} {expected:<{left}}  {found}".rstrip() for mark, expected, found in rows)


def _root(template: Any) -> str:
    return (str(template.place) if isinstance(template, Node | Leaf) else "") or "claim"


def _children(way: Way, difference: Difference, depth: int) -> list[tuple[str, str, str]]:
    """The parts of the innermost container, around the one that differs."""
    node, at = way.node, way.next
    held = _by_label(way)
    first, last = max(0, at - _BESIDE), min(len(node.parts), at + _BESIDE + 1)
    more = (" ", f"{'  ' * depth}…", f"{'  ' * depth}…")
    rows = [more] if first else []
    for i in range(first, last):
        if i == at:
            rows.append(_row(">", depth, way.step, difference.expected, difference.found, difference))
        else:
            found = held.get(node.container.labels[i], NOTHING)
            rows.append(_row(" ", depth, node.container.step(i), node.parts[i], found, difference))
    if at >= len(node.parts):
        rows.append(_row(">", depth, difference.label, NOTHING, difference.found, difference))
    elif last < len(node.parts):
        rows.append(more)
    return rows


def _by_label(way: Way) -> dict[Any, Any]:
    """What was found, by the labels of the expected container."""
    known = opened(way.found)
    if known is None:
        return {}
    container, parts = known
    labels = container.labels if container.named and way.node.container.named else way.node.container.labels
    return dict(zip(labels, parts, strict=False))


def _only_one_side(difference: Difference) -> list[tuple[str, str, str]]:
    """Where the whole is of another kind: what each side holds."""
    most = 2 * _BESIDE
    left, right = [], []
    if isinstance(difference.expected, Node):
        node = difference.expected
        left = [(node.container.step(i), part) for i, part in enumerate(node.parts[: most + 1])]
    known = opened(difference.found)
    if known is not None:
        right = [(known[0].step(i), part) for i, part in enumerate(known[1][: most + 1])]
    rows = []
    for (label, expected), (other, found) in zip_longest(left[:most], right[:most], fillvalue=("", NOTHING)):
        one = _row(" ", 1, label, expected, NOTHING, difference)[1]
        rows.append((" ", one, _row(" ", 1, other, NOTHING, found, difference)[2]))
    if max(len(left), len(right)) > most:
        rows.append((" ", "  …" if len(left) > most else "", "  …" if len(right) > most else ""))
    return rows


def _row(mark: str, depth: int, label: str, expected: Any, found: Any, difference: Difference) -> tuple[str, str, str]:
    left = f"{label}: {described_template(expected, difference.leading)}" if expected is not NOTHING else ""
    right = f"{label}: {described(found)}" if found is not NOTHING else ""
    if mark == ">":
        left, right = left or f"{label}: -", right or f"{label}: -"
    indent = "  " * depth
    return mark, _fitting(f"{indent}{left}".rstrip()), _fitting(f"{indent}{right}".rstrip())


def _fitting(text: str) -> str:
    return text if len(text) <= _WIDEST else f"{text[: _WIDEST - 1]}…"


def described_template(template: Template, leading: tuple[int, ...] = ()) -> str:
    """What stands in a place: ``dict of 2``, ``array (3, 2)``, ``number``."""
    if isinstance(template, Leaf):
        shape = (*leading, *template.shape)
        return f"array {shape}" if shape or not template.scalar else "number"
    if isinstance(template, Untouched):
        return "(anything: no variable)"
    if isinstance(template.container, Given):
        return f"tuple of {len(template.container.wanted)}"
    return f"{template.container.word} of {len(template.parts)}"


def described(value: Any) -> str:
    """The same for a value: ``dict of 2``, ``array (3, 2)``, ``None``, ``str 'steep'``."""
    known = opened(value)
    if known is not None:
        return f"{known[0].word} of {len(known[1])}"
    if value is None:
        return "None"
    if isinstance(value, bool | int | float) or (isinstance(value, np.generic) and value.dtype.kind in "fiu"):
        return "number"
    shape, dtype = getattr(value, "shape", None), getattr(value, "dtype", None)
    if shape is not None and dtype is not None:
        kind = "" if getattr(dtype, "kind", "f") in "fiu" else f" of {dtype}"
        word = "array" if isinstance(value, np.ndarray) or not hasattr(value, "toarray") else "sparse matrix"
        return f"{word} {tuple(shape)}{kind}"
    return f"{type(value).__name__} {value!r:.20}" if isinstance(value, str) else type(value).__name__
