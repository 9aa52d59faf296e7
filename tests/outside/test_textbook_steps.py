"""Step sizes for difference quotients against worked examples.

P. E. Gill, W. Murray, M. A. Saunders, M. H. Wright, "Computing forward-difference intervals for numerical
optimization", SIAM J. Sci. Stat. Comput. 4 (1983) 310-321: f(x) = (e^x - 1)^2 + (1/sqrt(1 + x^2) - 1)^2 at x = 1, also
in Gill, Murray, Wright, "Practical Optimization" (1981), section 8.6 (attribution from memory). Derivatives computed
with 50 digits, intervals from the published formulas with an absolute precision of 2^-53·f.
J. J. Moré, S. M. Wild, "Estimating derivatives of noisy simulations", ACM TOMS 38 (2012) art. 19.
"""

import numpy as np
import pytest

import gradcheck
from gradcheck.counsel.solver_steps import solver_steps
from tests.problems import TEXTBOOK_FUNCTIONS

EXAMPLE = next(problem for problem in TEXTBOOK_FUNCTIONS if "Gill" in problem.source)
SECOND, THIRD = 24.26610734821123667600071, 53.14555504863720070382221
PRECISION = 3.37316716741e-16

#: Gill et al. (1983): 2·sqrt(ε/|f''|) with its bound 2·sqrt(ε|f''|), and (3ε/|f'''|)^(1/3) with its bound.
FORWARD_STEP, FORWARD_BOUND = 7.45673777122e-9, 1.80945999224e-7
CENTRAL_STEP, CENTRAL_BOUND = 2.67032460429e-6, 1.89480737397e-10

#: Errors of the central difference with h = 2^-k in double precision, on the branch where truncation rules.
TRUNCATION_BRANCH = {8: 1.352e-4, 12: 5.280e-7}


@pytest.fixture(scope="module")
def curve():
    return gradcheck.scan(EXAMPLE.function, at=EXAMPLE.x)


@pytest.fixture(scope="module")
def steps():
    return gradcheck.audit(EXAMPLE.function, at=EXAMPLE.x).steps[0]


def published_steps():
    return solver_steps("f", ("x",), PRECISION, np.array([SECOND]), np.array([THIRD]), np.array([1.0]))


def test_the_best_central_step_is_the_published_one_within_a_factor_of_eight(curve):
    assert CENTRAL_STEP / 8 <= curve.best_step <= CENTRAL_STEP * 8


def test_the_error_at_the_best_step_is_the_published_bound_within_a_factor_of_eight(curve):
    assert CENTRAL_BOUND / 8 <= curve.best_error <= CENTRAL_BOUND * 8


def test_the_truncation_order_of_the_central_difference_is_two(curve):
    assert curve.order == pytest.approx(2, abs=0.01)


def test_the_noise_that_is_heard_is_rounding(curve):
    assert PRECISION / 8 <= curve.noise <= PRECISION * 8


@pytest.mark.parametrize("k", TRUNCATION_BRANCH)
def test_errors_on_the_truncation_branch_are_those_observed(curve, k):
    nearest = np.argmin(np.abs(np.log(curve.steps * 2.0**k)))

    expected = TRUNCATION_BRANCH[k] * (curve.steps[nearest] * 2.0**k) ** 2

    assert curve.errors[nearest] == pytest.approx(expected, rel=1e-3)


def test_errors_left_of_the_best_step_grow_as_one_over_the_step(curve):
    rounding = curve.steps < CENTRAL_STEP / 100

    slope = np.polyfit(np.log(curve.steps[rounding]), np.log(curve.errors[rounding]), 1)[0]

    assert slope == pytest.approx(-1, abs=0.15)


@pytest.mark.parametrize(("order", "truth"), [(1, EXAMPLE.derivative), (2, EXAMPLE.second)])
def test_estimates_hold_their_bounds_and_beat_the_best_plain_difference(order, truth):
    """The published bound of the second difference at its best step is 2.25672979207e-7."""
    answer = gradcheck.estimate(EXAMPLE.function, at=EXAMPLE.x, order=order)

    error = abs(answer.value - truth)
    assert error <= answer.bound
    assert answer.bound <= {1: CENTRAL_BOUND, 2: 2.25672979207e-7}[order] / 100


def test_the_central_step_for_solvers_is_that_of_gill_murray_saunders_and_wright():
    assert published_steps().central[0] == pytest.approx(CENTRAL_STEP, rel=1e-11)


def test_the_forward_step_for_solvers_is_that_of_more_and_wild():
    """8^(1/4) in place of the 2 of Gill et al., because the noise is a standard deviation and not a worst case."""
    assert published_steps().forward[0] == pytest.approx(FORWARD_STEP * 8**0.25 / 2, rel=1e-11)


def test_the_worked_example_of_more_and_wild_gives_their_forward_step():
    """f = cos t + sin t at t = 0.3 with noise 1e-6: h* = 1.5037260311921497e-3 (recomputed)."""
    bend = -(np.cos(0.3) + np.sin(0.3))

    found = solver_steps("f", ("t",), 1e-6, np.array([bend]), np.array([1.0]), np.array([1.0]))

    assert found.forward[0] == pytest.approx(1.5037260311921497e-3, rel=1e-14)


def test_the_errors_told_for_solver_steps_lie_between_the_expected_ones_and_the_published_worst_case():
    """Moré & Wild: root mean square error 2^(1/4)·sqrt(ε|f''|) of a forward difference at its best step."""
    found = published_steps()

    assert 2**0.25 * np.sqrt(PRECISION * SECOND) <= found.forward_error[0] <= FORWARD_BOUND
    assert CENTRAL_BOUND / 2 <= found.central_error[0] <= CENTRAL_BOUND


def test_an_audit_finds_these_steps_from_function_values_alone(steps):
    assert FORWARD_STEP / 2 <= steps.forward[0] <= FORWARD_STEP * 2
    assert CENTRAL_STEP / 2 <= steps.central[0] <= CENTRAL_STEP * 2


def test_an_inflection_does_not_send_the_forward_step_to_infinity():
    """sin at 0 has no curvature: the published formula divides by zero there."""
    found = gradcheck.audit(np.sin, at=0.0).steps[0]

    assert np.isfinite([found.forward[0], found.forward_error[0]]).all()
    assert 0 < found.forward[0] <= 1
