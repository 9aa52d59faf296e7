"""A derivative source that is wrong is found out by the audit, and not recommended."""

import pytest

import gradcheck

jax = pytest.importorskip("jax")
jnp = jax.numpy


@jax.custom_jvp
def wave(x):
    return jnp.sin(x)


@wave.defjvp
def _wave_rule(primals, tangents):
    return wave(*primals), 1.01 * jnp.cos(primals[0]) * tangents[0]


MODELS = {
    "rule off by a hundredth": lambda x: wave(x[0]) + x[1],
    "path cut": lambda x: jax.lax.stop_gradient(x[0]) * x[1],
}
HONEST = {
    "rule": lambda x: jnp.sin(x[0]) + x[1],
    "product": lambda x: x[0] * x[1],
}


def conflicts(report):
    return {(f.evidence["source"], f.variable) for f in report.findings if f.code == "witness-conflict"}


@pytest.mark.parametrize("name", MODELS)
def test_a_wrong_rule_is_a_conflict_that_blocks_and_the_source_is_not_recommended(name):
    report = gradcheck.audit(MODELS[name], at=[1.0, 2.0])

    assert conflicts(report) == {("jax", "x[0]")}
    assert not report.ready
    assert not any("jax" in source for source in report.advice.derivatives)


@pytest.mark.parametrize("name", HONEST)
def test_an_honest_model_shows_no_conflict(name):
    assert conflicts(gradcheck.audit(HONEST[name], at=[1.0, 2.0])) == set()
