"""The parts of a claim that has the structure of the input, or of the output: each beside the leaf it belongs to."""

import math
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np

from gradcheck.errors import DerivativeShapeError
from gradcheck.problem.arguments import Arguments
from gradcheck.problem.containers import Given, Items
from gradcheck.problem.numbers import plain_rectangle, real_numbers
from gradcheck.problem.opening import opened
from gradcheck.problem.structure_text import NOTHING, Difference, Way, described, described_template, side_by_side
from gradcheck.problem.template import Leaf, Node, Template, Untouched
from gradcheck.records.arrays import Array
from gradcheck.wording import count

#: Stands for a part without entries that a claim leaves out.
_EMPTY = np.empty(0)


def nested_vector(template: Template, leaves: Sequence[Leaf], nested: Any, what: str) -> Array:
    """Vector (n,) of a claim on a scalar function: of the structure of the input, or flat."""
    size = leaves[-1].stop if leaves else 0
    return np.asarray(nested_matrix(template, size, nested, what, ())[0])


def nested_matrix(template: Template, size: int, nested: Any, what: str, leading: tuple[int, ...]) -> Array:
    """Rows (m, n) of a claim: arrays of shape ``leading + shape`` in the place of each leaf, or one array for all.

    Parameters
    ----------
    template : Template
        Of the input.
    size : int
        n.
    nested
        The claim.
    what : str
        How errors name it.
    leading : tuple of int
        Shape of the output; m is its size.

    Raises
    ------
    DerivativeShapeError
        If the structures differ; the text shows both.
    UsageError
        If a part is no array of real numbers.
    """
    if 0 in leading:  # an output without entries: nothing is claimed about it
        return np.zeros((0, size))
    flat = _flat(nested, (*leading, size), what) if hasattr(nested, "shape") or hasattr(nested, "toarray") else None
    if flat is not None:
        return flat.reshape(-1, size)
    try:
        return _structured(template, size, nested, what, leading)
    except Difference as difference:
        array = plain_rectangle(nested)
        flat = None if array is None else _flat(array, (*leading, size), what)
        if flat is not None:
            return flat.reshape(-1, size)
        if leading and isinstance(nested, list | tuple) and len(nested) == leading[0]:
            rows = [nested_matrix(template, size, part, f"{what}[{i}]", leading[1:]) for i, part in enumerate(nested)]
            return np.concatenate(rows)
        raise refused(difference, what) from None


def refused(difference: Difference, what: str, due: str = "the structure of the input") -> DerivativeShapeError:
    """The one error about two structures."""
    return DerivativeShapeError(f"{what} must have {due}: {difference.said}\n{side_by_side(difference)}", name=what)


def _flat(nested: Any, shape: tuple[int, ...], what: str) -> Array | None:
    """A claim that is one array for all variables; None where its shape is another one."""
    array = nested.toarray() if hasattr(nested, "toarray") else nested
    accepted = {shape, (math.prod(shape[:-1]), shape[-1])} if len(shape) > 1 else {shape}
    if tuple(getattr(array, "shape", ())) not in accepted or (shape == (1,) and not hasattr(array, "shape")):
        return None
    return real_numbers(array, what)


def _structured(template: Template, size: int, nested: Any, what: str, leading: tuple[int, ...]) -> Array:
    matrix = np.zeros((math.prod(leading), size))
    for leaf, part, way in matched(template, nested, leading):
        matrix[:, leaf.start : leaf.stop] = _block(leaf, part, way, what, leading)
    return matrix


def _block(leaf: Leaf, part: Any, way: Way | None, what: str, leading: tuple[int, ...]) -> Array:
    """The part of a claim that belongs to one leaf, (m, size)."""
    due = (*leading, *leaf.shape)
    size = leaf.stop - leaf.start

    def differs(said: str) -> Difference:
        return Difference(said, way, leaf, part, leading)

    if type(part) is np.ndarray and part.dtype.kind in "fiub":  # the usual case; its name is long to make
        found = part.astype(float)
    elif part is None:
        raise differs(f"None stands at {leaf.path}; where the model does not depend on it, claim zeros of shape {due}")
    elif opened(part) is not None and plain_rectangle(part) is None and not _is_array_like(part):
        raise differs(f"{described(part)} stands at {leaf.path}, where {described_template(leaf, leading)} is due")
    else:
        found = real_numbers(part.toarray() if hasattr(part, "toarray") else part, f"{what} at {leaf.path}")
    if found.shape in (due, (math.prod(leading), size)) or (math.prod(due) == found.size <= 1):
        return found.reshape(math.prod(leading), size)
    text = f"it has shape {found.shape} at {leaf.path}, where shape {due} is due"
    inner = found.shape[len(leading) :]
    if found.shape[: len(leading)] == leading and len(inner) == 2 and inner[::-1] == leaf.shape:
        text += "; its transpose would fit" + (": claim.T" if not leading else "")
    elif (*leaf.shape, *leading) == found.shape and leading:
        text += "; the axes of the output must come first"
    elif found.size == math.prod(due):
        text += "; it has the right number of entries: reshape it"
    raise differs(text)


def _is_array_like(part: Any) -> bool:
    """Whether numpy makes one array of a list with arrays in it; what it holds is looked at elsewhere."""
    if not isinstance(part, list | tuple):
        return False
    try:
        return np.asarray(part).dtype.kind != "O"
    except (TypeError, ValueError):
        return False


def matched(template: Template, nested: Any, leading: tuple[int, ...] = ()) -> Iterator[tuple[Leaf, Any, Way | None]]:
    """Each leaf of the template, what stands in its place, and the way there.

    Parts that are no variables may hold anything (None, zeros, jax's float0), or be left out of a mapping.

    Raises
    ------
    Difference
        At the first one.
    """
    waiting: list[tuple[Template, Any, Way | None]] = [(template, nested, None)]
    while waiting:
        part, found, way = waiting.pop()
        if isinstance(part, Leaf):
            yield part, found, way
        elif isinstance(part, Node):
            held = _held(part, found, way, leading)
            inner = [(each, held[i], Way(way, part, found, i)) for i, each in enumerate(part.parts)]
            waiting.extend(reversed([each for each in inner if not isinstance(each[0], Untouched)]))


def _held(node: Node, found: Any, way: Way | None, leading: tuple[int, ...]) -> list[Any]:
    """What `found` holds for each part of the node; anything where it is no variable."""
    if isinstance(node.container, Given):
        return _arguments(node, node.container, found, way, leading)
    known = opened(found)
    if known is None and isinstance(found, np.ndarray) and found.ndim and not node.container.named:
        known = opened(list(found))  # one row a part
    if known is not None:
        container, parts = known
        if not container.named:
            # a dict has no places that a tuple could follow without doubt
            if not node.container.named or (isinstance(found, tuple) and not isinstance(node.container, Items)):
                return _in_turn(node, parts, found, way, leading)
        elif node.container.named or set(container.labels) == set(node.container.labels):
            return _by_name(node, dict(zip(container.labels, parts, strict=True)), found, way, leading)
    if found is None and way is None:
        raise Difference("it returned None; does it lack a return statement?", way, node, found, leading)
    where = f"stands at {way.path}" if way is not None else "was found"
    raise Difference(f"{described(found)} {where}, where {described_template(node)} is due", way, node, found, leading)


def _by_name(node: Node, held: dict[Any, Any], found: Any, way: Way | None, leading: tuple[int, ...]) -> list[Any]:
    labels = node.container.labels
    extra = _unknown(found, {*labels, *getattr(node.container, "derived", ())})
    for i, (label, part) in enumerate(zip(labels, node.parts, strict=True)):
        if label not in held and _due(part):
            step = node.container.step(i)
            instead = f"; {extra[0][1]} stands there instead" if extra else ""
            raise Difference(f"{step} is missing{_at(way)}{instead}", Way(way, node, found, i), part, NOTHING, leading)
    if extra:
        key, step = extra[0]
        way_there = Way(way, node, found, len(labels))
        raise Difference(f"{step} is one too many{_at(way)}", way_there, NOTHING, held[key], leading, step)
    return [held.get(label, _EMPTY) for label in labels]


def _unknown(found: Any, labels: set[Any]) -> list[tuple[Any, str]]:
    """What `found` holds beside the expected, and how that reads in a name."""
    known = opened(found)
    container = known[0] if known is not None else None
    if container is None:
        return []
    return [(label, container.step(i)) for i, label in enumerate(container.labels) if label not in labels]


def _in_turn(node: Node, parts: list[Any], found: Any, way: Way | None, leading: tuple[int, ...]) -> list[Any]:
    due = len(node.parts)
    if len(parts) == due:
        return parts
    varying = [i for i, part in enumerate(node.parts) if not isinstance(part, Untouched)]
    if len(parts) == len(varying):  # those that are no variables were left out
        given = dict(zip(varying, parts, strict=True))
        return [given.get(i) for i in range(due)]
    short = min(len(parts), due)
    raise Difference(
        f"it has {count(len(parts), 'part')}{_at(way)}, where {due} are due",
        Way(way, node, found, short),
        node.parts[short] if short < due else NOTHING,
        parts[short] if short < len(parts) else NOTHING,
        leading,
        f"[{short}]",
    )


def _arguments(node: Node, container: Given, found: Any, way: Way | None, leading: tuple[int, ...]) -> list[Any]:
    """One part per differentiated argument, in their order, or by their names."""
    wanted = [i for i in container.wanted if not isinstance(node.parts[i], Untouched)]
    names = [container.labels[i] for i in wanted]
    only = node.parts[wanted[0]] if len(wanted) == 1 else None
    if isinstance(found, Arguments):
        found = {**dict(zip(names, found.positional, strict=False)), **found.keywords}
    if type(found) is dict and set(found) == set(names) and not isinstance(only, Node):
        given = [found[name] for name in names]
    elif only is not None and not (isinstance(found, tuple) and len(found) == 1):
        given = [found]
    elif isinstance(found, list | tuple) and len(found) == len(wanted):
        given = list(found)
    else:
        held = count(len(found), "part") if isinstance(found, list | tuple) else described(found)
        raise Difference(
            f"one part per differentiated argument is due ({', '.join(names)}), in a tuple; found {held}",
            way,
            node,
            found,
            leading,
        )
    parts: list[Any] = [None] * len(node.parts)
    for i, part in zip(wanted, given, strict=True):
        parts[i] = part
    return parts


def _due(part: Template) -> bool:
    return isinstance(part, Node) or (isinstance(part, Leaf) and part.stop > part.start)


def _at(way: Way | None) -> str:
    return f" at {way.path}" if way is not None else ""
