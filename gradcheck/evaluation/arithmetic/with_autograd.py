"""How x and f travel through autograd: Jacobian times tangents, and cotangents times Jacobian."""

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.problem.layout import Layout, Leaf
from gradcheck.records.arrays import Array

try:
    import autograd
    import autograd.numpy as anp
    from autograd.tracer import isbox
except ImportError as error:
    raise ImportError(
        f"autograd cannot be imported ({error}); install it with: pip install 'gradcheck[autograd]'"
    ) from error


class CutGraph(ArithmeticError):
    """What the model returned does not hang on its input, as far as autograd can see."""


def jvp(function: Callable[..., Any], layout: Layout, point: Array, tangents: NDArray[Any]) -> Array:
    """Jacobian times tangents, by forward mode.

    Parameters
    ----------
    function : callable
        The model, written with ``autograd.numpy``; may return any shape, or a list of numbers, which is raveled.
    layout : Layout
        Leaves reach the model as autograd's boxes, everything else untouched.
    point : ndarray, shape (n,)
    tangents : ndarray, shape (d, n)

    Returns
    -------
    ndarray, shape (d, m)
        NaN and infinities as autograd gave them.

    Raises
    ------
    CutGraph
        If the model returned plain numbers or a plain array: autograd alone would warn and give zeros.
    Exception
        Whatever tracing raises; several operations have no rule for forward mode (NotImplementedError).
    """
    push = autograd.make_jvp(_flat(function, layout))(np.array(point, dtype=float))
    return np.array([push(row)[1] for row in tangents], dtype=float)


def vjp(function: Callable[..., Any], layout: Layout, point: Array, cotangents: NDArray[Any]) -> Array:
    """Cotangents ``(d, m)`` times Jacobian, by reverse mode: shape ``(d, n)``. Everything else as in `jvp`."""
    pull, _ = autograd.make_vjp(_flat(function, layout))(np.array(point, dtype=float))
    return np.array([pull(row) for row in cotangents], dtype=float)


def hvp(function: Callable[..., Any], layout: Layout, point: Array, tangents: NDArray[Any]) -> Array:
    """Second derivatives times tangents ``(d, n)``: shape ``(d, m·n)``, output by output. Reverse over reverse, because
    many of autograd's operations have no rule for forward mode. Everything else as in `jvp`.
    """
    flat = _flat(function, layout)
    start = np.array(point, dtype=float)
    outputs = np.size(np.asarray(autograd.make_vjp(flat)(start)[1]))
    curvature = [_second_pull(flat, start, output) for output in range(outputs)]
    return np.array([np.concatenate([pull(row) for pull in curvature]) for row in tangents], dtype=float)


def _second_pull(flat: Callable[[Any], Any], start: Array, output: int) -> Callable[[Array], Array]:
    """Tangent -> Hessian of one output times tangent; the Hessian is symmetric, so a cotangent does as well."""
    try:
        pull, _ = autograd.make_vjp(autograd.grad(lambda vector: flat(vector)[output]))(start)
    except (AttributeError, TypeError):  # a gradient that does not hang on x is a plain array: nothing curves
        return np.zeros_like
    return lambda row: np.zeros_like(start) if (found := pull(row)) is None else np.asarray(found)


def in_one_vector(function: Callable[..., Any], parts: Callable[[Any], list[Any]]) -> Callable[..., Any]:
    """The model that returns the `parts` of its nesting as one vector."""

    def flat(*positional: Any, **keywords: Any) -> Any:
        held = parts(function(*positional, **keywords))
        return anp.concatenate([anp.ravel(anp.array(part)) for part in held])

    return flat


class Transformed:
    """Sweeps that are tried beside the claim, row by row: see `gradcheck.evaluation.arithmetic.jax_transforms`.

    Ways: ``"reverse"`` (all forward passes first), ``"apart"`` and ``"forward"``.
    """

    def __init__(self, function: Callable[..., Any], layout: Layout) -> None:
        self.flat = _flat(function, layout)
        self.size = layout.size

    def __call__(self, way: str, rows: NDArray[Any]) -> Array:
        """The rows that come back: value and gradient, or value and derivative along the tangent.

        Raises
        ------
        Exception
            Whatever tracing raises; NotImplementedError where an operation has no rule for forward mode.
        """
        points, others = rows[:, : self.size], rows[:, self.size :]
        if way == "forward":
            pushes = [autograd.make_jvp(self.flat)(point) for point in points]
            pairs = [push(other) for push, other in zip(pushes, others, strict=True)]
            return np.array([np.concatenate(pair) for pair in pairs], dtype=float)
        if way == "apart":
            return np.concatenate([self("reverse", row[None]) for row in rows])
        passes = [autograd.make_vjp(self.flat)(point) for point in points]
        return np.array(
            [np.concatenate([value, pull(c)]) for (pull, value), c in zip(passes, others, strict=True)], dtype=float
        )


def _flat(function: Callable[..., Any], layout: Layout) -> Callable[[Any], Any]:
    """The model as a function from one vector to one vector."""

    def flat(vector: Any) -> Any:
        positional, keywords = layout.arguments(lambda leaf: _part(vector, leaf))
        output = anp.ravel(anp.array(function(*positional, **keywords)))
        if not isbox(output):
            raise CutGraph(
                "what the model returned is cut off from x, as far as autograd can see: either it is constant, or a "
                "step uses plain numpy (np.array, say) where it needs `import autograd.numpy as np`"
            )
        return output

    return flat


def _part(vector: Any, leaf: Leaf) -> Any:
    return vector[leaf.start] if leaf.scalar else anp.reshape(vector[leaf.start : leaf.stop], leaf.shape)
