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
from gradcheck.health import step_formulas as formulas
from tests.problems import TEXTBOOK_FUNCTIONS

EXAMPLE = next(problem for problem in TEXTBOOK_FUNCTIONS if "Gill" in problem.source)
VALUE = 3.038278879639464707708164
SECOND, THIRD, FOURTH = 24.26610734821123667600071, 53.14555504863720070382221, 113.2354794842567323464204
PRECISION = 3.37316716741e-16

#: Gill et al. (1983): 2·sqrt(ε/|f''|) with its bound 2·sqrt(ε|f''|), and (3ε/|f'''|)^(1/3) with its bound.
FORWARD_STEP, FORWARD_BOUND = 7.45673777122e-9, 1.80945999224e-7
SECOND_BOUND = 2.25672979207e-7
CENTRAL_STEP, CENTRAL_BOUND = 2.67032460429e-6, 1.89480737397e-10

#: Errors of the central difference with h = 2^-k in double precision, on the branch where truncation rules.
TRUNCATION_BRANCH = {8: 1.352e-4, 12: 5.280e-7}


@pytest.fixture(scope="module")
def curve():
    return gradcheck.scan(EXAMPLE.function, at=EXAMPLE.x)


@pytest.fixture(scope="module")
def steps():
    return gradcheck.audit(EXAMPLE.function, at=EXAMPLE.x).steps[0]


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
    assert answer.bound <= {1: CENTRAL_BOUND, 2: SECOND_BOUND}[order] / 100


#: Absolute precision in units of |f|, and what Gill et al. get from it: forward step and its bound, central step and
#: its bound, step of the second difference h = (48 ε/|f''''|)^(1/4) and its bound.
BY_PRECISION = {
    2.0**-53: (FORWARD_STEP, FORWARD_BOUND, CENTRAL_STEP, CENTRAL_BOUND, 1.09351348895e-4, SECOND_BOUND),
    2.0**-52: (
        1.05454196871e-8,
        2.5589628616e-7,
        3.364398179e-6,
        3.00781921872e-10,
        1.30041402142e-4,
        3.19149787856e-7,
    ),
}


@pytest.mark.parametrize("unit", BY_PRECISION)
def test_the_central_step_for_solvers_is_that_of_gill_murray_saunders_and_wright(unit):
    step, bound = BY_PRECISION[unit][2:4]
    found = float(formulas.central_step(np.array(unit * VALUE), np.array(THIRD)))

    assert found == pytest.approx(step, rel=1e-10)
    # Their bound adds the worst case of both values, ε/h; at the step it is 3/2 of that.
    assert 1.5 * unit * VALUE / found == pytest.approx(bound, rel=1e-10)
    assert bound / 2 <= float(formulas.central_error(found, unit * VALUE, THIRD)) <= bound


@pytest.mark.parametrize("unit", BY_PRECISION)
def test_the_forward_step_for_solvers_is_that_of_more_and_wild(unit):
    """8^(1/4) in place of the 2 of Gill et al., because the noise is a standard deviation and not a worst case."""
    step, bound = BY_PRECISION[unit][:2]
    found = float(formulas.forward_step(np.array(unit * VALUE), np.array(SECOND)))

    assert found == pytest.approx(step * 8**0.25 / 2, rel=1e-10)
    assert 2**0.25 * np.sqrt(unit * VALUE * SECOND) <= float(formulas.forward_error(found, unit * VALUE, SECOND, 0.0))
    assert float(formulas.forward_error(found, unit * VALUE, SECOND, THIRD)) <= bound


@pytest.mark.parametrize("unit", BY_PRECISION)
def test_the_second_difference_at_its_published_step_keeps_its_published_bound(unit):
    """Truncation f''''h²/12 and the rounding of four values 4ε/h², at h = (48 ε/|f''''|)^(1/4)."""
    step, bound = BY_PRECISION[unit][4:]

    assert (48 * unit * VALUE / FOURTH) ** 0.25 == pytest.approx(step, rel=1e-10)
    assert FOURTH * step**2 / 12 + 4 * unit * VALUE / step**2 == pytest.approx(bound, rel=1e-10)


def test_the_worked_example_of_more_and_wild_gives_their_forward_step():
    """f = cos t + sin t at t = 0.3 with noise 1e-6: h* = 1.5037260311921497e-3 (recomputed)."""
    bend = -(np.cos(0.3) + np.sin(0.3))
    found = float(formulas.forward_step(np.array(1e-6), np.array(bend)))

    assert found == pytest.approx(1.5037260311921497e-3, rel=1e-14)


def test_the_error_of_more_and_wilds_example_is_that_of_many_draws():
    """2^(1/4)·sqrt(ε|f''|) = 1.3300295e-3 for their example (2e5 draws gave 1.3301098e-3): here 2e5 draws again."""
    bend = np.cos(0.3) + np.sin(0.3)
    h = float(formulas.forward_step(np.array(1e-6), np.array(bend)))
    noise = np.random.default_rng(0).uniform(-np.sqrt(3e-12), np.sqrt(3e-12), (2, 200_000))
    quotients = (np.cos(0.3 + h) + np.sin(0.3 + h) - bend + noise[0] - noise[1]) / h
    seen = np.sqrt(np.mean((quotients - (np.cos(0.3) - np.sin(0.3))) ** 2))

    assert 2**0.25 * np.sqrt(1e-6 * bend) == pytest.approx(1.3300295e-3, rel=1e-7)
    assert seen == pytest.approx(1.3300295e-3, rel=5e-3)
    assert seen <= float(formulas.forward_error(h, 1e-6, bend, 0.0)) <= 1.5 * seen


#: IEEE 754: ε = 2^(1 - digits), its square, cube, fourth and fifth root, ε^(2/3) and ε^(4/5); NaN where not tabulated.
NAN = float("nan")
MACHINE = {
    "float64": (
        2.2204460492503131e-16,
        1.4901161193847656e-8,
        6.0554544523933391e-6,
        1.220703125e-4,
        7.4009597974140531e-4,
        3.666852863e-11,
        3.000213634e-13,
    ),
    "float32": (
        1.1920928955078125e-7,
        3.4526698300124391e-4,
        4.9215666011518483e-3,
        1.8581361171917517e-2,
        NAN,
        NAN,
        NAN,
    ),
    "float16": (9.765625e-4, 0.03125, 9.9212565748012467e-2, NAN, NAN, NAN, NAN),
}


@pytest.mark.parametrize("kind", MACHINE)
def test_roots_of_the_machine_precision_are_those_of_the_tables(kind):
    eps = float(np.finfo(kind).eps)
    powers = (1, 1 / 2, 1 / 3, 1 / 4, 1 / 5, 2 / 3, 4 / 5)

    for power, tabulated in zip(powers, MACHINE[kind], strict=True):
        if np.isfinite(tabulated):
            assert eps**power == pytest.approx(tabulated, rel=1e-9)


@pytest.mark.parametrize("kind", MACHINE)
def test_for_a_function_of_size_and_derivatives_one_the_steps_are_roots_of_the_precision(kind):
    """Common practice takes sqrt(ε)·|x| and ε^(1/3)·|x|: the formulas agree with it within a factor 2."""
    eps, root, cube = MACHINE[kind][:3]

    assert 0.5 <= float(formulas.forward_step(np.array(eps), np.array(1.0))) / root <= 2
    assert 0.5 <= float(formulas.central_step(np.array(eps), np.array(1.0))) / cube <= 2


#: Errors observed in double precision with h = 2^-k; right of the best step they vary from platform to platform.
OBSERVED_FORWARD = {
    20: 1.157e-5,
    24: 7.243e-7,
    26: 2.176e-7,
    28: 6.861e-8,
    30: 7.659e-7,
    34: 1.26e-5,
    40: 3.2e-4,
    52: 4.45,
}
OBSERVED_CENTRAL = {8: 1.352e-4, 12: 5.280e-7, 16: 2.064e-9, 18: 9.927e-11, 20: 3.082e-10, 24: 2.171e-9, 30: 2.89e-7}


def observed(k, central):
    """Errors with h = 2^-k and its double on this machine."""
    h = 2.0 ** -np.array([k - 1.0, k])
    lower = EXAMPLE.x - h if central else np.full(h.size, EXAMPLE.x)
    at = [np.array([EXAMPLE.function(float(x)) for x in points]) for points in (EXAMPLE.x + h, lower)]
    return np.abs((at[0] - at[1]) / (EXAMPLE.x + h - lower) - EXAMPLE.derivative)


@pytest.mark.parametrize("k", OBSERVED_FORWARD)
def test_observed_errors_of_forward_differences_are_the_published_ones_within_a_factor_of_eight(k):
    found = observed(k, central=False)

    assert found.min() / 8 <= OBSERVED_FORWARD[k] <= 8 * found.max()


@pytest.mark.parametrize("k", OBSERVED_CENTRAL)
def test_observed_errors_of_central_differences_are_the_published_ones_within_a_factor_of_eight(k):
    found = observed(k, central=True)

    assert found.min() / 8 <= OBSERVED_CENTRAL[k] <= 8 * found.max()


def test_the_best_forward_step_observed_lies_within_a_factor_of_eight_of_the_formulas(steps):
    """Observed best: h = 2^-28; for central differences 2^-18."""
    assert 2.0**-28 / 8 <= steps.forward[0] <= 8 * 2.0**-28
    assert 2.0**-18 / 8 <= steps.central[0] <= 8 * 2.0**-18


def test_the_branches_of_the_curve_have_the_published_slopes(curve):
    assert curve.truncation.slope == pytest.approx(2, abs=0.02)
    assert curve.roundoff.slope == pytest.approx(-1, abs=0.2)
    assert curve.truncation.level == pytest.approx(THIRD / 6, rel=0.1)


def test_an_audit_finds_these_steps_from_function_values_alone(steps):
    assert FORWARD_STEP / 2 <= steps.forward[0] <= FORWARD_STEP * 2
    assert CENTRAL_STEP / 2 <= steps.central[0] <= CENTRAL_STEP * 2


def test_an_inflection_does_not_send_the_forward_step_to_infinity():
    """sin at 0 has no curvature: the published formula divides by zero there."""
    found = gradcheck.audit(np.sin, at=0.0).steps[0]

    assert np.isfinite([found.forward[0], found.forward_error[0]]).all()
    assert 0 < found.forward[0] <= 1
