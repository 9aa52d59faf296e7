"""The cheap difference witness: four evaluations a direction, two more in doubt, and never the last word."""

import math

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy.optimize import Bounds

from gradcheck.evaluation.conduct import conduct_one
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.quick_look import quick_look, wider_look
from gradcheck.witnesses.steps import room_along
from tests.gates import gate_of
from tests.problems import ONE_VARIABLE, SCALAR


def look(function, at, rows=None, *, limit=None, **options):
    return looks(function, at, rows, limit=limit, **options)[0]


def looks(function, at, rows=None, *, limit=None, wanted=None, **options):
    """What two pairs say, and what a third one beside them adds."""
    x = np.atleast_1d(np.asarray(at, dtype=float))
    directions = np.arange(x.size) if rows is None else np.asarray(rows, dtype=float)
    room = room_along(x, directions, domain_of(x, **options))
    centre = np.atleast_1d(np.asarray(function(x), dtype=float))
    gate = gate_of(function, limit)
    wanted = np.arange(len(directions)) if wanted is None else np.asarray(wanted)
    seen = conduct_one(quick_look(x, directions, room, centre), gate)
    return seen.testimony, conduct_one(wider_look(x, directions, room, centre, seen, wanted), gate)


def single(function, at, **options):
    """Value and bound for a function of one number."""
    testimony = look(lambda x: function(x[0]), at, **options)
    return testimony.value.item(), testimony.bound.item()


def test_four_evaluations_a_direction_and_one_round_for_all():
    gate = gate_of(lambda x: math.sin(x[0]) * x[1])
    x = np.array([0.7, 2.0])
    inquiry = quick_look(x, np.arange(2), room_along(x, np.arange(2), domain_of(x)), np.array([math.sin(0.7) * 2]))
    testimony = conduct_one(inquiry, gate).testimony

    assert testimony.spent == gate.evaluations == 8
    assert gate.rounds == 1


def test_a_third_pair_costs_two_evaluations_where_it_is_wanted():
    _, wider = looks(lambda x: math.sin(x[0]) * x[1], [0.7, 2.0], wanted=[1])

    assert wider.spent == 2
    assert wider.value.shape == (1, 1)
    assert abs(wider.value.item() - math.sin(0.7)) <= wider.bound.item()


@pytest.mark.parametrize("function", [lambda x: math.sin(12 * x), lambda x: math.exp(9 * x), lambda x: x**25])
def test_a_third_pair_sharpens_what_two_leave_open(function):
    quick, wider = looks(lambda x: function(x[0]), 0.9)

    assert wider.bound.item() < 0.2 * quick.bound.item()


def test_a_third_pair_without_room_for_it_says_nothing_and_costs_nothing():
    step = 0.0013
    quick, wider = looks(lambda x: math.exp(x[0]), 1.0, bounds=[(1.0 - step, 1.0 + step)])

    assert math.isfinite(quick.bound.item())
    assert wider.bound.item() == math.inf
    assert wider.spent == 0


@pytest.mark.parametrize("problem", [p for p in SCALAR if p.x0.size <= 20], ids=lambda p: p.name)
def test_the_bounds_hold_on_gradients_written_by_hand(problem):
    right = problem.gradient(problem.x0)
    for testimony in looks(problem.function, problem.x0):
        assert np.all(np.abs(testimony.value[:, 0] - right) <= testimony.bound[:, 0] + 1e-14 * np.abs(right).max())


@pytest.mark.parametrize("problem", ONE_VARIABLE, ids=lambda p: p.name)
def test_the_bounds_hold_on_published_derivatives(problem):
    for testimony in looks(lambda x: problem.function(x[0]), problem.x):
        error = abs(testimony.value.item() - problem.derivative)
        assert error <= testimony.bound.item() + 4e-16 * abs(problem.derivative)


def test_the_bound_is_small_enough_to_confirm():
    value, bound = single(math.exp, 0.7)

    assert abs(value - math.exp(0.7)) <= bound <= 5e-9 * math.exp(0.7)


@pytest.mark.parametrize(
    ("function", "at", "left", "right"),
    [
        (lambda x: abs(x - 2.0), 2.0, -1.0, 1.0),
        (lambda x: max(x - 2.0, 0.0), 2.0, 0.0, 1.0),
        (abs, 0.0, -1.0, 1.0),
        (lambda x: math.sin(x) + 1e-3 * abs(x - 2.0), 2.0, math.cos(2) - 1e-3, math.cos(2) + 1e-3),
        (lambda x: x * x + 1e-6 * abs(x - 2.0), 2.0, 4.0 - 1e-6, 4.0 + 1e-6),
    ],
)
def test_a_kink_at_the_point_is_not_confirmed_by_its_mean_slope(function, at, left, right):
    value, bound = single(function, at)

    assert bound >= 0.9 * (right - left) / 2
    assert value - bound <= left + 0.1 * (right - left)
    assert value + bound >= right - 0.1 * (right - left)


def test_an_exact_zero_has_a_bound_that_means_something():
    value, bound = single(math.cos, 0.0)

    assert abs(value) <= bound
    assert 0 < bound < 1e-9


def test_outputs_of_very_different_size_each_get_their_own_digits():
    testimony = look(lambda x: np.array([1e12 * np.sin(x[0]), 1e-12 * np.cos(x[0])]), 0.8)

    right = np.array([1e12 * math.cos(0.8), -1e-12 * math.sin(0.8)])
    assert np.all(np.abs(testimony.value[0] - right) <= testimony.bound[0])
    assert np.all(testimony.bound[0] <= 5e-9 * np.abs(right))


@pytest.mark.parametrize(
    ("function", "options"),
    [
        (math.exp, {"bounds": [(0.7, 5.0)]}),
        (math.exp, {"bounds": [(0.7, 0.7)]}),
        (lambda x: math.nan if x > 0.7 else x, {}),
        (math.exp, {"limit": 3}),
    ],
    ids=["on a bound", "held fast", "not finite on one side", "budget"],
)
def test_what_it_cannot_see_it_leaves_open(function, options):
    assert single(function, 0.7, **options)[1] == math.inf


def test_a_refusal_says_why():
    testimony = look(lambda x: math.exp(x[0]), 0.7, limit=3)

    assert testimony.reasons == {(0, 0): "the budget was spent"}


def test_a_variable_without_room_costs_nothing():
    assert look(lambda x: math.exp(x[0]), 0.7, bounds=[(0.7, 5.0)]).spent == 0


def test_along_a_row_the_slope_is_that_of_the_direction():
    testimony = look(lambda x: np.exp(x[0]) * x[1], [0.3, 2.0], rows=[[0.5, -1.5]])

    right = math.exp(0.3) * (2.0 * 0.5 - 1.5)
    assert abs(testimony.value.item() - right) <= testimony.bound.item() < 1e-7


@given(
    st.floats(-1e6, 1e6, allow_subnormal=False),
    st.just(0.0) | st.floats(1e-290, 10.0),
    st.just(0.0) | st.floats(1e-290, 10.0),
)
@example(1.3, 1e-3, 1e-3)
@example(1.3, 1e-14, 1e-14)
@settings(deadline=None)
def test_a_step_never_leaves_the_bounds(x, below, above):
    lower, upper = x - below, x + above
    outside = []

    def model(point):
        # kept, not asserted: an exception here would count as a failure of the model
        if not lower <= point[0] <= upper:
            outside.append(float(point[0]) - x)
        return math.sin(point[0])

    look(model, x, bounds=Bounds([lower], [upper]))

    assert outside == []
