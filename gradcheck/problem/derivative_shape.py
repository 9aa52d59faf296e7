"""The shape or structure that a claimed derivative must have, and the claim as a matrix (m, n)."""

import math
from typing import Any

import numpy as np

from gradcheck.errors import DerivativeShapeError
from gradcheck.problem.layout import Layout, real_numbers
from gradcheck.problem.numbers import plain_rectangle
from gradcheck.problem.opening import opened
from gradcheck.problem.parts_of_claims import matched, nested_matrix, refused
from gradcheck.problem.structure_text import Difference
from gradcheck.records.arrays import Array


def claim_matrix(
    kind: str, raw: Any, layout: Layout, output_shape: tuple[int, ...], outputs: Layout | None = None
) -> Array:
    """A gradient or Jacobian claim as an array (m, n).

    Parameters
    ----------
    kind : "gradient" or "jacobian"
    raw : what the user's derivative returned, or the array they gave
        One array; or, for a nesting, the structure of the output, each part of it with the structure of the input,
        each part of that an array of shape ``output + input``, as AD gives them.
    layout : layout of x
    output_shape : shape of what the model returns
    outputs : layout of what the model returns, where that is a nesting

    Raises
    ------
    DerivativeShapeError
        If the shape does not fit; the text names both shapes and says if the transpose would fit. For nestings it
        shows both structures.
    UsageError
        If the claim is not numeric, or complex.
    """
    count = math.prod(output_shape)
    several = several_points_hint(layout)
    if kind == "gradient" and count != 1:
        raise DerivativeShapeError(
            f"the model returns shape {output_shape} ({count} outputs), so a gradient cannot be checked: claim "
            f"a Jacobian of shape ({count}, {layout.size}) with jacobian=..., or pick one output with output=..."
            f"{several}",
            name=kind,
            expected=(),
            found=output_shape,
        )
    what = f"the {kind} claim"
    _refuse_pair(kind, raw, layout)
    if outputs is not None and outputs.single is None:
        return _of_nested_output(kind, raw, layout, outputs)
    if layout.single is None:
        leading = () if kind == "gradient" and not _leads(raw, output_shape, layout) else output_shape
        return nested_matrix(layout.template, layout.size, raw, what, leading)
    raw = _unwrapped(raw)
    if opened(raw) is not None and not _stacks(raw):
        raise refused(
            Difference(_not_flat(raw), None, layout.template, raw, () if kind == "gradient" else output_shape), what
        )
    array = real_numbers(raw.toarray() if hasattr(raw, "toarray") else raw, what)
    if array.shape in _accepted(kind, layout, output_shape):
        return array.reshape(count, layout.size)
    raise _mismatch(kind, array.shape, layout, output_shape)


def _of_nested_output(kind: str, raw: Any, layout: Layout, outputs: Layout) -> Array:
    """A claim with the structure of the output, each part with that of the input; or one array (m, n)."""
    m, n = outputs.size, layout.size
    shape = tuple(getattr(raw, "shape", ()))
    if hasattr(raw, "toarray") or shape in {(m, n), (m, *layout.shape)}:
        array = real_numbers(raw.toarray() if hasattr(raw, "toarray") else raw, f"the {kind} claim")
        if array.shape in {(m, n), (m, *layout.shape)}:
            return array.reshape(m, n)
    plain = plain_rectangle(raw)
    if plain is not None and plain.shape == (m, n):
        return real_numbers(plain, f"the {kind} claim")
    matrix = np.zeros((m, n))
    try:
        for leaf, part, _ in matched(outputs.template, raw):
            what = f"the {kind} claim at {leaf.path}"
            matrix[leaf.start : leaf.stop] = nested_matrix(layout.template, n, part, what, leaf.shape)
    except Difference as difference:
        raise refused(difference, f"the {kind} claim", "the structure of the output") from None
    return matrix


def _leads(raw: Any, output_shape: tuple[int, ...], layout: Layout) -> bool:
    """Whether a gradient claim on a nesting has the output's own axes of length one in front of each part."""
    if not output_shape:
        return False
    try:
        parts = [(leaf, part) for leaf, part, _ in matched(layout.template, raw)]
    except Difference:
        return False
    return all(tuple(getattr(part, "shape", ())) == (*output_shape, *leaf.shape) for leaf, part in parts)


def several_points_hint(layout: Layout) -> str:
    """What rows of a table of numbers may have been meant as."""
    if layout.single is None or len(layout.shape) != 2:
        return ""
    return (
        f"; at= is one point of shape {layout.shape} here: if its rows are {layout.shape[0]} points, write "
        "at=gradcheck.points(...) with one argument a row"
    )


def _refuse_pair(kind: str, raw: Any, layout: Layout) -> None:
    """A claim that returns the value beside the gradient is told what to do."""
    if kind != "gradient" or type(raw) not in (list, tuple) or len(raw) != 2 or layout.size == 1:
        return
    value, derivative = raw
    if not isinstance(value, int | float | np.number) and getattr(value, "shape", None) != ():
        return
    try:
        claim_matrix(kind, derivative, layout, ())
    except ValueError:
        return
    raise DerivativeShapeError(
        "the gradient claim returned a pair, (value, gradient): give it with value_and_gradient=..., or pick the "
        "second part, gradient=lambda x: pair(x)[1]",
        name=kind,
    )


def _unwrapped(raw: Any) -> Any:
    """The array in a tuple of one, as AD gives it for one of several arguments."""
    if type(raw) is tuple and len(raw) == 1:
        return raw[0] if getattr(raw[0], "shape", ()) or plain_rectangle(raw[0]) is not None else raw
    return raw


def _stacks(raw: Any) -> bool:
    """Whether numpy makes one array of numbers of a list of parts; or whether text or raggedness has its own error."""
    if not isinstance(raw, list | tuple):
        return False
    try:
        return np.asarray(raw).dtype.kind != "O"
    except ValueError:
        return not any(opened(part) is not None and not isinstance(part, list | tuple) for part in raw)


def _not_flat(raw: Any) -> str:
    known = opened(raw)
    word = known[0].word if known is not None else type(raw).__name__
    return f"x is one array, and a {word} was found; return one array"


def _accepted(kind: str, layout: Layout, output_shape: tuple[int, ...]) -> list[tuple[int, ...]]:
    """Shapes that mean the same without doubt, the proper one first."""
    outputs = math.prod(output_shape)
    inputs = layout.shape
    if kind == "gradient":
        # A size-1 output with a gradient claim is a scalar; its own (1,) axis may lead.
        return [inputs, (*output_shape, *inputs)]
    shapes = [(*output_shape, *inputs), (outputs, layout.size)]
    if outputs == 1 and layout.size > 1:
        return [(1, layout.size), *shapes]
    return shapes


def _mismatch(kind: str, found: tuple[int, ...], layout: Layout, output_shape: tuple[int, ...]) -> DerivativeShapeError:
    accepted = _accepted(kind, layout, output_shape)
    expected = accepted[0]
    returns = "a number" if output_shape == () else f"shape {output_shape}"
    text = (
        f"the {kind} claim has shape {found}, but x has shape {layout.shape} and the model returns {returns}, so shape "
        f"{expected} is expected"
    )
    if len(found) == 2 and found[::-1] in accepted:
        text += "; its transpose would fit: return `claim.T`"
    elif math.prod(found) == math.prod(expected):
        text += f"; it has the right number of entries: reshape it to {expected}"
    elif kind == "jacobian" and output_shape == () and found == layout.shape:
        text += "; for a model that returns a number, claim it with gradient=..."
    text += several_points_hint(layout)
    return DerivativeShapeError(text + ".", name=kind, expected=expected, found=found)
