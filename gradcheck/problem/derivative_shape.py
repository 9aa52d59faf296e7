"""The shape that a claimed derivative must have, and the claim as a matrix (m, n)."""

import math
from typing import Any

from gradcheck.errors import DerivativeShapeError
from gradcheck.problem.layout import Layout, real_numbers
from gradcheck.records.arrays import Array


def claim_matrix(kind: str, raw: Any, layout: Layout, output_shape: tuple[int, ...]) -> Array:
    """A gradient or Jacobian claim as an array (m, n).

    Parameters
    ----------
    kind : "gradient" or "jacobian"
    raw : what the user's derivative returned, or the array they gave
    layout : layout of x
    output_shape : shape of what the model returns

    Raises
    ------
    DerivativeShapeError
        If the shape does not fit; the text names both shapes and says if the transpose would fit.
    UsageError
        If the claim is not numeric, or complex.
    """
    outputs = math.prod(output_shape)
    if kind == "gradient" and outputs != 1:
        raise DerivativeShapeError(
            f"the model returns shape {output_shape} ({outputs} outputs), so a gradient cannot be checked: claim a "
            f"Jacobian of shape ({outputs}, {layout.size}) with jacobian=..., or pick one output with output=...",
            name=kind,
            expected=(),
            found=output_shape,
        )
    if kind == "gradient" and layout.single is None:
        return layout.flatten(raw, "the gradient claim")[None, :]
    array = real_numbers(raw.toarray() if hasattr(raw, "toarray") else raw, f"the {kind} claim")
    if array.shape in _accepted(kind, layout, output_shape):
        return array.reshape(outputs, layout.size)
    raise _mismatch(kind, array.shape, layout, output_shape)


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
    return DerivativeShapeError(text + ".", name=kind, expected=expected, found=found)
