"""Products of a derivative with a vector, and Hessians: what the claim is given, and the shape that it must return."""

import math
from typing import Any

import numpy as np

from gradcheck.errors import DerivativeShapeError, UsageError
from gradcheck.problem.containers import Given
from gradcheck.problem.derivative_shape import claim_matrix
from gradcheck.problem.layout import Layout, real_numbers
from gradcheck.problem.opening import opened
from gradcheck.problem.template import Node, Untouched
from gradcheck.records.arrays import Array


def tangent(layout: Layout, row: Array) -> Any:
    """A vector (n,) in the structure of the differentiated input.

    One part alone where one argument is differentiated, a tuple of parts where several are.
    """
    positional, keywords = layout.restore(row)
    template = layout.template
    if not isinstance(template, Node) or not isinstance(template.container, Given):
        return positional[0]
    arguments = [*positional, *keywords.values()]
    wanted = [i for i in template.container.wanted if not isinstance(template.parts[i], Untouched)]
    parts = [arguments[i] for i in wanted]
    return parts[0] if len(parts) == 1 else tuple(parts)


def cotangent(output_shape: tuple[int, ...], row: Array, outputs: Layout | None = None) -> Any:
    """A vector (m,) in the shape of the output, or its structure (`outputs`); a number where the model returns one."""
    if outputs is not None and outputs.single is None:
        return outputs.restore(row)[0][0]
    return float(row[0]) if output_shape == () else row.reshape(output_shape).copy()


def product_vector(
    kind: str, raw: Any, layout: Layout, output_shape: tuple[int, ...], outputs: Layout | None = None
) -> Array:
    """What a claimed product returned, as a vector: (m,) for ``"jvp"``, (n,) for ``"vjp"`` and ``"hvp"``.

    `outputs` is the layout of what the model returns, where that is a nesting.

    Raises
    ------
    DerivativeShapeError
        If the shape does not fit; the text names both shapes and says if it is that of the other side.
    UsageError
        If it is None, complex, ragged, or otherwise no array of real numbers.
    """
    if kind == "hvp":
        _refuse_many_outputs(kind, layout, output_shape)
    if raw is None:
        raise UsageError(f"{kind} returned None; does it lack a return statement?")
    side = outputs if kind == "jvp" else layout
    if side is not None and side.single is None and not hasattr(raw, "shape"):
        return side.flatten(raw, f"what {kind} returned")
    array = real_numbers(raw, f"what {kind} returned")
    inputs = layout.shape
    expected, size = (output_shape, math.prod(output_shape)) if kind == "jvp" else (inputs, layout.size)
    if array.shape == expected or array.shape == (size,) or (size == 1 and array.size == 1):
        return array.reshape(-1)
    raise _wrong_product(kind, array.shape, expected, inputs, output_shape)


def _wrong_product(
    kind: str, found: tuple[int, ...], expected: tuple[int, ...], inputs: tuple[int, ...], output_shape: tuple[int, ...]
) -> DerivativeShapeError:
    what = {"jvp": "J·v", "vjp": "Jᵀ·w", "hvp": "H·v"}[kind]
    of = "the model's output" if kind == "jvp" else "x"
    text = f"{kind} returned shape {found}, but {what} has the shape of {of}, {expected}"
    other = inputs if kind == "jvp" else output_shape
    if kind != "hvp" and found == other:
        side = "Jᵀ·v, which is a vjp" if kind == "jvp" else "J·w, which is a jvp"
        text += f"; {found} is the shape of {'x' if kind == 'jvp' else 'the output'}: it looks like {side}"
    elif len(found) == 2 and found[0] == found[1]:
        text += "; it looks like the whole matrix: multiply it by the vector"
    elif math.prod(found) == math.prod(expected):
        text += f"; it has the right number of entries: reshape it to {expected}"
    return DerivativeShapeError(text + ".", name=kind, expected=expected, found=found)


def _refuse_many_outputs(kind: str, layout: Layout, output_shape: tuple[int, ...]) -> None:
    outputs = math.prod(output_shape)
    if outputs != 1:
        raise DerivativeShapeError(
            f"the model returns shape {output_shape} ({outputs} outputs), so {kind} cannot be checked: a "
            "Hessian-vector product is that of one output; pick one with output=..., or claim all second derivatives "
            f"with hessian=... of shape ({outputs}, {layout.size}, {layout.size})",
            name=kind,
            expected=(),
            found=output_shape,
        )


def hessian_products(raw: Any, layout: Layout, output_shape: tuple[int, ...], rows: Array) -> Array:
    """A claimed Hessian times each of some vectors (k, n): shape (k, n), or (k, m·n) for m outputs.

    Row i of the Hessian gives entry i of a product. A sparse Hessian is never made dense.

    Raises
    ------
    DerivativeShapeError
        If the shape is not ``(n, n)``, ``(m, n, n)`` for m outputs, or input shape + input shape.
    UsageError
        If the claim is not numeric, or complex.
    """
    m, n = math.prod(output_shape), layout.size
    if hasattr(raw, "toarray"):
        if raw.shape != (n, n) or m != 1:
            raise _wrong_hessian(tuple(raw.shape), layout, output_shape)
        if np.dtype(raw.dtype).kind == "c":
            raise UsageError(f"the hessian claim is complex ({raw.dtype}); derivatives of a real model are real")
        return np.asarray((raw @ rows.T).T, dtype=float)
    if layout.single is None and m == 1 and not _is_matrix(raw, n) and opened(raw) is not None:
        # A nesting of the input's structure, in each place of which stands a nesting of it again: the Jacobian of the
        # gradient.
        matrix = claim_matrix("hessian", raw, layout, (n,), layout)
    else:
        matrix = real_numbers(raw, "the hessian claim")
        shapes = [(*output_shape, *layout.shape, *layout.shape), (m, n, n), *([(n, n)] if m == 1 else [])]
        if matrix.shape not in shapes:
            raise _wrong_hessian(matrix.shape, layout, output_shape)
        matrix = matrix.reshape(m * n, n)
    with np.errstate(invalid="ignore", over="ignore"):
        return np.asarray(_unspoiled(matrix, rows))


def _unspoiled(matrix: Array, rows: Array) -> Array:
    """``rows @ matrix.T``, where an entry that is not finite spoils only the products that it has a share in."""
    if np.isfinite(matrix).all():
        return np.asarray(rows @ matrix.T)
    return np.stack([matrix[:, row != 0] @ row[row != 0] for row in rows])


def _is_matrix(raw: Any, n: int) -> bool:
    try:
        return bool(np.shape(raw) == (n, n))
    except ValueError:
        return False


def _wrong_hessian(found: tuple[int, ...], layout: Layout, output_shape: tuple[int, ...]) -> DerivativeShapeError:
    m, n = math.prod(output_shape), layout.size
    expected = (*output_shape, *layout.shape, *layout.shape)
    returns = "a number" if output_shape == () else f"shape {output_shape}"
    text = (
        f"the hessian claim has shape {found}, but x has shape {layout.shape} and the model returns {returns}, so "
        f"shape {expected} is expected"
    )
    if found in (layout.shape, (n,)) and n > 1:
        text += (
            f"; {found} is the shape of x: if these are the diagonal entries alone, give the whole matrix, "
            "numpy.diag(h), where it is diagonal; if it is the gradient, claim it with gradient=..."
        )
    elif m > 1 and found == (n, n):
        text += f"; ({n}, {n}) is the Hessian of one output: pick one with output=..."
    elif math.prod(found) == math.prod(expected):
        text += f"; it has the right number of entries: reshape it to {expected}"
    return DerivativeShapeError(text + ".", name="hessian", expected=expected, found=found)


def value_and_matrix(raw: Any, layout: Layout, output_shape: tuple[int, ...]) -> tuple[Array, Array]:
    """What a claim of value and gradient returned: the value (m,), and the gradient or Jacobian (m, n).

    Raises
    ------
    UsageError, DerivativeShapeError
        If it is no pair, or one of the two has a shape that does not fit.
    """
    if not isinstance(raw, list | tuple) or len(raw) != 2:
        found = f"a {type(raw).__name__} of {len(raw)}" if isinstance(raw, list | tuple) else type(raw).__name__
        raise UsageError(f"value_and_gradient must return a pair (value, gradient); it returned {found}")
    value = real_numbers(raw[0], "the value of value_and_gradient")
    outputs = math.prod(output_shape)
    if value.size != outputs or value.ndim > len(output_shape) + (outputs == 1):
        raise DerivativeShapeError(
            f"value_and_gradient returned a value of shape {value.shape}, but the model returns shape {output_shape}; "
            "it must return (value, gradient), in this order.",
            name="value_and_gradient",
            expected=output_shape,
            found=value.shape,
        )
    kind = "gradient" if outputs == 1 else "jacobian"
    return value.reshape(-1), claim_matrix(kind, raw[1], layout, output_shape)
