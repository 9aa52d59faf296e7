"""The difference witness: derivatives from function values, each value ± bound."""

import math
import zlib

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy.optimize import Bounds

from gradcheck.evaluation.conduct import conduct_one
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import room_along
from tests.gates import gate_of
from tests.problems import ONE_VARIABLE, SCALAR, VECTOR

#: More evaluations than any direction needs: where a gate refuses here, the search did not end by itself.
ENOUGH = 1000


def hear(function, at, rows=None, *, derivative=1, limit=None, **options):
    """The testimony about a function of the vector x, by coordinates or along rows; evaluations include the centre."""
    x = np.atleast_1d(np.asarray(at, dtype=float))
    directions = np.arange(x.size) if rows is None else np.asarray(rows, dtype=float)
    room = room_along(x, directions, domain_of(x, **options))
    with np.errstate(all="ignore"):
        centre = np.atleast_1d(np.asarray(function(x), dtype=float))
    return conduct_one(finite_difference(x, directions, room, centre, derivative=derivative), gate_of(function, limit))


def of_number(function):
    """A model of the vector (1,) from a function of a number."""
    return lambda x: float(function(x[0]))


def single(function, at, **options):
    """Value, bound and reason for a function of one number."""
    testimony = hear(of_number(function), at, **options)
    return testimony.value.item(), testimony.bound.item(), testimony.reasons.get((0, 0), "")


# --- smooth functions ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("problem", ONE_VARIABLE, ids=lambda p: p.name)
def test_the_bound_holds_on_published_derivatives(problem):
    value, bound, _ = single(problem.function, problem.x)

    assert abs(value - problem.derivative) <= bound + 4e-16 * abs(problem.derivative)
    assert bound <= 1e-8 * abs(problem.derivative) or problem.derivative == 0


@pytest.mark.parametrize("problem", [p for p in SCALAR if p.x0.size <= 20], ids=lambda p: p.name)
def test_the_bound_holds_on_gradients_written_by_hand(problem):
    testimony = hear(problem.function, problem.x0)

    right = problem.gradient(problem.x0)
    assert np.all(np.abs(testimony.value[:, 0] - right) <= testimony.bound[:, 0] + 1e-14 * np.abs(right).max())


@pytest.mark.parametrize("problem", [p for p in VECTOR if p.x0.size <= 12], ids=lambda p: p.name)
def test_the_bound_holds_on_jacobians_written_by_hand(problem):
    testimony = hear(problem.function, problem.x0)

    right = problem.jacobian(problem.x0).T
    assert np.all(np.abs(testimony.value - right) <= testimony.bound + 1e-14 * np.abs(right).max())


@pytest.mark.parametrize("function", [lambda x: 3.0 * x - 7.0, lambda x: 2.0 * x * x - x])
def test_a_line_or_a_parabola_takes_eleven_evaluations_with_the_point_itself(function):
    testimony = hear(of_number(function), 1.7)

    assert testimony.spent + 1 == 11


def test_outputs_of_very_different_size_each_get_their_own_digits():
    testimony = hear(lambda x: np.array([1e12 * np.sin(x[0]), 1e-12 * np.cos(x[0]), 5.0]), 0.8)

    right = np.array([1e12 * math.cos(0.8), -1e-12 * math.sin(0.8), 0.0])
    assert np.all(np.abs(testimony.value[0] - right) <= testimony.bound[0])
    assert np.all(testimony.bound[0, :2] <= 1e-11 * np.abs(right[:2]))


def test_along_a_row_the_slope_is_that_of_the_direction():
    testimony = hear(lambda x: np.exp(x[0]) * x[1], [0.3, 2.0], rows=[[1.0, 0.0], [0.5, -1.5]])

    gradient = np.array([2.0, 1.0]) * math.exp(0.3)
    right = np.array([gradient[0], 0.5 * gradient[0] - 1.5 * gradient[1]])
    assert np.all(np.abs(testimony.value[:, 0] - right) <= testimony.bound[:, 0])
    assert testimony.bound.max() < 1e-10


# --- zero ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("function", "right"), [(math.sin, 1.0), (math.exp, 1.0), (lambda x: x, 1.0), (math.cos, 0.0)])
def test_at_x_zero_steps_have_a_size_too(function, right):
    value, bound, _ = single(function, 0.0)

    assert abs(value - right) <= bound <= 1e-11


def test_a_typical_size_tells_how_far_to_step_from_zero():
    value, bound, _ = single(lambda x: math.sin(1e9 * x), 0.0, typical=1e-9)

    assert abs(value - 1e9) <= bound <= 1e-2


@pytest.mark.parametrize("level", [5.0, -1e12, 1e-300])
def test_a_constant_has_slope_zero_within_a_few_roundings(level):
    value, bound, _ = single(lambda x: level, 2.0)

    assert value == 0.0
    assert 0.0 < bound <= 1e-12 * abs(level)


def test_a_function_that_is_zero_everywhere_has_a_bound_that_is_neither_zero_nor_infinite():
    value, bound, _ = single(lambda x: 0.0, 2.0)

    assert value == 0.0
    assert 0.0 < bound < 1e-12


@pytest.mark.parametrize(
    "function", [lambda x: (x - 1.5) ** 2, lambda x: 3.0 + (x - 1.5) ** 4, lambda x: math.cos(x - 1.5)]
)
def test_at_an_optimum_the_bound_covers_the_exact_zero(function):
    value, bound, _ = single(function, 1.5)

    assert abs(value) <= bound < 1e-11


# --- where there is no derivative ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("function", "at", "left", "right"),
    [
        (abs, 0.0, -1.0, 1.0),
        (lambda x: abs(x - 2.0), 2.0, -1.0, 1.0),
        (lambda x: max(x - 2.0, 0.0), 2.0, 0.0, 1.0),
        (lambda x: math.sin(x) + 1e-3 * abs(x - 2.0), 2.0, math.cos(2) - 1e-3, math.cos(2) + 1e-3),
        (lambda x: math.exp(x) if x < 1 else math.e + 5 * (x - 1), 1.0, math.e, 5.0),
    ],
)
def test_at_a_kink_the_bound_covers_the_slopes_of_both_sides(function, at, left, right):
    testimony = hear(of_number(function), at)
    value, bound = testimony.value.item(), testimony.bound.item()

    assert testimony.left.item() == pytest.approx(left, abs=1e-4)
    assert testimony.right.item() == pytest.approx(right, abs=1e-4)
    assert value - bound <= min(left, right)
    assert value + bound >= max(left, right)
    assert testimony.reasons[0, 0].startswith("kink")


@pytest.mark.parametrize("order", [2, 3])
def test_at_a_kink_there_is_no_higher_derivative(order):
    _, bound, reason = single(abs, 0.0, derivative=order)

    assert bound == math.inf
    assert "kink" in reason


@pytest.mark.parametrize("away", [1e-9, 1e-6, 1e-3, 0.03])
def test_a_kink_beside_the_point_never_breaks_the_bound(away):
    value, bound, _ = single(lambda x: abs(x - 2.0 - away), 2.0)

    assert bound == math.inf or abs(value + 1.0) <= bound


@pytest.mark.parametrize(
    ("function", "at"),
    [
        (lambda x: 0.0 if x < 2 else 1.0, 2.0),
        (lambda x: math.sin(x) + (0.0 if x < 2 else 1e-4), 2.0),
        (lambda x: math.floor(x), 3.0),
        (lambda x: math.copysign(1.0, x), 0.0),
    ],
)
def test_at_a_jump_nothing_is_said(function, at):
    _, bound, reason = single(function, at)

    assert bound == math.inf
    assert reason.startswith("jump")


@pytest.mark.parametrize("steps", [20.0, 100.0, 1000.0])
def test_on_a_staircase_the_flat_piece_is_not_taken_for_the_slope(steps):
    value, bound, reason = single(lambda x: math.floor(steps * x) / steps, 2.0 + 0.4 / steps)

    assert (bound == math.inf and reason) or abs(value - 1.0) <= bound


@pytest.mark.parametrize(
    ("function", "at", "options"),
    [
        (lambda x: math.copysign(abs(x) ** (1 / 3), x), 0.0, {}),
        (lambda x: math.copysign(math.sqrt(abs(x - 2.0)), x - 2.0), 2.0, {}),
        (math.sqrt, 0.0, {"bounds": [(0.0, 1.0)]}),
    ],
    ids=["cube root", "signed root", "root at its bound"],
)
def test_where_quotients_grow_without_limit_nothing_is_said(function, at, options):
    _, bound, reason = single(function, at, **options)

    assert bound == math.inf
    assert "grow without limit" in reason


# --- bounds of the variables -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("bounds", [(0.7, 5.0), (-5.0, 0.7)], ids=["lower", "upper"])
@pytest.mark.parametrize("order", [1, 2])
def test_on_a_bound_values_are_taken_on_the_other_side_only(bounds, order):
    value, bound, _ = single(math.exp, 0.7, bounds=[bounds], derivative=order)

    assert abs(value - math.exp(0.7)) <= bound <= (1e-9 if order == 1 else 1e-6)


@pytest.mark.parametrize("bounds", [(np.nextafter(0.7, 0), 5.0), (-5.0, np.nextafter(0.7, 1))], ids=["lower", "upper"])
def test_one_unit_in_the_last_place_from_a_bound_is_like_on_it(bounds):
    value, bound, _ = single(math.exp, 0.7, bounds=[bounds])

    assert abs(value - math.exp(0.7)) <= bound <= 1e-9


@pytest.mark.parametrize("room", [1e-3, 1e-6, 1e-10])
def test_in_a_narrow_box_the_bound_still_holds(room):
    value, bound, _ = single(math.exp, 0.7, bounds=[(0.7 - room, 0.7 + room)])

    assert abs(value - math.exp(0.7)) <= bound < math.inf


def test_a_variable_that_its_bounds_hold_fast_has_no_derivative_and_is_told_why():
    testimony = hear(lambda x: x[0] * x[1], [0.7, 2.0], bounds=[(0.7, 0.7), (0.0, 5.0)])

    assert testimony.bound[0, 0] == math.inf
    assert testimony.reasons[0, 0] == "the bounds leave no room for a step"
    assert abs(testimony.value[1, 0] - 0.7) <= testimony.bound[1, 0] < 1e-10


sizes = st.floats(-1e6, 1e6, allow_subnormal=False)
distances = st.one_of(
    st.just(0.0), st.floats(1e-290, 10.0), st.integers(0, 40).map(lambda k: -float(k)), st.just(math.inf)
)


def bound_at(x, distance, sign):
    """A bound at this distance; negative distances count units in the last place."""
    if distance < 0:
        for _ in range(int(-distance)):
            x = np.nextafter(x, sign * math.inf)
        return float(x)
    return float(x + sign * distance)


@given(st.lists(st.tuples(sizes, distances, distances), min_size=1, max_size=3), st.booleans(), st.integers(0, 2**32))
@example([(1.3, 0.0, -3.0)], False, 0)
@settings(max_examples=200, deadline=None)
def test_a_step_never_leaves_the_bounds(variables, along_a_row, seed):
    x = np.array([each[0] for each in variables])
    lower = np.array([bound_at(value, below, -1) for value, below, _ in variables])
    upper = np.array([bound_at(value, above, +1) for value, _, above in variables])
    outside = []

    def model(point):
        # kept, not asserted: an exception here would count as a failure of the model
        if not np.all((lower <= point) & (point <= upper)):
            outside.append(point - x)
        return abs(math.sin(float(np.sum(point)))) + 0.01 * math.floor(100.0 * float(point[0]) % 7.0)

    rows = np.random.default_rng(seed).uniform(-1.0, 1.0, (2, x.size)) if along_a_row else None
    testimony = hear(model, x, rows, bounds=Bounds(lower, upper), limit=ENOUGH)

    assert outside == []
    assert not np.isnan(testimony.bound).any()


@pytest.mark.parametrize(
    "function",
    [lambda x: math.sqrt(abs(x - 1.3)), lambda x: 1.0 if x >= 1.3 else 0.0, lambda x: math.floor(10.0 * x)],
    ids=["root", "jump", "staircase"],
)
def test_in_a_box_of_a_few_units_in_the_last_place_the_search_ends(function):
    testimony = hear(of_number(function), 1.3, bounds=[(bound_at(1.3, -30.0, -1), 1.3)], limit=ENOUGH)

    assert testimony.spent < ENOUGH


@pytest.mark.parametrize("room", [1e-320, 2e-309])
@pytest.mark.parametrize("rows", [None, [[1.0]]], ids=["coordinate", "row"])
def test_a_room_at_the_end_of_the_numbers_is_no_trouble(room, rows):
    testimony = hear(lambda x: math.exp(x[0]), 0.0, rows, bounds=Bounds([0.0], [room]))

    assert not abs(testimony.value - 1.0) > testimony.bound


@pytest.mark.parametrize("slope", [1.0, 1e-3])
def test_a_step_is_never_wider_than_the_variable(slope):
    seen = []

    def model(x):
        seen.append(float(x[0]))
        return 1.0 + slope * x[0]

    hear(model, 1e-9, typical=1e-9)

    assert max(abs(x - 1e-9) for x in seen) <= 1e-9


# --- where the model fails -------------------------------------------------------------------------------------------


def with_edge(function, edge, side, failure):
    """`function` that fails beyond `edge`, above (+1) or below (−1) it."""

    def model(x):
        if side * (x - edge) > 0:
            if failure == "raises":
                raise ValueError("outside")
            return math.nan
        return function(x)

    return model


@pytest.mark.parametrize("failure", ["raises", "is NaN"])
@pytest.mark.parametrize("side", [1, -1], ids=["above", "below"])
def test_at_an_edge_of_the_domain_values_are_taken_where_the_model_works(side, failure):
    value, bound, _ = single(with_edge(math.exp, 0.7, side, failure), 0.7)

    assert abs(value - math.exp(0.7)) <= bound <= 1e-8


@pytest.mark.parametrize("failure", ["raises", "is NaN"])
@pytest.mark.parametrize("away", [0.05, 1e-3, 1e-5])
def test_an_edge_nearby_only_shortens_the_steps(away, failure):
    value, bound, _ = single(with_edge(math.exp, 0.7 + away, 1, failure), 0.7)

    assert abs(value - math.exp(0.7)) <= bound <= 1e-6


def test_a_model_that_works_at_one_point_only_says_nothing():
    _, bound, reason = single(lambda x: 1.0 if x == 0.7 else math.nan, 0.7)

    assert bound == math.inf
    assert reason == "the model fails close to the point"


def test_a_failing_direction_costs_the_others_nothing():
    testimony = hear(lambda x: math.nan if x[0] != 0.7 else math.exp(x[1]), [0.7, 0.3])

    assert testimony.bound[0, 0] == math.inf
    assert abs(testimony.value[1, 0] - math.exp(0.3)) <= testimony.bound[1, 0] < 1e-11


# --- few digits ------------------------------------------------------------------------------------------------------


def hashed(x):
    return zlib.crc32(np.float64(x).tobytes()) / 2**32 - 0.5


@pytest.mark.parametrize(
    ("coarse", "widest"),
    [
        (lambda x: np.float32(math.sin(x)), 1e-5),
        (lambda x: float(f"{math.sin(x):.5e}"), 1e-3),
        (lambda x: round(math.sin(x), 6), 1e-3),
        (lambda x: math.sin(x) * (1 + 1e-6 * hashed(x)), 1e-3),
        (lambda x: math.sin(x) + 1e-10 * hashed(x), 1e-6),
    ],
    ids=["single precision", "six digits", "six decimals", "noise of 1e-6", "noise of 1e-10"],
)
@pytest.mark.parametrize("at", [0.4, 0.81, 1.3, 2.2])
def test_digits_that_are_missing_widen_the_bound_and_do_not_break_it(coarse, widest, at):
    value, bound, _ = single(coarse, at)

    assert abs(value - math.cos(at)) <= bound <= widest


def test_the_noise_that_was_heard_is_told():
    testimony = hear(of_number(lambda x: math.sin(x) * (1 + 1e-6 * hashed(x))), 1.3)

    uniform = 1e-6 * math.sin(1.3) / math.sqrt(12)
    assert testimony.noise.item() == pytest.approx(uniform, rel=0.7)


# --- the budget ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("limit", [0, 1, 5])
def test_without_budget_the_bound_is_infinite_and_says_why(limit):
    _, bound, reason = single(math.exp, 0.7, limit=limit)

    assert bound == math.inf
    assert reason == "the budget was spent"


def test_what_was_found_before_the_budget_ended_counts():
    enough = hear(of_number(math.exp), 0.7).spent
    value, bound, _ = single(math.exp, 0.7, limit=enough - 1)

    assert abs(value - math.exp(0.7)) <= bound < 1e-10


def test_a_budget_that_ends_among_the_variables_leaves_the_finished_ones():
    testimony = hear(lambda x: x[0] + math.exp(x[1]), [0.7, 0.3], limit=16)

    assert testimony.bound[0, 0] < 1e-10
    assert testimony.works


# --- higher derivatives ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("problem", [p for p in ONE_VARIABLE if math.isfinite(p.second)], ids=lambda p: p.name)
def test_the_bound_holds_on_published_second_derivatives(problem):
    value, bound, _ = single(problem.function, problem.x, derivative=2)

    assert abs(value - problem.second) <= bound + 4e-16 * abs(problem.second)
    assert bound <= 1e-5 * abs(problem.second) or problem.second == 0


@pytest.mark.parametrize(
    ("function", "third"),
    [(math.exp, math.exp(0.7)), (math.sin, -math.cos(0.7)), (lambda x: x**3, 6.0), (lambda x: x * x, 0.0)],
)
def test_the_bound_holds_on_third_derivatives(function, third):
    value, bound, _ = single(function, 0.7, derivative=3)

    assert abs(value - third) <= bound <= 1e-3


def test_the_second_derivative_needs_no_values_that_the_first_did_not_take():
    seen = {1: set(), 2: set()}

    for order, points in seen.items():

        def model(x, points=points):
            points.add(float(x[0]))
            return math.exp(x[0])

        hear(model, 0.7, derivative=order)

    assert seen[2] <= seen[1]


# --- properties ------------------------------------------------------------------------------------------------------

FUNCTIONS = (math.sin, math.exp, lambda x: x**3 - x, lambda x: 1 / (2 + x * x), abs, lambda x: round(math.sin(x), 5))
functions = st.sampled_from(FUNCTIONS)
places = st.floats(0.01, 3.0) | st.floats(-3.0, -0.01)
powers = st.integers(-40, 40).map(lambda k: 2.0**k)


@given(functions, places, powers)
@settings(deadline=None)
def test_a_factor_of_two_on_the_function_is_a_factor_of_two_on_value_and_bound(function, x, factor):
    value, bound, _ = single(function, x)

    assert single(lambda y: factor * function(y), x)[:2] == (factor * value, factor * bound)


@given(functions, places, powers)
@example(FUNCTIONS[-1], 1.5, 0.5)
@settings(deadline=None)
def test_a_factor_of_two_on_the_unit_of_x_divides_value_and_bound(function, x, factor):
    value, bound, _ = single(function, x, typical=abs(x))

    scaled = single(lambda y: function(y / factor), x * factor, typical=abs(x) * factor)
    assert scaled[:2] == (value / factor, bound / factor)


@given(functions, functions, places, st.floats(-5.0, 5.0), st.floats(-5.0, 5.0))
@settings(deadline=None)
def test_the_slope_of_a_sum_is_the_sum_of_the_slopes_within_the_bounds(first, second, x, a, b):
    (v, bound_v, _), (w, bound_w, _) = single(first, x), single(second, x)
    value, bound, _ = single(lambda y: a * first(y) + b * second(y), x)

    together = bound + abs(a) * bound_v + abs(b) * bound_w
    assert not abs(value - (a * v + b * w)) > together + 1e-14 * (abs(a * v) + abs(b * w))


@given(st.permutations(range(4)), st.lists(places, min_size=4, max_size=4))
@settings(deadline=None, max_examples=30)
def test_the_order_of_the_variables_changes_nothing_but_the_order_of_the_answers(order, x):
    def model(y):
        return math.sin(y[0] * y[1]) + y[2] ** 3 / (1 + y[3] ** 2)

    places_of = np.argsort(order)
    straight = hear(model, x)
    mixed = hear(lambda y: model(y[places_of]), np.array(x)[list(order)])

    assert np.array_equal(mixed.value, straight.value[list(order)])
    assert np.array_equal(mixed.bound, straight.bound[list(order)])


def test_a_testimony_cannot_be_changed():
    with pytest.raises(ValueError, match="read-only"):
        hear(of_number(math.exp), 0.7).value[0] = 1.0
