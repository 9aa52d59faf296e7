"""Random scaled directions: what they move, what they allow, and what a check along them states."""

import numpy as np
import pytest

import gradcheck
from gradcheck import Verdict
from gradcheck.claims.directions import LEAST, SPREAD, Group, allowed_along, moves_of, random_factors, root_of_squares
from gradcheck.problem.domain import domain_of

N = 1001


def _weights(seed=0, n=N):
    random = np.random.default_rng(seed)
    return random.uniform(0.5, 2.0, n), random.normal(size=n)


def _check(function, at, claim, **options):
    return gradcheck.check(function, at, gradient=claim, on_refuted="return", on_undecided="pass", **options)


def test_factors_lie_between_a_half_and_one_with_signs_at_random_and_can_be_made_in_parts():
    factors = random_factors(3, 0, 10_000)
    assert np.all((np.abs(factors) >= LEAST) & (np.abs(factors) <= 1.0))
    assert abs(np.sum(factors > 0) - 5000) < 300
    np.testing.assert_array_equal(random_factors(3, 2_000, 2_100), factors[2_000:2_100])


@pytest.mark.parametrize("size", [1e-300, 1e-160, 1.0, 1e160, 1e300])
def test_a_root_of_squares_neither_overflows_nor_underflows(size):
    assert root_of_squares(size * np.array([3.0, np.nan, -4.0])) == pytest.approx(5.0 * size, rel=1e-14)


def test_a_root_of_no_squares_is_zero():
    assert root_of_squares(np.array([])) == 0
    assert root_of_squares(np.array([np.nan, 0.0])) == 0


@pytest.mark.parametrize("size", [1e-200, 1.0, 1e200])
def test_a_direction_is_allowed_what_independent_errors_sum_to(size):
    row, claim = np.array([1.0, 0.5, 2.0]), size * np.array([2.0, 4.0, 1.0])
    allowed = allowed_along(row, claim, np.ones(3), rel_tol=1e-8, abs_tol=0.0, rounding=0.0)
    assert allowed.plain == pytest.approx(SPREAD * 1e-8 * size * np.sqrt(12.0))


def test_entries_without_room_or_number_are_left_out_and_those_at_a_bound_move_inward():
    base = np.array([1.0, 1.0, 1.0, 1.0])
    lower, upper = np.array([-9.0, 1.0, 1.0, -9.0]), np.array([9.0, 9.0, 1.0, 9.0])
    domain = domain_of(base, bounds=(lower, upper))
    moves = moves_of(base, np.array([1.0, 1.0, 1.0, np.nan]), domain, 1e-16)
    assert moves.group.tolist() == [Group.SCALED, Group.INWARD, Group.LEFT_OUT, Group.LEFT_OUT]


@pytest.mark.parametrize("size", [1e-280, 1e-200, 1.0, 1e200])
def test_claims_of_any_size_are_confirmed_where_right_and_refuted_where_wrong(size):
    weights, x = _weights()
    right = size * weights * np.cos(x)
    wrong = right.copy()
    wrong[17] *= -1.0
    model = lambda x: size * float(np.dot(weights, np.sin(x)))  # noqa: E731
    assert _check(model, x, right).verdict == Verdict.CONFIRMED
    report = _check(model, x, wrong)
    assert report.verdict == Verdict.REFUTED
    assert report.entries.index.tolist() == [17]


@pytest.mark.parametrize("claimed", [np.nan, np.inf])
def test_a_claim_that_is_no_number_anywhere_is_refuted(claimed):
    weights, x = _weights()
    report = _check(lambda x: float(np.dot(weights, np.sin(x))), x, np.full(N, claimed))
    assert report.verdict == Verdict.REFUTED


def test_nothing_is_decided_where_no_variable_has_room():
    weights, x = _weights()
    report = _check(lambda x: float(np.dot(weights, np.sin(x))), x, weights * np.cos(x), bounds=(x, x))
    assert report.verdict == Verdict.UNDECIDED
    assert len(report.entries.index) > 0


@pytest.mark.parametrize("steepness", [1e6, 1e7, 1e8, 1e10])
def test_a_feature_narrower_than_the_steps_does_not_refute_a_right_claim(steepness):
    x = np.random.default_rng(0).uniform(0.3, 1.0, N)
    at = x[0]
    claim = 2.0 * x
    claim[0] += 3.0
    model = lambda x: float(np.dot(x, x)) + 3.0 * np.arctan(steepness * (x[0] - at)) / steepness  # noqa: E731
    assert _check(model, x, claim).verdict != Verdict.REFUTED


def test_waves_much_shorter_than_the_variables_do_not_refute_a_right_claim():
    weights, x = _weights()
    x = 1e5 + x
    report = _check(lambda x: float(np.dot(weights, np.sin(x))), x, weights * np.cos(x))
    assert report.verdict != Verdict.REFUTED


@pytest.mark.parametrize("seed", range(3))
def test_a_staircase_or_cut_digits_do_not_refute_a_claim(seed):
    weights, x = _weights(seed)
    flat = _check(lambda x: float(np.round(x, 3).sum()), x, np.zeros(N), seed=seed)
    cut = _check(lambda x: float(np.round(np.dot(weights, np.sin(x)), 5)), x, weights * np.cos(x), seed=seed)
    assert flat.verdict == cut.verdict == Verdict.UNDECIDED


def test_directions_of_few_variables_are_as_many_as_wanted():
    report = _check(
        lambda x: float(np.sum(np.exp(x))), np.array([0.1, 0.2, 0.3]), np.exp([0.1, 0.2, 0.3]), directions=5
    )
    assert report.verdict == Verdict.CONFIRMED
    assert len(report.directions.verdict) == 5


def test_the_smallest_visible_error_is_seen():
    weights, x = _weights()
    model = lambda x: float(np.dot(weights, np.sin(x)))  # noqa: E731
    right = weights * np.cos(x)
    share = _check(model, x, right).directions.smallest_visible
    largest = np.argsort(np.abs(right * x))[::-100]
    for place in largest[:5]:
        wrong = right.copy()
        wrong[place] *= 1.0 + 1.01 * share
        assert _check(model, x, wrong).verdict != Verdict.CONFIRMED
