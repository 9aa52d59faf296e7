"""Products and second derivatives of models whose input or output is a nesting, in the structures that AD gives."""

from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import pytest

import gradcheck
from gradcheck.errors import UsageError

X = np.array([0.4, 1.3, -0.7])
RATES = np.array([[1.0, 0.5, 0.0], [0.2, -1.0, 2.0], [0.0, 0.3, 1.0]])


class Outlet(NamedTuple):
    flow: Any
    heat: Any


@dataclass
class Layer:
    weight: Any
    offset: Any


FORMS = {
    "dict": (lambda u: {"flow": u[:2], "heat": u[2]}, lambda t: [*t["flow"], t["heat"]]),
    "named tuple": (lambda u: Outlet(u[:2], u[2]), lambda t: [*t.flow, t.heat]),
    "tuple": (lambda u: (u[0], u[1:]), lambda t: [t[0], *t[1]]),
    "list of dicts": (lambda u: [{"a": u[:1]}, {"b": u[1:]}], lambda t: [*t[0]["a"], *t[1]["b"]]),
}


def slopes(x):
    return (1 - np.tanh(RATES @ x) ** 2)[:, None] * RATES


@pytest.mark.parametrize("form", FORMS)
def test_a_vjp_takes_a_cotangent_of_the_structure_of_the_output(form):
    shaped, flat = FORMS[form]
    report = gradcheck.check(
        lambda x: shaped(np.tanh(RATES @ x)), at=X, vjp=lambda x, w: slopes(x).T @ np.array(flat(w))
    )
    assert report.verdict == "confirmed"


@pytest.mark.parametrize("form", FORMS)
def test_a_jvp_returns_the_structure_of_the_output_or_one_vector(form):
    shaped, _ = FORMS[form]
    for claim in (lambda x, v: shaped(slopes(x) @ v), lambda x, v: slopes(x) @ v):
        report = gradcheck.check(lambda x: shaped(np.tanh(RATES @ x)), at=X, jvp=claim)
        assert report.verdict == "confirmed"


def test_a_wrong_part_of_a_nested_product_is_named():
    shaped, _ = FORMS["dict"]

    def wrong(x, v):
        return shaped(slopes(x) @ v * [1, 1, -1])

    report = gradcheck.check(lambda x: shaped(np.tanh(RATES @ x)), at=X, jvp=wrong, on_refuted="return")
    assert report.verdict == "refuted"
    refuted = [
        name for name, verdict in zip(report.entries.name, report.entries.verdict, strict=True) if verdict == "refuted"
    ]
    assert refuted
    assert all('"heat"' in name for name in refuted)


def test_a_jvp_of_another_structure_than_the_output_is_refused_with_both():
    shaped, _ = FORMS["dict"]
    with pytest.raises(UsageError, match="expected"):
        gradcheck.check(lambda x: shaped(np.tanh(RATES @ x)), at=X, jvp=lambda x, v: {"flow": (slopes(x) @ v)[:2]})


def test_a_hessian_may_be_a_dataclass_of_dataclasses():
    def loss(t):
        return np.sum(t.weight**3) * t.offset

    def hessian(t):
        mixed = 3 * t.weight**2
        return Layer(
            Layer(np.diag(6 * t.weight) * t.offset, mixed),
            Layer(mixed, 0.0),
        )

    report = gradcheck.check(loss, at=Layer(X, 2.0), hessian=hessian)
    assert report.verdict == "confirmed"
