"""Products and second derivatives that are claimed by the name of an AD source."""

import numpy as np
import pytest

import gradcheck
from gradcheck import UsageError, Verdict

X = [0.3, 0.5, -1.2]


def jax_loss(x):
    import jax.numpy as jnp

    return jnp.sum(jnp.sin(x) * x[0] ** 2)


def autograd_loss(x):
    import autograd.numpy as anp

    return anp.sum(anp.sin(x) * x[0] ** 2)


SOURCES = [pytest.param("jax", jax_loss, id="jax"), pytest.param("autograd", autograd_loss, id="autograd")]


@pytest.mark.parametrize(("source", "loss"), SOURCES)
@pytest.mark.parametrize("kind", ["hessian", "hvp", "jvp", "vjp", "value_and_gradient"])
def test_every_kind_of_claim_can_be_had_by_name(source, loss, kind):
    pytest.importorskip(source)

    assert gradcheck.check(loss, X, **{kind: source}).verdict == Verdict.CONFIRMED


@pytest.mark.parametrize(("source", "loss"), SOURCES)
def test_a_gradient_by_name_is_the_witness_of_a_hessian_by_hand(source, loss):
    pytest.importorskip(source)

    def hessian(x):
        c, s = np.cos(x), np.sin(x)
        h = np.diag(-s * x[0] ** 2)
        h[0, :] += 2 * x[0] * c
        h[:, 0] += 2 * x[0] * c
        h[0, 0] += 2 * s.sum()
        return h

    report = gradcheck.check(loss, X, gradient=source, hessian=hessian)

    assert set(report.parts[1].entries.source) == {"differences of the confirmed gradient"}


def test_a_vector_model_has_all_its_hessians():
    jnp = pytest.importorskip("jax.numpy")

    report = gradcheck.check(lambda x: jnp.stack([jnp.sum(x**3), x[0] * x[1]]), X, jacobian="jax", hessian="jax")

    assert report.verdict == Verdict.CONFIRMED
    assert len(report.parts[1].entries) == 18


def test_a_linear_model_has_a_hessian_of_zeros():
    pytest.importorskip("autograd")
    import autograd.numpy as anp

    assert gradcheck.check(lambda x: 2 * anp.sum(x), X, hessian="autograd").verdict == Verdict.CONFIRMED


def test_a_model_that_cannot_be_traced_is_one_clear_error():
    pytest.importorskip("jax")

    with pytest.raises(UsageError, match="hessian='jax': jax cannot differentiate"):
        gradcheck.check(lambda x: float(np.sum(np.asarray(x) ** 2)), X, hessian="jax")
