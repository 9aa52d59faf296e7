"""Sweeps of jax under its transformations: how a rule fares in the company in which it will be used.

A program takes rows and gives rows. A row of reverse mode is a point and a cotangent, and comes back as the value and
the gradient; a row of forward mode is a point and a tangent, and comes back as the value and its derivative; a row of
second order is a point, a cotangent and a tangent, and comes back as the derivative of the gradient.
"""

from collections.abc import Callable
from contextlib import AbstractContextManager
from typing import Any, TypeAlias

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

from gradcheck.evaluation.arithmetic.with_jax import double_precision, flat_model, in_precision
from gradcheck.problem.layout import Layout, Leaf
from gradcheck.records.arrays import Array

Rows: TypeAlias = NDArray[Any]
Program: TypeAlias = Callable[[Any], Any]

#: Compiling takes most of the time of these programs, and each runs a few times at most.
_QUICK_COMPILATION = {"xla_backend_optimization_level": 0}
#: So many parts of a nesting are each put under vmap alone.
_ARGUMENTS_MOST = 3


class Transformed:
    """The sweeps of one model, each compiled once.

    Parameters
    ----------
    function : callable
    layout : Layout

    Notes
    -----
    Ways, each with ``"jit "`` before it if it is to be compiled:

    * ``"reverse"``: all forward passes first, one a different point, then the backward passes in the order of the rows;
    * ``"apart"``: the same row by row;
    * ``"forward"``;
    * ``"vmap points"``, ``"vmap cotangents"`` (at the first point), ``"vmap argument 0"`` (the others from the first
      point), and ``"vmap"``: the rows of all of these, one after another;
    * ``"vmap forward"``, ``"vmap forward points"``, ``"vmap forward tangents"``, ``"vmap forward argument 0"``;
    * ``"scan"`` over the rows, ``"checkpoint"``, and both: ``"scan checkpoint"``;
    * ``"second"`` (forward over reverse), ``"second reverse"`` (reverse over reverse);
    * ``"single"``: ``"reverse"`` in single precision;
    * ``"equations"``: no sweep, but how many equations one of reverse mode has, as a single number.
    """

    def __init__(self, function: Callable[..., Any], layout: Layout) -> None:
        self.flat = flat_model(function, layout)
        self.parts = _of_parts(function, layout)
        self.leaves = layout.leaves
        self.size = layout.size
        self.programs: dict[str, Program] = {}

    def __call__(self, way: str, rows: Rows) -> Array:
        """The rows that come back, in float64.

        Raises
        ------
        Exception
            Whatever jax or the model raises.
        """
        with _precision_of(way):
            if way not in self.programs:
                self.programs[way] = self._program(way.removeprefix("jit "), compiled=way.startswith("jit "))
            return np.asarray(self.programs[way](rows), dtype=float)

    def _program(self, way: str, *, compiled: bool) -> Program:
        each = {"forward": self._forward, "second": self._second, "second reverse": self._second_reverse}
        if way == "equations":
            return self._equations
        if way == "reverse" and not compiled:
            return self._interleaved
        if way in ("reverse", "apart", "single", *each):
            return _one_by_one(
                _compiled(each.get(way, self._reverse), compiled, quick=way not in ("reverse", "forward"))
            )
        if way.startswith("vmap"):
            return _on_arrays(_compiled(self._vmapped(way), compiled, quick=True))
        inner = self._checkpointed if "checkpoint" in way else self._reverse
        if "scan" in way:
            return _on_arrays(
                _compiled(lambda rows: jax.lax.scan(lambda c, row: (c, inner(row)), 0, rows)[1], compiled)
            )
        return _one_by_one(_compiled(inner, compiled))

    # --- what becomes of one row ---

    def _reverse(self, row: Any) -> Any:
        value, pull = jax.vjp(self.flat, row[: self.size])
        return jnp.concatenate([value, pull(row[self.size :].astype(value.dtype))[0]])

    def _checkpointed(self, row: Any) -> Any:
        value, pull = jax.vjp(jax.checkpoint(self.flat), row[: self.size])
        return jnp.concatenate([value, pull(row[self.size :].astype(value.dtype))[0]])

    def _forward(self, row: Any) -> Any:
        return jnp.concatenate(jax.jvp(self.flat, (row[: self.size],), (row[self.size :],)))

    def _second(self, row: Any) -> Any:
        point, cotangent, tangent = self._split(row)
        return jax.jvp(lambda x: self._gradient(x, cotangent), (point,), (tangent,))[1]

    def _second_reverse(self, row: Any) -> Any:
        point, cotangent, tangent = self._split(row)
        return jax.vjp(lambda x: self._gradient(x, cotangent), point)[1](tangent)[0]

    def _gradient(self, x: Any, cotangent: Any) -> Any:
        value, pull = jax.vjp(self.flat, x)
        return pull(cotangent.astype(value.dtype))[0].astype(x.dtype)

    def _split(self, row: Any) -> tuple[Any, Any, Any]:
        return row[: self.size], row[self.size : -self.size], row[-self.size :]

    # --- what becomes of all of them ---

    def _interleaved(self, rows: Rows) -> NDArray[Any]:
        """Every forward pass before any backward pass: what is kept between them must belong to its own pass."""
        passes: dict[bytes, Any] = {}
        for row in rows:
            point = row[: self.size]
            if point.tobytes() not in passes:
                passes[point.tobytes()] = jax.vjp(self.flat, jnp.asarray(point))
        found = []
        for row in rows:
            value, pull = passes[row[: self.size].tobytes()]
            gradient = pull(jnp.asarray(row[self.size :]).astype(value.dtype))[0]
            found.append(np.concatenate([np.asarray(value), np.asarray(gradient)]))
        return np.array(found)

    def _equations(self, rows: Rows) -> NDArray[Any]:
        traced = jax.make_jaxpr(self._reverse)(jnp.asarray(rows[0], dtype=float))
        return np.array([[float(_equations_of(traced.jaxpr))]])

    def _vmapped(self, way: str) -> Program:
        forward = way.startswith("vmap forward")
        kind = way.removeprefix("vmap forward" if forward else "vmap").strip()
        if kind == "points":
            program: Program = jax.vmap(self._forward if forward else self._reverse)
            return program
        if kind in ("cotangents", "tangents"):
            return self._over_tangents if forward else self._over_cotangents
        if kind:
            return self._over_one_argument(int(kind.rpartition(" ")[2]), forward)
        alone = [f"argument {i}" for i in arguments_alone(self.leaves)]
        each = [self._vmapped(f"{way} {one}") for one in ("points", "tangents" if forward else "cotangents", *alone)]
        return lambda rows: jnp.concatenate([one(rows) for one in each])

    def _over_cotangents(self, rows: Any) -> Any:
        value, pull = jax.vjp(self.flat, rows[0, : self.size])
        gradients = jax.vmap(lambda c: pull(c.astype(value.dtype))[0])(rows[:, self.size :])
        return jnp.concatenate([jnp.broadcast_to(value, (len(rows), value.size)), gradients], axis=1)

    def _over_tangents(self, rows: Any) -> Any:
        point = rows[0, : self.size]
        return jax.vmap(lambda v: jnp.concatenate(jax.jvp(self.flat, (point,), (v,))))(rows[:, self.size :])

    def _over_one_argument(self, which: int, forward: bool) -> Program:
        def reverse(parts: Any, cotangent: Any) -> Any:
            value, pull = jax.vjp(self.parts, parts)
            gradient = pull(cotangent.astype(value.dtype))[0]
            return jnp.concatenate([value, *(jnp.ravel(part) for part in gradient)])

        def push(parts: Any, tangent: Any) -> Any:
            moved = tuple(_part(tangent, leaf) for leaf in self.leaves)
            return jnp.concatenate(jax.jvp(self.parts, (parts,), (moved,)))

        def over_one(rows: Any) -> Any:
            parts = [_part(rows[0], leaf) for leaf in self.leaves]
            parts[which] = jax.vmap(lambda row: _part(row, self.leaves[which]))(rows[:, : self.size])
            axes = tuple(0 if i == which else None for i in range(len(parts)))
            sweep = jax.vmap(push if forward else reverse, in_axes=(axes, 0))
            return sweep(tuple(parts), rows[:, self.size :])

        return over_one


def arguments_alone(leaves: tuple[Leaf, ...]) -> range:
    """Which parts of a nesting are put under vmap while the others stay: the first few, if there are several."""
    return range(min(len(leaves), _ARGUMENTS_MOST) if len(leaves) > 1 else 0)


def _of_parts(function: Callable[..., Any], layout: Layout) -> Callable[[Any], Any]:
    """The model as a function of its parts, one a leaf: of one vector all would be batched together."""
    place = {leaf.start: i for i, leaf in enumerate(layout.leaves)}
    return flat_model(function, layout, lambda parts, leaf: parts[place[leaf.start]])


def _part(row: Any, leaf: Leaf) -> Any:
    return row[leaf.start] if leaf.scalar else row[leaf.start : leaf.stop].reshape(leaf.shape)


def _equations_of(program: Any) -> int:
    """Equations of a traced program and of all programs inside it."""
    inner = (part for equation in program.eqns for value in equation.params.values() for part in _programs_in(value))
    return len(program.eqns) + sum(map(_equations_of, inner))


def _programs_in(value: Any) -> list[Any]:
    parts = value if isinstance(value, tuple | list) else (value,)
    opened = [getattr(part, "jaxpr", part) for part in parts]
    return [part for part in opened if hasattr(part, "eqns")]


def _precision_of(way: str) -> AbstractContextManager[Any]:
    return in_precision(double=False) if way.endswith("single") else double_precision()


def _compiled(program: Program, wanted: bool, *, quick: bool = True) -> Program:
    """`program` compiled, without the optimizations that take longest where it is `quick`."""
    if not wanted:
        return program
    try:
        compiled: Program = jax.jit(program, compiler_options=_QUICK_COMPILATION if quick else None)
    except TypeError:  # a jax without options for the compiler
        compiled = jax.jit(program)
    return compiled


def _one_by_one(program: Program) -> Program:
    return lambda rows: np.array([np.asarray(program(jnp.asarray(row, dtype=float))) for row in rows])


def _on_arrays(program: Program) -> Program:
    return lambda rows: np.asarray(program(jnp.asarray(rows, dtype=float)))
