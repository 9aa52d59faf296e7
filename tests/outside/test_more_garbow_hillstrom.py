"""Jacobians and gradients of the problems of Moré, Garbow & Hillstrom at their starting points.

J. J. Moré, B. S. Garbow, K. E. Hillstrom, "Testing unconstrained optimization software", ACM TOMS 7 (1981) 17-41. The
problems with hand-written Jacobians stand in ``tests/problem_sets/more_garbow_hillstrom.py``, typed from memory and
held against 50-digit values there.
"""

import numpy as np
import pytest

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, line_of, places, report_on, verdicts
from tests.problems import MORE_GARBOW_HILLSTROM, MORE_GARBOW_HILLSTROM_SUMS

BY_NAME = {problem.name: problem for problem in MORE_GARBOW_HILLSTROM}
WITH_ZEROS = [problem for problem in MORE_GARBOW_HILLSTROM if not problem.jacobian(problem.x0).all()]
SUMS_WITH_ZEROS = [problem for problem in MORE_GARBOW_HILLSTROM_SUMS if not problem.gradient0.all()]


def each(problems):
    return pytest.mark.parametrize("problem", problems, ids=lambda problem: problem.name)


@each(MORE_GARBOW_HILLSTROM)
def test_every_entry_of_the_right_jacobian_is_confirmed_at_the_starting_point(problem):
    report = report_on(problem.function, problem.x0, jacobian=problem.jacobian)

    assert report.verdict == CONFIRMED
    assert len(report.entries) == problem.jacobian(problem.x0).size


def test_estimates_of_all_jacobians_hold_their_bounds():
    """Aim: 998 of 1,000 within the bound, none beyond three of them; the hand-written Jacobians round, too."""
    shares = []
    for problem in MORE_GARBOW_HILLSTROM:
        answer = gradcheck.estimate(problem.function, at=problem.x0)
        shares.append((np.abs(answer.value - problem.jacobian(problem.x0)) / answer.bound).ravel())
    share = np.concatenate(shares)

    assert share.size == 2718
    assert np.all(share <= 3)
    assert np.mean(share <= 1) >= 0.998


@each(MORE_GARBOW_HILLSTROM)
def test_the_largest_entry_off_in_the_seventh_digit_is_refuted_and_no_other(problem):
    wrong = np.array(problem.jacobian(problem.x0))
    place = np.unravel_index(np.abs(wrong).argmax(), wrong.shape)
    wrong[place] *= 1 + 1e-6

    words = verdicts(report_on(problem.function, problem.x0, jacobian=wrong))

    assert words[place] == REFUTED
    assert np.count_nonzero(words == CONFIRMED) == words.size - 1


@each(WITH_ZEROS)
def test_zero_entries_are_confirmed_and_small_false_ones_in_their_place_refuted(problem):
    """A relative error says nothing where the derivative is zero."""
    right = np.array(problem.jacobian(problem.x0))
    place = tuple(np.argwhere(right == 0)[0])
    wrong = right.copy()
    # visible against rounding of this output: a part in a hundred million of its size, over the size of the variable
    value, x = problem.function(problem.x0)[place[0]], problem.x0[place[1]]
    wrong[place] = 1e-8 * max(abs(value), np.abs(right[place[0]]).max(), 1) / max(abs(x), 1e-2)

    words = verdicts(report_on(problem.function, problem.x0, jacobian=wrong))

    assert words[place] == REFUTED
    assert np.all(words[right == 0][1:] == CONFIRMED)


@each(MORE_GARBOW_HILLSTROM_SUMS)
def test_every_entry_of_the_gradient_of_the_sum_of_squares_is_confirmed(problem):
    report = report_on(problem.function, problem.x0, gradient=problem.gradient)

    assert set(report.entries.verdict) == {CONFIRMED}


@each(MORE_GARBOW_HILLSTROM_SUMS)
def test_the_gradient_computed_with_fifty_digits_is_confirmed_as_numbers(problem):
    assert report_on(problem.function, problem.x0, gradient=problem.gradient0).verdict == CONFIRMED


@each([problem for problem in MORE_GARBOW_HILLSTROM if problem.jacobian0.size])
def test_the_jacobian_computed_with_fifty_digits_is_confirmed_as_numbers(problem):
    assert report_on(problem.function, problem.x0, jacobian=problem.jacobian0).verdict == CONFIRMED


def test_estimates_of_all_gradients_hold_their_bounds():
    """Entries from 1e-4 to 1e11, and eight that are exactly zero."""
    answers = [gradcheck.estimate(problem.function, at=problem.x0) for problem in MORE_GARBOW_HILLSTROM_SUMS]
    truth = np.concatenate([problem.gradient0 for problem in MORE_GARBOW_HILLSTROM_SUMS])
    value, bound = (np.concatenate([getattr(answer, name) for answer in answers]) for name in ("value", "bound"))

    assert (truth.size, np.count_nonzero(truth == 0)) == (181, 8)
    assert np.all(np.abs(value - truth) <= bound)
    assert np.median(bound[truth != 0] / np.abs(truth[truth != 0])) <= 1e-12


@each(MORE_GARBOW_HILLSTROM_SUMS)
def test_a_gradient_with_its_smallest_entry_flipped_or_its_largest_off_by_a_millionth_is_refuted_there_only(problem):
    sizes = np.abs(problem.gradient0)
    for place, factor in ((np.where(sizes == 0, np.inf, sizes).argmin(), -1), (sizes.argmax(), 1 + 1e-6)):
        wrong = problem.gradient0.copy()
        wrong[place] *= factor

        words = verdicts(report_on(problem.function, problem.x0, gradient=wrong))

        assert np.flatnonzero(words == REFUTED).tolist() == [place]
        assert np.count_nonzero(words == CONFIRMED) == words.size - 1


@each(SUMS_WITH_ZEROS)
def test_a_hundred_millionth_of_the_sum_in_place_of_a_zero_of_its_gradient_is_refuted(problem):
    wrong = problem.gradient0.copy()
    place = int(np.argmin(np.abs(wrong)))
    wrong[place] = 1e-8 * problem.value0

    assert verdicts(report_on(problem.function, problem.x0, gradient=wrong))[place] == REFUTED


def valley(x):
    with np.errstate(divide="ignore", invalid="ignore"):  # x1 = 0 is a division by zero
        return BY_NAME["Helical valley"].function(x)


def test_the_helical_valley_jumps_where_the_angle_turns_over():
    """At x2 = -1, x3 = 0 the first residual jumps at x1 = 0 from -75 to +25 (limits of the published formula)."""
    report = line_of(valley, [-1.0, -1.0, 0.0], 0, 1.3)

    (jump,) = report.of_kind("jump")
    ((lower, upper),) = places((jump,), -1.0, 1.3)
    assert -1e-10 <= lower <= 0 <= upper <= 1e-10
    assert (jump.output, jump.left, jump.right) == (0, pytest.approx(-75, abs=1e-8), pytest.approx(25, abs=1e-8))


def test_the_sum_of_squares_of_the_helical_valley_jumps_from_5625_to_625():
    (jump,) = line_of(lambda x: valley(x) @ valley(x), [-1.0, -1.0, 0.0], 0, 1.3).of_kind("jump")

    assert (jump.left, jump.right) == (pytest.approx(5625, abs=1e-6), pytest.approx(625, abs=1e-6))


def test_the_helical_valley_is_smooth_on_the_other_side_of_its_axis():
    assert line_of(valley, [-1.0, 1.0, 0.0], 0, 1.3).irregularities == ()


@pytest.mark.parametrize("side", [-1.0, 1.0])
@pytest.mark.parametrize("distance", [0.1, 1e-3, 1e-6, 1e-12])
def test_beside_the_jump_of_the_helical_valley_estimates_hold_their_bounds_and_right_claims_are_not_refuted(
    distance, side
):
    x, right = np.array([side * distance, -1.0, 0.0]), BY_NAME["Helical valley"].jacobian

    answer = gradcheck.estimate(valley, at=x)

    assert np.all(np.abs(answer.value - right(x)) <= answer.bound)
    assert report_on(valley, x, jacobian=right).verdict != REFUTED


def test_on_the_jump_of_the_helical_valley_its_first_residual_has_no_slope():
    x = np.array([0.0, -1.0, 0.0])

    answer = gradcheck.estimate(valley, at=x)
    report = report_on(valley, x, jacobian=np.array([[100 / (2 * np.pi), 0, 10], [0, -10, 0], [0, 0, 1]]))

    assert np.isinf(answer.bound[0, 0])
    assert verdicts(report)[0].tolist() == [UNDECIDED, CONFIRMED, CONFIRMED]
    assert "jump" in report.entries.reason[0]
