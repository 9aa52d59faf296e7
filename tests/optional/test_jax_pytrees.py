"""Nestings that jax knows: its arrays, registered classes, and claims made by its transforms."""

from typing import Any, NamedTuple

import numpy as np
import pytest

jax = pytest.importorskip("jax")

import dataclasses  # noqa: E402

import jax.numpy as jnp  # noqa: E402

import gradcheck  # noqa: E402
from gradcheck import UsageError  # noqa: E402
from gradcheck.problem.layout import args, layout_of  # noqa: E402


@jax.tree_util.register_pytree_node_class
class Linear:
    """Registered without names for its children."""

    def __init__(self, w, offset, activation=jnp.tanh):
        self.w, self.offset, self.activation = w, offset, activation

    def tree_flatten(self):
        return (self.w, self.offset), self.activation

    @classmethod
    def tree_unflatten(cls, activation, children):
        return cls(*children, activation=activation)

    def __call__(self, x):
        return self.activation(self.w @ x + self.offset)


@jax.tree_util.register_dataclass
@dataclasses.dataclass
class Spring:
    """A static float is no variable: jax holds it outside the tree."""

    stiffness: Any
    rest: Any
    scale: float = dataclasses.field(default=2.0, metadata={"static": True})


class Keyed:
    """Registered with names for its children."""

    def __init__(self, left, right):
        self.inner = {"left": left, "right": right}


jax.tree_util.register_pytree_with_keys(
    Keyed,
    lambda k: (
        [(jax.tree_util.GetAttrKey(name), k.inner[name]) for name in ("left", "right")],
        None,
    ),
    lambda _, children: Keyed(*children),
)


class Pair(NamedTuple):
    a: Any
    b: Any


def names_of(at):
    layout, _ = layout_of(at, root="params")
    return [layout.name(i) for i in range(layout.size)]


def test_parts_of_a_registered_class_are_named_by_the_attributes_that_hold_them():
    assert names_of({"layer1": Linear(np.ones((1, 2)), np.ones(1))}) == [
        'params["layer1"].w[0, 0]',
        'params["layer1"].w[0, 1]',
        'params["layer1"].offset[0]',
    ]


def test_parts_registered_with_names_have_these():
    assert names_of(Keyed(0.5, np.ones(1))) == ["params.left", "params.right[0]"]


def test_static_fields_of_a_registered_dataclass_are_no_variables():
    assert names_of(Spring(0.5, 1.5)) == ["params.stiffness", "params.rest"]


@pytest.mark.parametrize("at", [Linear(np.ones((2, 2)), np.ones(2)), Spring(0.5, 1.5), Keyed(0.5, np.ones(1))])
def test_a_registered_class_comes_back_with_moved_numbers(at):
    layout, vector = layout_of(at)
    ((again,), _) = layout.restore(vector + 1.0)

    assert type(again) is type(at)
    assert np.array_equal(layout_of(again)[1], vector + 1.0)


def test_arrays_of_jax_reach_the_model_as_such_and_numpy_ones_as_numpy_ones():
    seen = []

    def model(p):
        seen.append((isinstance(p["a"], jax.Array), isinstance(p["b"], jax.Array), p["a"].dtype.name))
        return p["a"].at[0].set(3.0).sum() * p["b"].sum()

    at = {"a": jnp.array([0.5, 1.5]), "b": np.array([0.5])}
    report = gradcheck.check(model, at=at, gradient=jax.grad(lambda p: p["a"].at[0].set(3.0).sum() * p["b"].sum()))

    assert report.verdict == "confirmed"
    assert set(seen) == {(True, False, "float64")}


def test_the_users_own_precision_holds_again_afterwards():
    gradcheck.check(lambda x: x.sum(), at=jnp.ones(2), gradient=jnp.ones(2))

    assert jnp.asarray(np.ones(1)).dtype == jnp.float32


def test_one_array_of_jax_is_handed_over_as_one_in_batches_too():
    seen = set()

    def model(x):
        seen.add(type(x).__name__)
        return (x**2).sum(axis=-1)

    gradcheck.check(model, at=jnp.array([0.5, 1.5]), gradient=lambda x: 2 * x, batched=True)
    assert seen == {type(jnp.ones(1)).__name__}


def test_keys_and_integers_of_jax_pass_through_untouched():
    layout, vector = layout_of({"key": jax.random.key(0), "n": jnp.arange(2), "x": 0.5})

    assert vector.tolist() == [0.5]
    assert len(layout.notices) == 1
    assert isinstance(layout.restore(vector)[0][0]["n"], jax.Array)


def test_numbers_that_numpy_does_not_know_are_variables_all_the_same():
    layout, vector = layout_of({"a": jnp.array([0.5, 1.5], dtype=jnp.bfloat16)})

    assert vector.tolist() == [0.5, 1.5]
    assert any("bfloat16" in notice for notice in layout.notices)


def test_what_jax_traces_is_refused_with_the_reason():
    with pytest.raises(UsageError, match="outside of what jax traces"):
        jax.jit(lambda x: layout_of(x)[1].sum())(jnp.ones(2))


# --- checks ----------------------------------------------------------------------------------------------------------

NET = {
    "layer1": Linear(np.array([[0.3, -0.2], [0.1, 0.4]]), np.array([0.1, 0.2])),
    "rest": Pair(0.7, [np.array([0.2, 0.3])]),
    "n": 3,
}


def loss(params):
    hidden = params["layer1"](jnp.array([0.5, 1.5]))
    return jnp.sum(hidden**2) * params["rest"].a + jnp.dot(hidden, params["rest"].b[0]) * params["n"]


def test_jax_by_name_on_registered_classes_and_integers():
    report = gradcheck.check(loss, at=NET, gradient="jax")

    assert report.verdict == "confirmed"
    assert report.entries.name[3] == 'params["layer1"].w[1, 1]'


def test_a_gradient_by_jax_with_its_zeros_for_integers():
    report = gradcheck.check(loss, at=NET, gradient=jax.grad(loss, allow_int=True))

    assert report.verdict == "confirmed"


def test_a_single_precision_claim_inside_a_registered_class_is_judged_as_such():
    def in_numpy(p):
        hidden = np.tanh(p.w @ np.array([0.5, 1.5]) + p.offset)
        return float((hidden**2).sum())

    report = gradcheck.check(
        in_numpy, at=NET["layer1"], gradient=jax.grad(lambda p: jnp.sum(p(jnp.array([0.5, 1.5])) ** 2))
    )

    assert report.verdict == "confirmed"
    assert any("float32" in notice for notice in report.notices)


def nested(p):
    return {"energy": p.stiffness * p.rest**2 * p.scale, "forces": [jnp.stack([p.rest, p.stiffness]), p.rest]}


@pytest.mark.parametrize("claim", ["jax", jax.jacrev(nested)], ids=["name", "callable"])
def test_jacobians_of_nested_outputs(claim):
    report = gradcheck.check(nested, at=Spring(0.5, 1.5), jacobian=claim)

    assert report.verdict == "confirmed"
    assert report.entries.name[:3] == (
        'nested["energy"] by p.stiffness',
        'nested["energy"] by p.rest',
        'nested["forces"][0][0] by p.stiffness',
    )


def test_a_jacobian_for_several_arguments_and_outputs():
    def model(a, b):
        return {"s": a * b.sum(), "v": a * b}

    at = args(0.5, jnp.array([1.0, 2.0]))
    report = gradcheck.check(model, at=at, jacobian=jax.jacobian(model, argnums=(0, 1)))

    assert report.verdict == "confirmed"
    assert report.entries.name[-1] == 'model["v"][1] by b[1]'


def test_a_model_that_returns_a_registered_class():
    def model(p):
        return Keyed(p["a"] ** 2, p["a"] * p["b"])

    at = {"a": 0.5, "b": jnp.array([1.0, 2.0])}
    report = gradcheck.check(model, at=at, jacobian=jax.jacobian(model))

    assert report.verdict == "confirmed"
    assert report.entries.name[0] == 'model.left by p["a"]'


def test_complex_step_goes_through_arrays_of_jax():
    report = gradcheck.check(
        lambda p: jnp.sin(p["a"]).sum(),
        at={"a": jnp.array([0.5, 1.5])},
        gradient=jax.grad(lambda p: jnp.sin(p["a"]).sum()),
        witnesses="complex step",
    )

    assert report.verdict == "confirmed"
