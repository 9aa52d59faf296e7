"""The branches of an error curve, on curves made by hand and on functions with known derivatives."""

import math

import numpy as np
import pytest

import gradcheck
from gradcheck.health.curve_branches import roundoff_branch, truncation_branch

STEPS = np.logspace(-13, -0.5, 51)
SCATTER = np.abs(np.random.default_rng(1).normal(size=STEPS.size))


def curve(truncation=2.0, noise=1e-16, power=2.0):
    return truncation * STEPS**power + noise / STEPS * SCATTER


def both(errors, hidden=0.0, noise=1e-16):
    best = int(np.argmin(np.where(errors > 0, np.fmax(errors, noise / STEPS), np.inf)))
    hidden = np.fmax(hidden, noise / STEPS)
    return truncation_branch(STEPS, errors, best, hidden), roundoff_branch(STEPS, errors, best, 0.0)


@pytest.mark.parametrize("power", [1.0, 2.0, 4.0])
def test_the_slope_of_the_truncation_branch_is_the_order_of_the_formula(power):
    truncation, _ = both(curve(power=power))

    assert truncation.slope == pytest.approx(power, abs=0.1)
    assert truncation.level == pytest.approx(2.0, rel=0.3)


def test_the_slope_of_the_other_branch_is_minus_one_and_its_level_the_noise():
    _, roundoff = both(curve())

    assert roundoff.slope == pytest.approx(-1, abs=0.15)
    assert roundoff.errors == pytest.approx(1e-16 / STEPS, rel=1.5)


def test_a_branch_tells_its_line_at_every_step():
    truncation, _ = both(curve())

    assert truncation.errors == pytest.approx(truncation.level * STEPS**truncation.slope)


def test_the_branches_begin_on_both_sides_of_the_best_step():
    truncation, roundoff = both(curve())

    crossing = (1e-16 / 4) ** (1 / 3)
    assert roundoff.upper < 10 * crossing
    assert crossing < truncation.lower < 100 * crossing
    assert truncation.upper == STEPS[-1]
    assert roundoff.lower == STEPS[0]


def test_without_truncation_there_is_no_such_branch():
    truncation, roundoff = both(1e-16 / STEPS * SCATTER)

    assert truncation is None
    assert roundoff is not None


def test_without_noise_there_is_no_such_branch():
    truncation, roundoff = both(2 * STEPS**2, noise=0.0)

    assert truncation.slope == pytest.approx(2)
    assert roundoff is None


def test_coarse_steps_that_alias_a_wave_do_not_bend_the_order():
    errors = np.minimum(1e6 * STEPS**2, 0.5) + 1e-16 / STEPS * SCATTER

    truncation, _ = both(errors)
    assert truncation.slope == pytest.approx(2, abs=0.05)
    assert truncation.upper <= 1e-3


def test_a_plateau_at_tiny_steps_does_not_bend_the_other_branch():
    errors = np.minimum(1e-9 / STEPS * np.maximum(SCATTER, 0.1), 1.0) + 2 * STEPS**2

    _, roundoff = both(errors, noise=1e-9)
    assert roundoff.slope == pytest.approx(-1, abs=0.25)
    assert roundoff.lower >= 1e-11


@pytest.mark.parametrize("gap", [math.nan, math.inf, 0.0])
def test_errors_that_are_not_known_belong_to_no_branch(gap):
    errors = curve()
    errors[[3, 20, 45]] = gap

    truncation, roundoff = both(errors)
    assert truncation is None or truncation.slope == pytest.approx(2, abs=0.1)
    assert roundoff.slope == pytest.approx(-1, abs=0.15)


def test_a_few_points_make_no_branch():
    assert truncation_branch(STEPS[:2], STEPS[:2] ** 2, -1, np.zeros(2)) is None
    assert roundoff_branch(STEPS[:5], 1 / STEPS[:5], 5, 0.0) is None


# --- on functions ----------------------------------------------------------------------------------------------------


def single(x):
    return float(np.exp(np.float32(x)) * np.sin(np.float32(x)))


def noisy(x):
    return math.sin(x) * (1 + 1e-6 * math.sin(1e12 * x))


@pytest.mark.parametrize(
    ("function", "third"),
    [(math.exp, math.e), (math.sin, -math.cos(1)), (lambda x: x**4, 24.0), (lambda x: 1 / x, -6.0)],
)
def test_the_truncation_branch_is_the_term_of_the_third_derivative(function, third):
    truncation = gradcheck.scan(function, at=1.0).truncation

    assert truncation.slope == pytest.approx(2, abs=0.05)
    assert float(np.interp(1e-3, gradcheck.scan(function, at=1.0).steps, truncation.errors)) == pytest.approx(
        abs(third) / 6 * 1e-6, rel=0.25
    )


def test_at_a_break_of_the_curvature_the_order_is_one():
    curve = gradcheck.scan(lambda x: (x - 1) * abs(x - 1) + math.sin(x), at=1.0)

    assert curve.order == curve.truncation.slope == pytest.approx(1, abs=0.1)


def test_a_kink_beside_the_point_leaves_the_order_of_the_steps_that_do_not_reach_it():
    curve = gradcheck.scan(lambda x: abs(x - 1.001) + math.sin(x), at=1.0)

    assert curve.order == pytest.approx(2, abs=0.1)
    assert curve.truncation.upper <= 1e-3
    assert curve.best_step < 1e-4


def test_a_line_has_a_branch_of_rounding_only():
    curve = gradcheck.scan(lambda x: 3 * x + 0.1, at=1.3)

    assert curve.truncation is None
    assert curve.roundoff.slope == pytest.approx(-1, abs=0.2)
    assert curve.best_step > 0.1


def test_a_constant_has_neither_branch_and_takes_the_largest_step():
    curve = gradcheck.scan(lambda x: 2.0, at=1.0)

    assert (curve.truncation, curve.roundoff, curve.best_error) == (None, None, 0.0)
    assert curve.best_step == curve.steps[-1]


@pytest.mark.parametrize(("function", "least"), [(single, 1e-4), (noisy, 1e-4)])
def test_noise_and_single_precision_move_the_best_step_and_the_floor_up(function, least):
    curve = gradcheck.scan(function, at=0.7)

    assert curve.best_step > least
    assert curve.floor > 1e-7
    assert curve.floor / 10 < curve.best_error < curve.floor * 10


def test_the_floor_is_what_the_noise_of_two_values_leaves():
    curve = gradcheck.scan(math.exp, at=1.0)

    assert curve.floor == pytest.approx(curve.noise / (math.sqrt(2) * curve.best_step))


def test_the_error_told_for_the_best_step_is_not_that_of_a_lucky_quotient():
    curve = gradcheck.scan(math.exp, at=1.0)

    place = int(np.argmin(np.abs(curve.steps - curve.best_step)))
    assert curve.best_error == curve.errors[place - 1 : place + 2].max()


def test_at_a_kink_no_step_is_best_and_the_floor_is_half_the_change_of_the_slope():
    curve = gradcheck.scan(lambda x: abs(x - 1) + x, at=1.0)

    assert math.isnan(curve.best_step)
    assert curve.floor == pytest.approx(1.0)
    assert curve.errors == pytest.approx(1.0, rel=5e-3)
    assert "kink" in curve.notices[-1]


@pytest.mark.parametrize(
    ("function", "x", "word"),
    [(lambda x: x + (x > 1), 1.0, "jump"), (lambda x: math.floor(100 * x) / 100, 0.5551, "plateau")],
)
def test_at_a_jump_and_on_a_plateau_no_step_is_best_and_the_reason_is_told(function, x, word):
    curve = gradcheck.scan(function, at=x)

    assert math.isnan(curve.best_step)
    assert (curve.truncation, curve.roundoff) == (None, None)
    assert word in curve.notices[-1]
    assert "No step gives a derivative here." in str(curve)


def test_quotients_that_fail_are_left_out():
    curve = gradcheck.scan(lambda x: math.log(x - 0.99), at=1.0)

    assert np.isnan(curve.errors).any()
    assert curve.order == pytest.approx(2, abs=0.1)
    assert abs(curve.value - 100) <= curve.bound


def test_where_the_reference_knows_less_than_the_quotients_these_are_held_against_each_other():
    """(e^x - 1)/x close to 0: its digits cancel, and steps of the size of x are too small for the reference."""
    x = 2.9167429449001744e-06
    curve = gradcheck.scan(lambda x: (np.exp(x) - 1) / x, at=x)

    assert curve.best_step > 0.1 * x
    assert curve.best_error < 0.01


@pytest.mark.parametrize("bounds", [(1.0, 5.0), (0.0, 1.0)])
def test_on_a_bound_the_formula_is_named(bounds):
    curve = gradcheck.scan(math.exp, at=1.0, bounds=[bounds])

    assert curve.formula == "one-sided difference"
    assert curve.truncation.slope == pytest.approx(2, abs=0.1)
    assert "Best step for a one-sided difference" in str(curve)


def test_the_unit_of_the_variable_stands_beside_the_step():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("span", 1.2, lower=0.5, upper=3.0, unit="m")],
        objective=gradcheck.Function(lambda x: math.exp(x[0])),
    )
    curve = gradcheck.scan(problem, along="span")

    assert curve.unit == "m"
    assert " m, which leaves" in " ".join(str(curve).split())
