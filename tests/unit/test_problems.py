"""The problems that other tests rely on are right themselves."""

import math
from collections.abc import Callable
from typing import Any

import mpmath
import numpy as np
import pytest

from tests.problems import (
    HOCK_SCHITTKOWSKI,
    HOCK_SCHITTKOWSKI_CONSTRAINTS,
    HOCK_SCHITTKOWSKI_OPTIMA,
    MORE_GARBOW_HILLSTROM,
    MORE_GARBOW_HILLSTROM_SUMS,
    ONE_VARIABLE,
    OWN_MODELS,
    SCALAR,
    VECTOR,
    OneVariable,
    ScalarProblem,
    VectorProblem,
)

# all formulas are analytic, so that a complex step is exact to rounding
TINY = 1e-30
DIGITS = 40


def named(problems: Any) -> Any:
    return pytest.mark.parametrize("problem", problems, ids=lambda problem: problem.name)


def complex_steps(function: Callable[[Any], Any], x: np.ndarray) -> np.ndarray:
    """(m, n), or (n,) for a scalar function: derivatives by complex steps."""
    steps = x + 1j * TINY * np.eye(x.size)
    return np.stack([np.imag(function(row)) / TINY for row in steps], axis=-1)


def beside(x: np.ndarray) -> np.ndarray:
    """A point near `x` where no entry is special."""
    return x * (1.0 + 0.03 * np.cos(np.arange(x.size))) + 1e-3 * (x == 0)


def assert_close(found: Any, expected: Any, *, digits: float = 1e-12) -> None:
    """Equal to 12 digits of the largest entry, because entries that cancel keep fewer of their own."""
    np.testing.assert_allclose(found, expected, rtol=0, atol=digits * np.max(np.abs(expected), initial=1e-300))


def assert_close_by_row(found: Any, expected: Any) -> None:
    """Equal to 11 digits of each entry, or 14 of the largest in its row where an entry cancels."""
    for row, wanted in zip(np.atleast_2d(found), np.atleast_2d(expected), strict=True):
        np.testing.assert_allclose(row, wanted, rtol=1e-11, atol=1e-14 * np.max(np.abs(wanted)))


def exact_derivatives(problem: OneVariable) -> list[float]:
    """Value, first and second derivative at the double x, from 40 digits."""
    with mpmath.workdps(DIGITS):
        return [float(mpmath.diff(lambda x: problem.exact(mpmath.mp, x), problem.x, order)) for order in range(3)]


@named(MORE_GARBOW_HILLSTROM)
def test_residuals_at_x0_equal_the_published_ones(problem: VectorProblem) -> None:
    assert_close(problem.function(problem.x0), problem.residuals0)


@named([problem for problem in MORE_GARBOW_HILLSTROM if problem.jacobian0.size])
def test_the_jacobian_at_x0_equals_the_published_one_row_by_row(problem: VectorProblem) -> None:
    assert_close_by_row(problem.jacobian(problem.x0), problem.jacobian0)


@named(MORE_GARBOW_HILLSTROM_SUMS)
def test_the_sum_of_squares_and_its_gradient_at_x0_equal_the_published_ones(problem: ScalarProblem) -> None:
    assert problem.function(problem.x0) == pytest.approx(problem.value0, rel=1e-12)
    assert_close(problem.gradient(problem.x0), problem.gradient0)


@named([problem for problem in MORE_GARBOW_HILLSTROM if problem.minimisers])
def test_the_sum_of_squares_at_a_published_minimiser_is_the_published_minimum(problem: VectorProblem) -> None:
    for minimum, minimiser in zip(problem.minima, problem.minimisers, strict=False):
        residuals = problem.function(np.array(minimiser))

        assert residuals @ residuals == pytest.approx(minimum, rel=1e-5, abs=1e-25)


def test_the_helical_valley_jumps_across_the_half_plane_behind_its_axis() -> None:
    valley = next(problem for problem in MORE_GARBOW_HILLSTROM if problem.name == "Helical valley")

    right, left = (valley.function(np.array([x, -1.0, 0.0]))[0] for x in (1e-12, -1e-12))

    assert (right, left) == (pytest.approx(25.0), pytest.approx(-75.0))


@named(HOCK_SCHITTKOWSKI)
def test_objective_and_gradient_at_x0_equal_the_published_ones(problem: ScalarProblem) -> None:
    assert problem.function(problem.x0) == pytest.approx(problem.value0, rel=1e-14)
    assert_close(problem.gradient(problem.x0), problem.gradient0, digits=1e-14)


@named(HOCK_SCHITTKOWSKI_CONSTRAINTS)
def test_the_constraint_jacobian_at_x0_equals_the_published_one(problem: VectorProblem) -> None:
    assert_close(problem.jacobian(problem.x0), problem.jacobian0, digits=1e-14)


@named(HOCK_SCHITTKOWSKI)
def test_the_objective_at_the_published_optimum_has_the_published_value(problem: ScalarProblem) -> None:
    optimum = HOCK_SCHITTKOWSKI_OPTIMA[problem.name]

    assert problem.function(np.array(optimum.point)) == pytest.approx(optimum.value, rel=1e-13, abs=1e-13)


@named(SCALAR)
def test_gradients_equal_complex_steps_at_x0_and_beside_it(problem: ScalarProblem) -> None:
    for x in (problem.x0, beside(problem.x0)):
        gradient = problem.gradient(x)
        # entry by entry, in the entry's own unit: one that cancels is as good as rounding of f lets it be
        scale = np.abs(gradient) + abs(problem.function(x)) / np.maximum(np.abs(x), 1.0)

        assert np.all(np.abs(complex_steps(problem.function, x) - gradient) <= 1e-12 * scale)


@named(VECTOR)
def test_jacobians_equal_complex_steps_at_x0_and_beside_it(problem: VectorProblem) -> None:
    for x in (problem.x0, beside(problem.x0)):
        assert_close_by_row(problem.jacobian(x), complex_steps(problem.function, x))


@named(ONE_VARIABLE)
def test_printed_values_equal_forty_digit_ones(problem: OneVariable) -> None:
    # the printed argument is rounded to a double as well: half a unit in its last place moves value and slope
    shift = math.ulp(problem.x) / 2
    value, derivative, second = exact_derivatives(problem)

    assert problem.value == pytest.approx(value, rel=4e-16, abs=abs(derivative) * shift)
    assert problem.derivative == pytest.approx(derivative, rel=4e-16, abs=abs(second) * shift)


@named([problem for problem in ONE_VARIABLE if not math.isnan(problem.second)])
def test_printed_second_derivatives_equal_forty_digit_ones(problem: OneVariable) -> None:
    assert problem.second == pytest.approx(exact_derivatives(problem)[2], rel=4e-16)


@named(ONE_VARIABLE)
def test_double_precision_functions_equal_their_printed_values(problem: OneVariable) -> None:
    assert float(problem.function(problem.x)) == pytest.approx(problem.value, rel=2e-15, abs=1e-15)


@named(OWN_MODELS)
def test_own_models_have_a_value_and_a_gradient_of_the_right_shape(problem: ScalarProblem) -> None:
    assert np.shape(problem.function(problem.x0)) == ()
    assert problem.gradient(problem.x0).shape == problem.x0.shape
    assert np.all(np.isfinite(problem.gradient(problem.x0)))


def test_own_models_have_one_to_fifty_variables() -> None:
    sizes = {problem.x0.size for problem in OWN_MODELS}

    assert (min(sizes), max(sizes)) == (1, 50)


def test_the_gradient_at_the_bottom_of_the_well_is_exactly_zero() -> None:
    well = next(problem for problem in OWN_MODELS if problem.name == "well at its minimum")

    assert not np.any(well.gradient(well.x0))


@pytest.mark.parametrize("problems", [SCALAR, VECTOR, ONE_VARIABLE], ids=["scalar", "vector", "one variable"])
def test_names_within_a_set_differ(problems: Any) -> None:
    names = [problem.name for problem in problems]

    assert len(names) == len(set(names))


def test_points_cannot_be_written_to() -> None:
    with pytest.raises(ValueError, match="read-only"):
        SCALAR[0].x0[0] = 1.0
