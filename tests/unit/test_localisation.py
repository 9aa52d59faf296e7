"""Wrong entries of a claim with many entries are found, exactly those, and named."""

import numpy as np
import pytest

import gradcheck
from gradcheck import Verdict

N = 3000


class _Model:
    """Neighbours coupled by products: f = Σ x_i x_{i+1} + Σ w_i sin x_i."""

    def __init__(self, seed):
        random = np.random.default_rng(seed)
        self.weights, self.point = random.uniform(0.5, 2.0, N), random.uniform(0.5, 2.0, N)
        self.random = random

    def value(self, x):
        return float(np.dot(x[1:], x[:-1]) + np.dot(self.weights, np.sin(x)))

    def gradient(self, x):
        gradient = self.weights * np.cos(x)
        gradient[1:] += x[:-1]
        gradient[:-1] += x[1:]
        return gradient

    def check(self, claim, **options):
        return gradcheck.check(
            self.value, self.point, gradient=claim, on_refuted="return", on_undecided="pass", **options
        )


def _named(report):
    pairs = zip(report.entries.index, report.entries.verdict, strict=True)
    return {int(place) for place, verdict in pairs if verdict == Verdict.REFUTED}


@pytest.mark.parametrize("k", [1, 2, 3, 20])
@pytest.mark.parametrize("factor", [-1.0, 2.0, 1.001])
def test_entries_that_are_wrong_by_the_same_factor_are_found_exactly(k, factor):
    model = _Model(k)
    claim = model.gradient(model.point)
    wrong = model.random.choice(N, k, replace=False)
    claim[wrong] *= factor
    report = model.check(claim)
    assert report.verdict == Verdict.REFUTED
    assert _named(report) == set(wrong.tolist())


@pytest.mark.parametrize("k", [1, 3, 20])
def test_entries_wrongly_claimed_to_be_zero_are_found_exactly(k):
    model = _Model(k)
    claim = model.gradient(model.point)
    wrong = model.random.choice(N, k, replace=False)
    claim[wrong] = 0.0
    assert _named(model.check(claim)) == set(wrong.tolist())


def test_errors_that_cancel_in_a_plain_sum_are_both_found():
    model = _Model(5)
    claim = model.gradient(model.point)
    claim[10] += 0.25
    claim[20] -= 0.25
    assert _named(model.check(claim)) == {10, 20}


def test_the_found_value_is_that_of_the_derivative_within_its_bound():
    model = _Model(6)
    right = model.gradient(model.point)
    claim = right.copy()
    claim[100] *= 3.0
    entries = model.check(claim).entries
    assert abs(entries.witness[0] - right[100]) <= entries.bound[0]


def test_a_wrong_entry_at_a_bound_is_found():
    model = _Model(7)
    claim = model.gradient(model.point)
    lower = np.where(np.arange(N) % 2 == 0, model.point, -np.inf)
    claim[40] *= -1.0
    report = model.check(claim, bounds=(lower, np.full(N, np.inf)))
    assert _named(report) == {40}


def test_a_claim_wrong_by_one_factor_everywhere_is_said_to_be_so():
    model = _Model(8)
    report = model.check(2.0 * model.gradient(model.point))
    assert report.verdict == Verdict.REFUTED
    assert any("2 times the derivative" in notice for notice in report.notices)


def test_hundreds_of_wrong_entries_are_told_as_parts():
    model = _Model(9)
    claim = model.gradient(model.point)
    claim[500:1000] *= -1.0
    report = model.check(claim)
    assert report.verdict == Verdict.REFUTED
    assert _named(report) <= set(range(500, 1000))
    assert any("more entries are wrong than can be named" in notice for notice in report.notices)


@pytest.mark.parametrize("budget", [1, 2, 7, 13, 20, 35, 60])
def test_a_budget_that_ends_anywhere_never_confirms_a_wrong_claim_nor_names_an_innocent_entry(budget):
    model = _Model(10)
    claim = model.gradient(model.point)
    claim[123] *= 2.0
    report = model.check(claim, budget=budget)
    assert report.verdict != Verdict.CONFIRMED
    assert report.evaluations <= budget
    assert _named(report) <= {123}
