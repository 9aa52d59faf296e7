"""An inquiry about products of a Jacobian with vectors, asked as one about a Jacobian."""

import numpy as np
import pytest

from gradcheck.evaluation.conduct import conduct_one
from gradcheck.evaluation.protocol import Request
from gradcheck.evaluation.substituted import mixed, substituted
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import room_along
from tests.gates import gate_of

A = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
X = np.array([0.3, 0.5, -1.2])
J = A * np.cos(X)
V = np.array([[1.0, -0.5, 2.0], [0.1, 0.2, 0.3]])
W = np.array([[1.0, -3.0], [0.25, 0.5], [0.0, 1.0]])


def stresses(x):
    return A @ np.sin(x)


def seen(**options):
    """What differences say of the Jacobian of the substituted function."""
    rows = options.get("rows")
    count = X.size if rows is None else len(rows)
    base = X if rows is None else np.zeros(count)
    room = room_along(X, np.arange(count) if rows is None else rows, domain_of(X))
    centre = stresses(X)
    if "mixture" in options:
        centre = mixed(centre, options["mixture"])
    if "outputs" in options:
        centre = centre[options["outputs"]]
    inquiry = finite_difference(base, np.arange(count), room, centre)
    return conduct_one(substituted(inquiry, X, **options), gate_of(stresses))


@pytest.mark.parametrize(
    ("options", "right"),
    [
        ({}, J),
        ({"rows": V}, J @ V.T),
        ({"mixture": W}, W @ J),
        ({"outputs": np.array([1])}, J[[1]]),
        ({"rows": V, "mixture": W}, W @ J @ V.T),
    ],
    ids=["as it is", "along rows", "mixed outputs", "some outputs", "both"],
)
def test_the_jacobian_of_what_is_substituted_is_the_product(options, right):
    testimony = seen(**options)

    assert (np.abs(testimony.value.T - right) <= testimony.bound.T).all()
    assert testimony.bound.max() < 1e-9


def test_a_point_beside_the_base_is_translated_as_well():
    asked = []

    def inquiry():
        reply = yield Request(base=np.array([1.0, 2.0]), directions=np.array([1]), offsets=np.array([[0.5]]))
        return reply

    def gate(requests):
        asked.extend(requests)
        return gate_of(stresses)(requests)

    reply = conduct_one(substituted(inquiry(), X, rows=V), gate)

    assert asked[0].base.tolist() == (X + np.array([1.0, 2.0]) @ V).tolist()
    assert reply.values[0, 0] == pytest.approx(stresses(X + V[0] + 2.5 * V[1]))


def test_equal_values_are_mixed_to_equal_sums_wherever_they_stand():
    rng = np.random.default_rng(0)
    values, mixture = rng.normal(size=33), rng.normal(size=(9, 33))
    many = mixed(np.broadcast_to(values, (7, 5, 33)), mixture)

    assert (many == mixed(values, mixture)).all()
