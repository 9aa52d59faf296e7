"""A gradient with a hundred thousand entries: few evaluations, little memory, one verdict."""

import tracemalloc

import numpy as np
import pytest

import gradcheck
from gradcheck import Verdict

N = 100_000


@pytest.fixture(scope="module")
def model():
    """f = Σ x_i x_{i+1} + Σ w_i / (1 + x_i²): the value, the gradient, a point."""
    random = np.random.default_rng(0)
    weights, point = random.uniform(0.5, 2.0, N), random.normal(size=N)

    def value(x):
        return float(np.dot(x[1:], x[:-1]) + np.sum(weights / (1.0 + x * x)))

    gradient = -2.0 * weights * point / (1.0 + point * point) ** 2
    gradient[1:] += point[:-1]
    gradient[:-1] += point[1:]
    return value, gradient, point


def _check(model, claim, **options):
    value, _, point = model
    return gradcheck.check(value, point, gradient=claim, on_refuted="return", on_undecided="pass", **options)


@pytest.mark.parametrize("seed", range(3))
def test_a_right_claim_is_confirmed_in_64_evaluations_whatever_the_seed(model, seed):
    report = _check(model, model[1], seed=seed)
    assert report.verdict == Verdict.CONFIRMED
    assert report.evaluations <= 64


@pytest.mark.parametrize("seed", range(3))
def test_the_verdict_on_a_wrong_claim_does_not_depend_on_the_seed(model, seed):
    claim = model[1].copy()
    claim[77_777] *= -1.0
    report = _check(model, claim, seed=seed)
    assert report.verdict == Verdict.REFUTED
    assert report.entries.index.tolist() == [77_777]


def test_a_wrong_claim_costs_no_more_than_a_few_hundred_evaluations(model):
    claim = model[1].copy()
    claim[[5, 50_000, 99_999]] *= 2.0
    report = _check(model, claim)
    assert sorted(report.entries.index.tolist()) == [5, 50_000, 99_999]
    assert report.evaluations < 300


def test_memory_stays_below_14_vectors(model):
    value, claim, point = model
    value(point)
    tracemalloc.start()
    try:
        _check(model, claim)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak < 14 * 8 * N


def test_variables_without_any_effect_are_confirmed_and_an_effect_that_is_claimed_for_one_is_refuted(model):
    point = model[2]
    claim = np.zeros(N)
    claim[:3] = np.exp(point[:3])
    few = (lambda x: float(np.sum(np.exp(x[:3]))), claim, point)
    assert _check(few, claim).verdict == Verdict.CONFIRMED
    wrong = claim.copy()
    wrong[60_000] = 1.0
    report = _check(few, wrong)
    assert report.verdict == Verdict.REFUTED
    assert report.entries.index.tolist() == [60_000]


def test_where_one_part_of_a_nesting_is_wrong_everywhere_the_part_is_named():
    random = np.random.default_rng(3)
    params = {"weights": random.normal(size=(60, 40)), "offsets": random.normal(size=40), "scale": 1.5}

    def loss(p):
        return float(p["scale"] * np.sum(np.tanh(p["weights"] + p["offsets"]) ** 2))

    def gradient(p):
        held = np.tanh(p["weights"] + p["offsets"])
        each = 2 * p["scale"] * held * (1 - held**2)
        return {"weights": each * (1 + 0.3 * held), "offsets": each.sum(axis=0), "scale": np.sum(held**2)}

    report = gradcheck.check(loss, at=params, gradient=gradient, on_refuted="return")

    assert report.verdict == "refuted"
    assert all(name.startswith('p["weights"]') for name in report.entries.name)
    assert 'in p["weights"]; no error was seen in p["offsets"] and p["scale"]' in report.notices[0]
