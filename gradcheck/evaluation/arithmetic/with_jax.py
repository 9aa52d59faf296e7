"""How x and f travel through jax: Jacobian times tangents, and cotangents times Jacobian."""

from collections.abc import Callable
from contextlib import AbstractContextManager
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.problem.layout import Layout, Leaf
from gradcheck.records.arrays import Array

try:
    import jax
    import jax.numpy as jnp
except ImportError as error:
    raise ImportError(f"jax cannot be imported ({error}); install it with: pip install 'gradcheck[jax]'") from error

#: Numbers in one batch of rows: keeps the memory of a batch within tens of megabytes times the model's own.
_BATCH = 2**22
#: A batched result may differ from the plain one by rounding in another order, not by more than this many units.
_REORDERING = 2**14

Sweep = Callable[[Any], Any]


def jvp(function: Callable[..., Any], layout: Layout, point: Array, tangents: NDArray[Any]) -> Array:
    """Jacobian times tangents, by forward mode in double precision.

    Parameters
    ----------
    function : callable
        The model, written with jax; may return any shape, it is raveled.
    layout : Layout
        Leaves reach the model as jax arrays (scalars with shape ()), everything else untouched.
    point : ndarray, shape (n,)
    tangents : ndarray, shape (d, n)

    Returns
    -------
    ndarray, shape (d, m)
        In float64, also where the model computed in single precision; NaN and infinities as jax gave them.

    Raises
    ------
    TypeError
        If the model returns integers or complex numbers.
    Exception
        Whatever tracing raises.

    Notes
    -----
    Double precision holds in this thread and for this call only; the switch of the whole process is not touched.
    """
    with double_precision():
        flat = flat_model(function, layout)
        start = jnp.asarray(point, dtype=float)
        return _by_rows(lambda tangent: jax.jvp(flat, (start,), (tangent,))[1], tangents)


def vjp(function: Callable[..., Any], layout: Layout, point: Array, cotangents: NDArray[Any]) -> Array:
    """Cotangents ``(d, m)`` times Jacobian, by reverse mode in double precision: shape ``(d, n)``.

    Everything else as in `jvp`.
    """
    with double_precision():
        value, pull = jax.vjp(flat_model(function, layout), jnp.asarray(point, dtype=float))
        return _by_rows(lambda cotangent: pull(cotangent.astype(value.dtype))[0], cotangents)


def hvp(function: Callable[..., Any], layout: Layout, point: Array, tangents: NDArray[Any]) -> Array:
    """Second derivatives times tangents ``(d, n)``, forward over reverse: shape ``(d, m·n)``, output by output.

    Everything else as in `jvp`.
    """
    with double_precision():
        flat = flat_model(function, layout)
        start = jnp.asarray(point, dtype=float)
        outputs = jax.eval_shape(flat, start).shape[0]

        def slopes(vector: Any) -> Any:
            value, pull = jax.vjp(flat, vector)
            return jnp.concatenate([pull(unit)[0] for unit in jnp.eye(outputs, dtype=value.dtype)])

        return _by_rows(lambda tangent: jax.jvp(slopes, (start,), (tangent,))[1], tangents)


def is_double() -> bool:
    """Whether jax computes in double precision by the user's own setting."""
    return bool(jax.dtypes.canonicalize_dtype(np.float64) == np.float64)


def double_precision() -> AbstractContextManager[Any]:
    """A scope in which jax computes in double precision; the user's own setting holds again after it."""
    return in_precision(double=True)


def in_precision(*, double: bool) -> AbstractContextManager[Any]:
    """A scope in which jax computes in double or in single precision, whatever the user's own setting is."""
    if hasattr(jax, "enable_x64"):
        switch = jax.enable_x64
    else:  # before jax 0.8
        from jax import experimental

        switch = experimental.enable_x64
    scope: AbstractContextManager[Any] = switch(double)
    return scope


def in_one_vector(function: Callable[..., Any], parts: Callable[[Any], list[Any]]) -> Callable[..., Any]:
    """The model that returns the `parts` of its nesting as one vector."""

    def flat(*positional: Any, **keywords: Any) -> Any:
        held = parts(function(*positional, **keywords))
        return jnp.concatenate([jnp.ravel(jnp.asarray(part)) for part in held])

    return flat


def _part(vector: Any, leaf: Leaf) -> Any:
    return vector[leaf.start] if leaf.scalar else vector[leaf.start : leaf.stop].reshape(leaf.shape)


def flat_model(
    function: Callable[..., Any], layout: Layout, part: Callable[[Any, Leaf], Any] = _part
) -> Callable[[Any], Any]:
    """The model as a function from one vector (or what `part` takes the leaves from) to one vector."""

    def flat(vector: Any) -> Any:
        positional, keywords = layout.arguments(lambda leaf: part(vector, leaf))
        output = jnp.ravel(jnp.asarray(function(*positional, **keywords)))
        if not jnp.issubdtype(output.dtype, jnp.floating):
            raise TypeError(f"the model returned {output.dtype} inside jax; no derivative passes through that")
        return output

    return flat


def _by_rows(sweep: Sweep, rows: NDArray[Any]) -> Array:
    """``sweep`` of every row: batched where that works and agrees with the plain one, else one after another."""
    if len(rows) > 1:
        try:
            batched = _batched(sweep, rows)
        except Exception:  # no batching rule, or no memory; a model's own error comes again below, in plain sight
            batched = None
        if batched is not None and _agrees(batched, sweep, rows):
            return batched.astype(float)
    return np.array([np.asarray(sweep(jnp.asarray(row))) for row in rows], dtype=float)


def _batched(sweep: Sweep, rows: NDArray[Any]) -> NDArray[Any]:
    together = jax.vmap(sweep)
    size = max(1, _BATCH // rows.shape[1])
    parts = [np.asarray(together(jnp.asarray(rows[i : i + size]))) for i in range(0, len(rows), size)]
    return np.concatenate(parts)


def _agrees(batched: NDArray[Any], sweep: Sweep, rows: NDArray[Any]) -> bool:
    """Whether one plain sweep of a mixture of all rows gives the same mixture of the batched results.

    A batching rule is user code too, and may be wrong. Rows are mixed in equal sizes, with weights that no two rows
    share. Columns that are not finite are not compared.
    """
    finite = np.isfinite(batched).all(axis=0)
    if not finite.any():
        return True
    known = batched[:, finite].astype(float)
    size = np.abs(known).max(axis=1)
    weights = np.where(np.arange(len(rows)) % 2, -1.0, 1.0) * np.linspace(0.5, 1.0, len(rows))
    weights /= np.where(size > 0, size, 1.0)
    plain = np.asarray(sweep(jnp.asarray(weights @ rows)))[finite]
    tolerance = _REORDERING * np.finfo(batched.dtype).eps * (np.abs(weights) @ np.abs(known))
    return bool(np.all(np.abs(plain - weights @ known) <= tolerance))
