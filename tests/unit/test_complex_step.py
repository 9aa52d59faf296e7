"""The complex-step witness: what it answers, what it refuses to answer, and what it asks of the model."""

import math

import numpy as np
import pytest

from gradcheck.evaluation.arithmetic import complex as complex_numbers
from gradcheck.problem.layout import layout_of
from gradcheck.witnesses.complex_step import NO_CIRCLE, RAISES, SPENT
from tests.hearing import complex_step_on, session_of
from tests.problems import SCALAR, VECTOR

#: The rounding floor of a check, as a share of f: a claim of 0 can be confirmed if the bound stays below 64 of them.
CONFIRMABLE = 1e3 * 2.0**-53


def hear(function, at, directions=None, **options):
    return complex_step_on(session_of(function, at, **options), directions)


def points_seen_by(function, at, **options):
    seen = []

    def watched(x):
        seen.append(np.array(x, dtype=complex))
        return function(x)

    hear(watched, at, **options)
    return np.array(seen)


def test_the_derivative_of_an_analytic_function_is_right_to_the_last_digits():
    testimony = hear(lambda x: np.exp(x[0]) * np.sin(x[1]), [0.7, 0.3])

    exact = np.exp(0.7) * np.array([np.sin(0.3), np.cos(0.3)])
    assert np.abs(testimony.value[:, 0] - exact).max() <= 4e-16
    assert testimony.bound.max() < 1e-11


def test_every_output_gets_its_own_bound():
    testimony = hear(lambda x: np.array([np.sin(x[0]), abs(x[0])]), [0.7])

    assert np.isfinite(testimony.bound[0, 0])
    assert np.isinf(testimony.bound[0, 1])
    assert list(testimony.reasons) == [(0, 1)]


def test_rows_give_derivatives_along_directions():
    testimony = hear(lambda x: x[0] * x[1], [0.7, 0.3], directions=[[1.0, 2.0], [0.5, -0.25]])

    assert testimony.value[:, 0] == pytest.approx([0.3 + 1.4, 0.15 - 0.175], rel=1e-14)
    assert testimony.bound.max() < 1e-11


def test_a_direction_costs_fourteen_evaluations_where_one_circle_is_enough():
    assert hear(np.sin, 0.7).spent == 14


@pytest.mark.parametrize("problem", [p for p in SCALAR if p.x0.size <= 20], ids=lambda p: p.name)
def test_bounds_hold_on_gradients_written_by_hand(problem):
    testimony = hear(problem.function, problem.x0)

    error = np.abs(testimony.value[:, 0] - problem.gradient(problem.x0))
    rounding_by_hand = 1e-14 * np.abs(problem.gradient(problem.x0)).max()
    assert np.all(error <= testimony.bound[:, 0] + rounding_by_hand)


@pytest.mark.parametrize("problem", [p for p in VECTOR if p.x0.size <= 20], ids=lambda p: p.name)
def test_bounds_hold_on_jacobians_written_by_hand(problem):
    testimony = hear(problem.function, problem.x0)

    error = np.abs(testimony.value - problem.jacobian(problem.x0).T)
    rounding_by_hand = 1e-14 * np.abs(problem.jacobian(problem.x0)).max()
    assert np.all(error <= testimony.bound + rounding_by_hand)


def test_only_the_variable_that_breaks_it_is_named():
    testimony = hear(lambda x: np.sin(x[0]) + abs(x[1]) + x[2] ** 2, [0.7, 0.3, 1.2])

    assert testimony.works is True
    assert list(testimony.reasons) == [(1, 0)]
    assert np.isfinite(testimony.bound[:, 0]).tolist() == [True, False, True]


def test_an_unused_variable_has_the_derivative_zero_with_a_finite_bound():
    testimony = hear(lambda x: x[0] ** 2, [0.7, 0.3])

    assert testimony.value[1, 0] == 0
    assert 0 < testimony.bound[1, 0] < 1e-11


def test_a_stationary_point_has_the_derivative_zero_with_a_finite_bound():
    testimony = hear(lambda x: (x[0] - 1) ** 2 + 3, [1.0])

    assert testimony.value[0, 0] == 0
    assert 0 < testimony.bound[0, 0] < 64 * CONFIRMABLE * 3


def test_a_function_that_is_zero_all_over_the_circle_stays_unknown():
    testimony = hear(lambda x: x[0] * 0.0, [0.7])

    assert testimony.works is False
    assert "nothing is shown" in testimony.reason


def test_a_zero_that_came_back_for_a_lost_imaginary_part_is_refused():
    testimony = hear(lambda x: np.real(x[0]) * 2, [0.7])

    assert testimony.value[0, 0] == 0
    assert np.isinf(testimony.bound[0, 0])


@pytest.mark.parametrize("share", [1e-2, 1e-5, 1e-8])
def test_a_term_that_loses_its_imaginary_part_is_noticed_down_to_its_eighth_digit(share):
    testimony = hear(lambda x: np.sin(x) + share * abs(x), 0.7)

    assert testimony.works is False


@pytest.mark.parametrize("share", [1e-11, 1e-13, 1e-15])
def test_a_smaller_loss_lies_within_the_bound(share):
    testimony = hear(lambda x: np.sin(x) + share * abs(x), 0.7)

    assert abs(testimony.value[0, 0] - (np.cos(0.7) + share)) <= testimony.bound[0, 0]


def test_a_function_that_drops_tiny_imaginary_parts_is_noticed():
    def drops(x):
        return x**2 if abs(np.imag(x)) > 1e-15 else np.real(x) ** 2

    assert "depends on the imaginary step" in hear(drops, 0.7).reason


def test_a_real_part_that_moves_with_the_imaginary_step_is_noticed():
    def moves(x):
        return x**2 + (1e-9 if 0 < abs(np.imag(x)) < 1e-12 else 0.0)

    assert "real part moves" in hear(moves, 0.7).reason


def test_a_model_that_differs_in_real_numbers_is_noticed():
    def differs(x):
        return x**2 if np.iscomplexobj(x) else x**2 + 1e-6 * (x - 0.7)

    assert "do not continue the real ones" in hear(differs, 0.7).reason


def test_a_model_that_raises_on_complex_numbers_is_unavailable():
    testimony = hear(math.sin, 0.7)

    assert testimony.works is False
    assert testimony.reason == RAISES
    assert np.isnan(testimony.value).all()


def test_single_precision_is_unavailable():
    testimony = hear(lambda x: np.sin(x.astype(np.complex64 if np.iscomplexobj(x) else np.float32)), np.array([0.7]))

    assert testimony.works is False


def test_another_shape_for_complex_numbers_is_no_mistake_of_the_model():
    testimony = hear(lambda x: x.view(float) ** 2, np.array([0.7]))

    assert testimony.works is False


def test_an_output_that_is_picked_with_a_cast_to_float_is_unavailable():
    testimony = hear(lambda x: [x], np.array([0.7]), output=lambda result: np.asarray(result[0], dtype=float))

    assert testimony.reason == RAISES


def test_a_kink_beside_the_point_shrinks_the_circle_instead_of_spoiling_the_answer():
    testimony = hear(lambda x: np.maximum(x, 0.69) ** 2, 0.7)

    assert testimony.value[0, 0] == pytest.approx(1.4, rel=1e-14)
    assert np.isfinite(testimony.bound[0, 0])
    assert testimony.step[0, 0] < 0.01


def test_a_kink_at_the_point_is_refused():
    assert hear(lambda x: np.maximum(x, 0.7), 0.7).reason == NO_CIRCLE


def test_a_steep_wave_shrinks_the_circle():
    testimony = hear(lambda x: np.sin(1e5 * x), 1.3)

    assert abs(testimony.value[0, 0] - 1e5 * np.cos(1.3e5)) <= testimony.bound[0, 0]
    assert testimony.bound[0, 0] < 1e-8 * 1e5


def test_no_real_part_leaves_the_bounds():
    seen = points_seen_by(lambda x: np.sqrt(x[0]), [0.1], bounds=[(0.0999, 1.0)])

    assert len(seen) > 14
    assert seen.real.min() >= 0.0999


def test_at_a_bound_nothing_is_said():
    testimony = hear(lambda x: np.sqrt(x[0]) + x[1], [0.1, 0.5], bounds=[(0.1, 1.0), (0.0, 1.0)])

    assert np.isinf(testimony.bound[0, 0])
    assert "no room" in testimony.reasons[0, 0]
    assert np.isfinite(testimony.bound[1, 0])


def test_a_spent_budget_is_told():
    session = session_of(lambda x: np.sin(x).sum(), [0.7, 0.3], budget=3)

    assert complex_step_on(session).reason == SPENT


def test_values_that_are_not_finite_for_complex_numbers_are_told():
    testimony = hear(lambda x: np.array([x[0] ** 2, x[0] if np.isrealobj(x) else np.nan]), [0.7])

    assert np.isfinite(testimony.bound[0, 0])
    assert "not finite" in testimony.reasons[0, 1]


def test_huge_values_off_the_real_axis_do_not_disturb():
    testimony = hear(lambda x: np.sin(2e4 * x), 1.3)

    assert abs(testimony.value[0, 0] - 2e4 * np.cos(2.6e4)) <= testimony.bound[0, 0]


@pytest.mark.filterwarnings("error")
def test_warnings_and_floating_point_settings_stay_as_they_were():
    before = np.geterr()

    hear(lambda x: np.log(x[0]) / (x[1] - x[1]) if np.iscomplexobj(x) else np.log(x[0]), [0.7, 0.3])

    assert np.geterr() == before


def test_a_discarded_imaginary_part_is_an_error_during_the_call_only():
    layout, _ = layout_of([0.7])

    with pytest.raises(np.exceptions.ComplexWarning):
        complex_numbers.call(lambda x: x.astype(float), layout, np.array([0.7 + 1e-20j]))
    with pytest.warns(np.exceptions.ComplexWarning):
        np.array([1j]).astype(float)


@pytest.mark.parametrize("result", [np.float32(1), np.array([1j], dtype=np.complex64), "text", {"a": 1}, None])
def test_what_cannot_hold_a_tiny_imaginary_part_is_refused(result):
    with pytest.raises((complex_numbers.LostImaginaryPart, TypeError, ValueError)):
        complex_numbers.as_array(result)


def test_a_real_result_has_imaginary_parts_of_exactly_zero():
    assert complex_numbers.as_array([1, 2.5]).tolist() == [1 + 0j, 2.5 + 0j]


def test_the_models_own_arguments_are_copies():
    def spoils(x):
        result = x**2
        x[:] = 0
        return result

    testimony = hear(spoils, [0.7])

    assert testimony.value[0, 0] == pytest.approx(1.4, rel=1e-14)
