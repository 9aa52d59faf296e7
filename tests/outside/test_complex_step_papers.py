"""The functions of the papers on the complex step, given to every verb.

J. N. Lyness, C. B. Moler, SIAM J. Numer. Anal. 4 (1967) 202-210; W. Squire, G. Trapp, SIAM Review 40 (1998) 110-112;
J. R. R. A. Martins, P. Sturdza, J. J. Alonso, ACM TOMS 29 (2003) 245-262. Which function stands in which paper is from
memory; values, first and second derivatives at x = 1.5 were computed with 50 digits.
"""

import numpy as np
import pytest

import gradcheck
from tests.hearing import complex_step_on, session_of
from tests.outside.asking import CONFIRMED, REFUTED, verdict_on
from tests.problems import TEXTBOOK_FUNCTIONS

PAPERS = [problem for problem in TEXTBOOK_FUNCTIONS if "Gill" not in problem.source]


def each_function(test):
    return pytest.mark.parametrize("problem", PAPERS, ids=lambda problem: problem.name)(test)


@each_function
def test_the_estimate_meets_the_derivative_to_thirteen_digits_and_within_its_bound(problem):
    answer = gradcheck.estimate(problem.function, at=problem.x)

    error = abs(answer.value - problem.derivative)
    assert error <= 1e-13 * abs(problem.derivative)
    assert error <= answer.bound <= 1e-11 * abs(problem.derivative)


@each_function
def test_the_estimate_of_the_second_derivative_holds_its_bound(problem):
    answer = gradcheck.estimate(problem.function, at=problem.x, order=2)

    error = abs(answer.value - problem.second)
    assert error <= 1e-10 * abs(problem.second)
    assert error <= answer.bound <= 1e-9 * abs(problem.second)


@each_function
def test_the_complex_step_is_exact_to_the_last_digit_where_differences_are_not(problem):
    testimony = complex_step_on(session_of(problem.function, problem.x))

    assert abs(testimony.value[0, 0] - problem.derivative) <= 3e-16 * abs(problem.derivative)


@each_function
def test_the_best_central_difference_is_good_to_ten_digits_near_a_millionth(problem):
    """The curve that Squire & Trapp and Martins et al. print, with its minimum."""
    curve = gradcheck.scan(problem.function, at=problem.x)

    error = curve.errors[np.argmin(np.abs(curve.steps - curve.best_step))]
    assert 1e-7 <= curve.best_step <= 1e-5
    assert error <= 1e-9 * abs(problem.derivative)
    assert curve.order == pytest.approx(2, abs=0.01)


@each_function
def test_every_error_on_the_curve_is_the_true_error_to_within_the_reference_bound(problem):
    curve = gradcheck.scan(problem.function, at=problem.x)

    truth = np.abs(curve.values - problem.derivative)

    assert np.all(np.abs(curve.errors - truth) <= curve.bound)


@each_function
def test_the_published_derivative_is_confirmed_and_one_off_in_the_seventh_digit_refuted(problem):
    assert verdict_on(problem.function, problem.x, problem.derivative) == CONFIRMED
    assert verdict_on(problem.function, problem.x, problem.derivative * (1 + 1e-7)) == REFUTED


def test_value_and_derivative_of_the_first_function_coincide_at_a_quarter_of_pi():
    """At x = pi/4 the slope of the denominator vanishes: f = f' = 3.101766393836051495198318 (50 digits)."""
    first = PAPERS[0]

    answer = gradcheck.estimate(first.function, at=np.pi / 4)

    assert first.function(np.pi / 4) == pytest.approx(3.101766393836051495198318, rel=1e-15)
    assert abs(answer.value - 3.101766393836051495198318) <= answer.bound <= 1e-11


#: Constructs that lose the imaginary part without a word, after Martins, Sturdza & Alonso (2003), section 4.
LOSING = {
    "absolute value": lambda v: np.abs(v[0]) * v[1],
    "norm": lambda v: np.linalg.norm(v),
    "conjugated product": lambda v: np.sqrt(v.conj() @ v),
    "real part": lambda v: np.real(v[0]) * v[1],
}


@pytest.mark.parametrize("name", LOSING)
def test_a_lost_imaginary_part_gives_no_testimony_for_the_variable_that_lost_it(name):
    testimony = complex_step_on(session_of(LOSING[name], [1.5, 0.7]))

    assert not np.isfinite(testimony.bound[0, 0])


def test_the_norm_written_as_the_root_of_a_plain_product_is_exact():
    testimony = complex_step_on(session_of(lambda v: np.sqrt(v @ v), [3.0, 4.0]))

    assert testimony.value[:, 0].tolist() == pytest.approx([0.6, 0.8], rel=3e-16)


#: Functions of numpy that take complex numbers, and their derivatives; at 1.7 for the last, at 0.3 for the others.
ANALYTIC = {
    "arcsin": (np.arcsin, lambda x: 1 / np.sqrt(1 - x**2)),
    "arccos": (np.arccos, lambda x: -1 / np.sqrt(1 - x**2)),
    "arctan": (np.arctan, lambda x: 1 / (1 + x**2)),
    "arctanh": (np.arctanh, lambda x: 1 / (1 - x**2)),
    "log1p": (np.log1p, lambda x: 1 / (1 + x)),
    "expm1": (np.expm1, np.exp),
    "tanh": (np.tanh, lambda x: 1 / np.cosh(x) ** 2),
    "arcsinh": (np.arcsinh, lambda x: 1 / np.sqrt(1 + x**2)),
    "arccosh": (np.arccosh, lambda x: 1 / np.sqrt(x**2 - 1)),
}


@pytest.mark.parametrize("name", ANALYTIC)
def test_inverse_and_hyperbolic_functions_carry_a_tiny_imaginary_part_to_the_last_digit(name):
    function, derivative = ANALYTIC[name]
    x = 1.7 if name == "arccosh" else 0.3

    testimony = complex_step_on(session_of(function, x))

    # the closed form rounds, too
    assert abs(testimony.value[0, 0] - derivative(x)) <= 5e-16 * abs(derivative(x))
    assert abs(testimony.value[0, 0] - derivative(x)) <= testimony.bound[0, 0]


def test_the_root_of_a_square_has_the_slope_of_the_absolute_value_on_the_negative_side():
    testimony = complex_step_on(session_of(lambda z: np.sqrt(z * z), -2.0))

    assert testimony.value[0, 0] == pytest.approx(-1, rel=1e-15)
    assert testimony.bound[0, 0] <= 1e-12
