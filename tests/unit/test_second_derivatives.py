"""Second derivatives from function values: along lines, mixed, and where there are none."""

import math

import numpy as np
import pytest

import gradcheck
from gradcheck import estimate

X = [0.3, 1.2]


def model(x):
    return math.exp(x[0]) * x[1] ** 2


HESSIAN = math.exp(0.3) * np.array([[1.44, 2.4], [2.4, 2.0]])


def second(function, at, **options):
    """Value, bound and all reasons of a full second derivative."""
    answer = estimate(function, at=at, order=2, **options)
    return answer.value, answer.bound, " ".join(answer.reasons.values())


def noise(size):
    """Errors of this size that depend on x alone."""

    def error(x):
        seed = np.frombuffer(np.atleast_1d(np.asarray(x, dtype=float)).tobytes(), dtype=np.uint32)
        return size * float(np.random.default_rng(seed).standard_normal())

    return error


# --- breaks and kinks ------------------------------------------------------------------------------------------------


def hinge_squared(x):
    return max(x, 0.0) ** 2


def huber(x):
    return x * x / 2 if abs(x) <= 1 else abs(x) - 0.5


@pytest.mark.parametrize(
    ("function", "at", "left", "right"),
    [
        (hinge_squared, 0.0, 0.0, 2.0),
        (lambda x: hinge_squared(x - 1.0) + math.sin(x), 1.0, -math.sin(1), 2.0 - math.sin(1)),
        (huber, 1.0, 1.0, 0.0),
        (huber, -1.0, 0.0, 1.0),
        (lambda x: x * abs(x), 0.0, -2.0, 2.0),
        (lambda x: math.exp(x) if x < 0 else 1 + x, 0.0, 1.0, 0.0),
        (lambda x: 5.0 + 1e-3 * hinge_squared(x - 2.0) + math.cos(x), 2.0, -math.cos(2), 2e-3 - math.cos(2)),
    ],
    ids=["hinge squared", "beside a wave", "Huber", "Huber, left", "x |x|", "exp and line", "small"],
)
def test_at_a_curvature_break_the_bound_covers_the_second_derivatives_of_both_sides(function, at, left, right):
    value, bound, reason = second(function, at)

    assert value - bound <= min(left, right)
    assert value + bound >= max(left, right)
    assert bound <= 0.51 * abs(right - left)
    assert "curvature break at the point" in reason


def test_a_curvature_break_shows_through_noise():
    value, bound, _ = second(lambda x: hinge_squared(x - 1.0) + math.sin(x) + noise(1e-8)(x), 1.0)

    assert value - bound <= -math.sin(1)
    assert value + bound >= 2.0 - math.sin(1)


@pytest.mark.parametrize(
    ("function", "at"),
    [(abs, 0.0), (lambda x: abs(x - 1.0) + x * x, 1.0), (lambda x: max(x, 2.0 * x), 0.0), (math.floor, 3.0)],
    ids=["abs", "beside a parabola", "two lines", "jump"],
)
def test_at_a_kink_or_a_jump_the_bound_is_infinite_and_the_reason_told(function, at):
    value, bound, reason = second(function, at)

    assert bound == math.inf
    assert not math.isfinite(value) or "jump" in reason
    assert "at the point" in reason


@pytest.mark.parametrize("budget", range(1, 60, 4))
@pytest.mark.parametrize("function", [lambda x: abs(x - 1.0) + x * x, lambda x: hinge_squared(x - 1.0) + math.sin(x)])
def test_a_short_budget_hides_no_kink_and_no_break(function, budget):
    _, bound, _ = second(function, 1.0, budget=budget)

    assert bound == math.inf or bound >= 1.0


@pytest.mark.parametrize("power", [3, 4, 5])
def test_a_break_of_a_higher_derivative_leaves_the_second_one_alone(power):
    value, bound, reason = second(lambda x: math.sin(x) + abs(x - 1.0) ** power, 1.0)

    assert abs(value + math.sin(1)) <= bound <= 1e-6
    assert reason == ""


def test_a_kink_along_one_variable_spoils_its_mixed_entries_and_no_others():
    answer = estimate(lambda x: abs(x[0]) + x[0] * x[1] + x[1] * x[2] ** 2, at=[0.0, 1.2, 2.0], order=2)

    assert np.isinf(answer.bound[0]).all()
    assert np.isinf(answer.bound[:, 0]).all()
    assert np.all(np.abs(answer.value[1:, 1:] - [[0.0, 4.0], [4.0, 2.4]]) <= answer.bound[1:, 1:])
    assert answer.bound[1:, 1:].max() < 1e-11
    assert set(answer.reasons) == {"x[0], x[0]", "x[0], x[1]", "x[0], x[2]"}


def test_a_curvature_break_across_two_variables_is_told_for_their_mixed_entry():
    answer = estimate(lambda x: hinge_squared(x[0] + x[1]), at=[1.0, -1.0], order=2)

    assert answer.bound[0, 1] == math.inf
    assert "curvature break" in answer.reasons["x[0], x[1]"]


@pytest.mark.parametrize(
    "function",
    [lambda x: abs(x[0] * x[1]), lambda x: max(x[0] * x[1], 0.0), lambda x: max(x[0], 0.0) * x[1] if x[1] > 0 else 0.0],
    ids=["abs of a product", "positive part of a product", "one quadrant"],
)
def test_a_break_that_no_axis_shows_is_no_zero(function):
    answer = estimate(lambda x: function(x) + x[0] ** 2 - math.cos(x[1]), at=[0.0, 0.0], order=2)

    assert answer.bound[0, 1] == math.inf
    assert "do not fit together" in answer.reasons["x[0], x[1]"]


# --- points and sizes ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("x", [0.0, 5e-324, -1e-320, 2e-308, 1e-300, -1e-160, 1e-12, 1e-5])
def test_at_tiny_points_steps_have_a_size_too(x):
    value, bound, _ = second(lambda y: y * y + math.cos(y), x)

    assert abs(value - (2.0 - math.cos(x))) <= bound <= 1e-9


def test_without_room_for_steps_whose_squares_are_numbers_the_bound_is_infinite_and_says_why():
    _, bound, reason = second(math.exp, 1e-200, bounds=[(0.0, 2e-200)])

    assert bound == math.inf
    assert "squares leave the range" in reason


@pytest.mark.parametrize("size", [1e-8, 1e8, 1e-100, 1e100])
def test_the_size_of_a_variable_does_not_matter(size):
    value, bound, _ = second(lambda x: math.sin(x / size), 1.3 * size)

    assert abs(value * size * size + math.sin(1.3)) <= bound * size * size <= 1e-10


def test_a_large_offset_widens_the_bound_and_no_more():
    value, bound, _ = second(lambda x: 1e12 + math.exp(x), 1.3)

    assert abs(value - math.exp(1.3)) <= bound <= 0.1


def test_a_fast_wave_has_a_second_derivative():
    value, bound, _ = second(lambda x: math.sin(1e5 * x), 0.7)

    assert abs(value + 1e10 * math.sin(1e5 * 0.7)) <= bound <= 1e2


@pytest.mark.parametrize("gap", [1e-3, 1e-6])
@pytest.mark.parametrize(
    ("function", "right"),
    [(lambda g: 1 / g, lambda g: 2 / g**3), (math.log, lambda g: -1 / g**2), (math.sqrt, lambda g: -(g**-1.5) / 4)],
    ids=["pole", "logarithm", "root"],
)
def test_a_singularity_nearby_is_no_trouble(function, right, gap):
    at = 1.0 + gap
    value, bound, _ = second(lambda x: function(x - 1.0) if x > 1.0 else math.nan, at)

    assert abs(value - right(at - 1.0)) <= bound <= 1e-6 * abs(right(gap))


def test_where_the_second_derivative_is_small_beside_the_value_it_has_digits_nevertheless():
    value, bound, _ = second(lambda x: 1e6 + 1e-3 * math.exp(x), 1.3)

    assert abs(value - 1e-3 * math.exp(1.3)) <= bound <= 0.01 * value


@pytest.mark.parametrize("width", [1e-2, 1e-3, 1e-4])
def test_a_narrow_feature_at_the_point_is_not_stepped_over(width):
    value, bound, _ = second(lambda x: math.sin(x) + 1e-3 * math.exp(-(((x - 1.0) / width) ** 2)), 1.0)

    assert abs(value + math.sin(1.0) + 2e-3 / width**2) <= bound


# --- noise -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", [1e-10, 1e-6, 1e-3])
@pytest.mark.parametrize("x", [0.4, 1.3, 2.6])
def test_the_bound_holds_on_values_with_noise_and_says_something(x, size):
    value, bound, _ = second(lambda y: math.sin(y) + noise(size)(y), x)

    assert abs(value + math.sin(x)) <= bound <= 3e3 * size / x**2


@pytest.mark.parametrize(
    "rounded",
    [lambda value: float(f"{value:.6g}"), lambda value: float(np.float32(value))],
    ids=["six digits", "float32"],
)
def test_the_bound_holds_on_values_of_few_digits(rounded):
    value, bound, _ = second(lambda x: rounded(model(x)), X)

    assert np.all(np.abs(value - HESSIAN) <= bound)
    assert bound.max() <= 1.0


def test_the_bound_holds_on_a_model_in_single_precision():
    value, bound, _ = second(lambda x: float(np.exp(np.float32(x[0])) * np.float32(x[1]) ** 2), X)

    assert np.all(np.abs(value - HESSIAN) <= bound)
    assert bound.max() <= 0.1


# --- bounds of the variables -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "bounds",
    [
        [(0.3, 1.0), (1.2, 9.0)],
        [(-1.0, 0.3), (0.0, 1.2)],
        [(0.3, 1.0), (0.0, 1.2)],
        [(0.3, 1.0), (0.0, 9.0)],
        [(0.2999, 0.31), (1.19, 1.2)],
    ],
    ids=["lower corner", "upper corner", "across", "edge", "narrow"],
)
def test_at_bounds_and_in_corners_every_value_is_taken_inside(bounds):
    outside = []

    def watched(x):
        if not all(lower <= entry <= upper for entry, (lower, upper) in zip(x, bounds, strict=True)):
            outside.append(x)
        return model(x)

    value, bound, _ = second(watched, X, bounds=bounds)

    assert outside == []
    assert np.all(np.abs(value - HESSIAN) <= bound)
    assert bound.max() <= 1e-3


def test_a_variable_held_fast_has_no_second_derivatives_and_the_others_have():
    answer = estimate(model, at=X, order=2, bounds=[(0.3, 0.3), (0.0, 5.0)])

    assert np.isinf(answer.bound).tolist() == [[True, True], [True, False]]
    assert set(answer.reasons) == {"x[0], x[0]", "x[0], x[1]"}


def test_in_the_corner_of_a_domain_that_is_not_told_the_mixed_entry_comes_from_inside():
    def model(x):
        return math.exp(x[0] * x[1]) if x[0] >= 0 and x[1] <= 1.2 else math.nan

    value, bound, _ = second(model, [0.0, 1.2])

    assert np.all(np.abs(value - [[1.44, 1.0], [1.0, 0.0]]) <= bound)
    assert bound.max() <= 1e-8


# --- several variables -----------------------------------------------------------------------------------------------


def test_what_is_not_mixed_is_exactly_zero_with_a_bound_that_means_something():
    value, bound, _ = second(lambda x: math.sin(x[0]) + math.exp(x[1]) + x[2] ** 3, [0.7, -1.1, 1.9])

    above = np.triu_indices(3, 1)
    assert np.all(value[above] == 0)
    assert np.all((bound[above] > 0) & (bound[above] < 1e-10))


def test_a_linear_model_has_zeros_with_small_bounds():
    value, bound, _ = second(lambda x: 3 * x[0] - 7 * x[1] + x[2], [0.7, 1.2, 3.0])

    assert np.all(np.abs(value) <= bound)
    assert bound.max() < 1e-12


@pytest.mark.parametrize(
    "function",
    [lambda x: 3 * x[0] - 7 * x[1] + x[2], lambda x: x[0] * x[1] + 2 * x[2] ** 2 - x[0], lambda x: 0.0],
    ids=["linear", "quadratic", "zero"],
)
def test_lines_and_quadratics_take_few_evaluations(function):
    # the point, ten an axis, sixteen a pair
    assert estimate(function, at=[0.7, 1.2, 3.0], order=2).evaluations <= 1 + 3 * 10 + 3 * 16


def test_a_weak_coupling_beside_strong_curvature_keeps_its_digits():
    value, bound, _ = second(lambda x: 1e6 * (x[0] ** 2 + x[1] ** 2) + 1e-3 * x[0] * x[1], [1.1, -0.6])

    assert abs(value[0, 1] - 1e-3) <= bound[0, 1] <= 1e-7


def test_variables_of_very_different_size_have_mixed_derivatives_to_many_digits():
    value, bound, _ = second(lambda x: math.sin(x[0] * 1e8) * math.exp(x[1] * 1e-8), [2e-8, 1e8])

    right = math.cos(2.0) * math.e
    assert abs(value[0, 1] - right) <= bound[0, 1] <= 1e-10


def test_a_matrix_of_parameters_has_second_derivatives_of_its_shape_twice():
    weights = np.array([[0.3, 1.2], [0.8, -0.4]])
    value, bound, _ = second(lambda w: float(np.sum(np.sin(w))), weights)

    assert value.shape == (2, 2, 2, 2)
    right = np.diag(-np.sin(weights.ravel())).reshape(2, 2, 2, 2)
    assert np.all(np.abs(value - right) <= bound)


def test_along_a_direction_every_output_has_its_own_second_derivative_and_reason():
    answer = estimate(
        lambda x: np.array([math.sin(x[0]) * x[1], x[0] * x[1], hinge_squared(x[0] - 1.0), abs(x[0] - 1.0)]),
        at=[1.0, 2.0],
        direction=[1.0, 0.0],
        order=2,
    )

    assert np.all(np.abs(answer.value[:2] - [-2.0 * math.sin(1.0), 0.0]) <= answer.bound[:2])
    assert answer.bound[:2].max() < 1e-10
    assert answer.bound[2] >= 1.0
    assert answer.bound[3] == math.inf
    assert "curvature break" in answer.reasons["output 2, direction"]
    assert "kink" in answer.reasons["output 3, direction"]


def test_when_the_budget_runs_out_what_is_known_stays_and_the_rest_says_why():
    answer = estimate(model, at=X, order=2, budget=60)

    assert answer.evaluations <= 60
    assert np.all(np.abs(np.diag(answer.value) - np.diag(HESSIAN)) <= np.diag(answer.bound))
    assert np.isfinite(np.diag(answer.bound)).all()
    assert answer.bound[0, 1] == math.inf
    assert answer.reasons == {"x[0], x[1]": "the budget was spent"}


def test_a_model_that_raises_nearby_gets_smaller_steps():
    value, bound, _ = second(lambda x: model(x) if x[0] > 0.29 else 1 / 0, X)

    assert np.all(np.abs(value - HESSIAN) <= bound)


def test_the_same_question_has_the_same_answer_and_the_matrix_is_symmetric():
    first, again = (estimate(model, at=X, order=2) for _ in range(2))

    assert np.array_equal(first.value, again.value)
    assert np.array_equal(first.value, first.value.T)
    assert np.array_equal(first.bound, first.bound.T)


def test_the_record_tells_its_order():
    assert gradcheck.estimate(model, at=X, order=2).to_dict()["order"] == 2
    assert gradcheck.estimate(model, at=X).to_dict()["order"] == 1
