"""The verdict rule, to the letter."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import gradcheck
from gradcheck import Verdict
from gradcheck.claims.rule import ALLOWANCE, REFUTING_BOUNDS, ZERO_ALLOWANCE, Tolerance, digits_agreed, judge

NAN, INF = math.nan, math.inf


def tolerance(rel_tol=0.0, abs_tol=0.0, rounding=0.0):
    return Tolerance(rel_tol=rel_tol, abs_tol=abs_tol, rounding=np.array(rounding))


def verdict(claim, value, bound, *, left=NAN, right=NAN, slope_error=0.0, **allowed):
    """The word for one entry."""
    outcome = judge(
        *(np.array([float(each)]) for each in (claim, value, bound)),
        tolerance(**allowed),
        left=np.array([left]),
        right=np.array([right]),
        slope_error=np.array([slope_error]),
    )
    assert not (outcome.confirmed & outcome.refuted).any()
    if outcome.confirmed[0]:
        return Verdict.CONFIRMED
    return Verdict.REFUTED if outcome.refuted[0] else Verdict.UNDECIDED


# --- T ---------------------------------------------------------------------------------------------------------------


def test_the_tolerance_is_absolute_plus_relative_plus_rounding():
    T = tolerance(abs_tol=0.1, rel_tol=0.01, rounding=1e-6).of(np.array([2.0]), np.array([-3.0]))

    assert T[0] == pytest.approx(0.1 + 0.01 * 3.0 + ALLOWANCE * 1e-6, rel=1e-12)


@pytest.mark.parametrize("claim", [0.0, 1e-12, -1e-12])
def test_a_claim_as_good_as_zero_is_allowed_more_rounding(claim):
    T = tolerance(rel_tol=1e-8, rounding=1e-16).of(np.array([claim]), np.array([0.0]))

    assert T[0] == pytest.approx(1e-8 * abs(claim) + ZERO_ALLOWANCE * 1e-16)


def test_rounding_excuses_no_difference_that_is_seen():
    assert verdict(1e-12, 2e-12, 1e-14, rounding=1e-15) == Verdict.UNDECIDED
    assert verdict(1e-12, 1.01e-12, 1e-14, rounding=1e-15) == Verdict.CONFIRMED


def test_the_relative_part_is_of_the_larger_of_claim_and_witness():
    claims, values = np.array([5.0, 2.0]), np.array([2.0, -5.0])

    assert tolerance(rel_tol=0.1).of(claims, values).tolist() == [0.5, 0.5]


def test_a_claim_of_nan_does_not_spoil_the_tolerance():
    assert tolerance(rel_tol=0.1).of(np.array([NAN]), np.array([2.0]))[0] == pytest.approx(0.2)


def test_where_the_rounding_decides_is_known():
    T = tolerance(rel_tol=1e-8, rounding=1e-12)

    assert T.floor_decides(np.array([0.0, 5.0]), np.array([0.0, 5.0])).tolist() == [True, False]


# --- confirmed, refuted, undecided -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("gap", "bound", "expected"),
    [
        (0.0, 0.0, Verdict.CONFIRMED),
        (0.5, 0.5, Verdict.CONFIRMED),
        (1.0, 0.0, Verdict.CONFIRMED),
        (0.0, 1.0, Verdict.CONFIRMED),
        (0.5, 0.625, Verdict.UNDECIDED),
        (0.0, 1.125, Verdict.UNDECIDED),
        (1.75, 0.25, Verdict.UNDECIDED),
        (1.875, 0.25, Verdict.REFUTED),
        (1.125, 0.0, Verdict.REFUTED),
        (4.0, 1.0, Verdict.UNDECIDED),
        (4.125, 1.0, Verdict.REFUTED),
    ],
)
def test_with_a_tolerance_of_one_the_rule_reads(gap, bound, expected):
    assert verdict(8.0 + gap, 8.0, bound, abs_tol=1.0) == expected
    assert verdict(8.0 - gap, 8.0, bound, abs_tol=1.0) == expected


def test_three_bounds_beyond_the_tolerance_refute():
    assert REFUTING_BOUNDS == 3.0


@pytest.mark.parametrize("claim", [0.0, 1.0, NAN, INF])
def test_an_infinite_bound_decides_nothing(claim):
    assert verdict(claim, 5.0, INF, abs_tol=1.0) == Verdict.UNDECIDED


@pytest.mark.parametrize("value", [NAN, INF, -INF])
@pytest.mark.parametrize("claim", [0.0, NAN])
def test_a_witness_that_is_not_finite_decides_nothing(claim, value):
    assert verdict(claim, value, 1e-9, abs_tol=1.0) == Verdict.UNDECIDED


@pytest.mark.parametrize("claim", [NAN, INF, -INF])
def test_a_claim_that_is_not_finite_is_refuted_by_a_finite_witness(claim):
    assert verdict(claim, 5.0, 1e-9, abs_tol=1.0) == Verdict.REFUTED


@pytest.mark.parametrize("claim", [NAN, INF])
def test_it_is_refuted_even_if_the_bound_is_wide(claim):
    assert verdict(claim, 5.0, 1e9, abs_tol=1.0) == Verdict.REFUTED


# --- zero ------------------------------------------------------------------------------------------------------------


def test_an_exact_zero_is_confirmed_within_the_rounding_of_the_function():
    assert verdict(0.0, 1e-13, 1e-13, rel_tol=1e-8, rounding=1e-15) == Verdict.CONFIRMED


def test_without_rounding_an_exact_zero_needs_an_exact_witness():
    assert verdict(0.0, 0.0, 0.0, rel_tol=1e-8) == Verdict.CONFIRMED
    assert verdict(0.0, 0.0, 1e-15, rel_tol=1e-8) == Verdict.UNDECIDED


def test_a_zero_claimed_for_something_visible_is_refuted():
    assert verdict(0.0, 1e-3, 1e-12, rel_tol=1e-8, rounding=1e-15) == Verdict.REFUTED


# --- kinks -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("claim", [-1.0, -0.999, 0.0, 0.5, 1.0])
@pytest.mark.parametrize("sides", [(-1.0, 1.0), (1.0, -1.0)])
def test_at_a_kink_nobody_can_say_inside_the_hull_of_the_slopes(claim, sides):
    assert verdict(claim, 0.0, 1.0, left=sides[0], right=sides[1], abs_tol=1e-8) == Verdict.UNDECIDED


def test_not_even_the_mean_slope_with_a_generous_tolerance_is_confirmed_at_a_kink():
    assert verdict(0.0, 0.0, 1.0, left=-1.0, right=1.0, abs_tol=10.0) == Verdict.UNDECIDED


@pytest.mark.parametrize(
    ("claim", "expected"), [(1.25, Verdict.UNDECIDED), (1.5, Verdict.REFUTED), (-1.5, Verdict.REFUTED)]
)
def test_outside_the_hull_by_three_errors_of_the_slopes_it_is_refuted(claim, expected):
    assert verdict(claim, 0.0, 1.125, left=-1.0, right=1.0, slope_error=0.125) == expected


@pytest.mark.parametrize("claim", [NAN, INF])
def test_at_a_kink_a_claim_that_is_not_finite_is_refuted(claim):
    assert verdict(claim, 0.0, 1.0, left=-1.0, right=1.0) == Verdict.REFUTED


# --- overall ---------------------------------------------------------------------------------------------------------

C, R, U = Verdict.CONFIRMED, Verdict.REFUTED, Verdict.UNDECIDED


@pytest.mark.parametrize(
    ("entries", "overall"), [([C], C), ([C, C], C), ([C, U], U), ([U, U], U), ([C, R], R), ([U, R, C], R), ([R], R)]
)
def test_the_worst_entry_gives_the_verdict(entries, overall):
    assert Verdict.overall(entries) == overall


def test_nothing_checked_is_an_error():
    with pytest.raises(ValueError, match="nothing was checked"):
        Verdict.overall([])


def test_verdicts_are_words():
    assert [str(each) for each in Verdict] == ["confirmed", "refuted", "undecided"]


# --- digits ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("claim", "value", "bound", "digits"),
    [
        (1.0, 1.0, 0.0, 17.0),
        (1.0, 1.0, 1e-6, 6.0),
        (1.0, 1.0 + 1e-3, 0.0, 3.0),
        (1.0, -1.0, 0.0, 0.0),
        (1.0, 1.0, 10.0, 0.0),
        (1.0, 1.0, INF, 0.0),
        (NAN, 1.0, 0.0, 0.0),
        (0.0, 0.0, 0.0, 17.0),
        (0.0, 0.0, 1e-12, 0.0),
    ],
)
def test_digits_are_those_that_the_bound_leaves(claim, value, bound, digits):
    found = digits_agreed(np.array([claim]), np.array([value]), np.array([bound]))

    assert found[0] == pytest.approx(digits, abs=0.01)


numbers = st.floats(-1e9, 1e9)
positive = st.floats(0.0, 1e9)


@given(numbers, numbers, positive, positive)
def test_a_tighter_bound_never_takes_a_confirmation_back(claim, value, bound, abs_tol):
    if verdict(claim, value, bound, abs_tol=abs_tol) == Verdict.CONFIRMED:
        assert verdict(claim, value, bound / 2, abs_tol=abs_tol) == Verdict.CONFIRMED


@given(numbers, numbers, positive, positive)
def test_the_sign_of_both_changes_nothing(claim, value, bound, abs_tol):
    assert verdict(claim, value, bound, abs_tol=abs_tol) == verdict(-claim, -value, bound, abs_tol=abs_tol)


def test_rounding_does_not_confirm_half_of_a_slope_that_stands_out_of_it():
    report = gradcheck.check(
        lambda x: 1e15 + math.exp(x), 1.29385, gradient=1.8, on_undecided="pass", on_refuted="return"
    )

    assert report.verdict == Verdict.UNDECIDED


def test_rounding_confirms_a_claim_that_no_value_could_show():
    assert gradcheck.check(lambda x: 1e15 + 1e-3 * x, 1.0, gradient=1e-3).verdict == Verdict.CONFIRMED
