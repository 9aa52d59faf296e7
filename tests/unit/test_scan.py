"""`gradcheck.scan`: the derivative error as a function of the step."""

import json
import math

import numpy as np
import pytest

import gradcheck
from gradcheck import ModelFailure, UsageError
from gradcheck.records.estimate import Scan

U = 2.0**-53


def model(x):
    return math.exp(x[0]) * x[1] ** 2


X = [0.3, 1.2]


# --- the curve -------------------------------------------------------------------------------------------------------


def test_steps_increase_and_every_step_has_a_quotient_and_an_error():
    curve = gradcheck.scan(model, at=X)

    assert np.all(np.diff(curve.steps) > 0)
    assert curve.steps.shape == curve.values.shape == curve.errors.shape
    assert curve.steps.size >= 30


def test_the_errors_are_those_of_the_central_difference_at_each_step():
    curve = gradcheck.scan(math.exp, at=1.0)

    true_errors = np.abs(curve.values - math.e)
    assert np.allclose(curve.errors, true_errors, rtol=1e-3, atol=4 * curve.bound + 1e-15)


def test_the_quotients_are_central_differences():
    curve = gradcheck.scan(lambda x: x**3, at=2.0)

    wide = curve.steps > 1e-3
    assert curve.values[wide] == pytest.approx(12.0 + curve.steps[wide] ** 2, rel=1e-10)


@pytest.mark.parametrize("function", [math.exp, math.sin, lambda x: 1.0 / x, lambda x: x**5])
def test_the_observed_order_of_a_central_difference_is_two(function):
    assert gradcheck.scan(function, at=1.3).order == pytest.approx(2.0, abs=0.2)


def test_on_a_bound_differences_are_one_sided_and_of_second_order():
    curve = gradcheck.scan(math.exp, at=1.0, bounds=[(1.0, 5.0)])

    assert curve.order == pytest.approx(2.0, abs=0.3)
    assert curve.values[-1] != pytest.approx(math.e, rel=1e-6)


def test_a_line_has_no_truncation_and_so_no_order():
    assert math.isnan(gradcheck.scan(lambda x: 3.0 * x, at=1.0).order)


@pytest.mark.parametrize(
    ("function", "third"), [(math.exp, math.e), (lambda x: math.sin(30 * x), 27000 * math.cos(30))]
)
def test_the_best_step_balances_truncation_and_rounding(function, third):
    """Gill, Murray, Saunders & Wright 1983: h = (3 ε/|f'''|)^(1/3); the minimum is flat, hence the factor 8."""
    curve = gradcheck.scan(function, at=1.0)

    balanced = (3 * U * abs(function(1.0)) / abs(third)) ** (1 / 3)
    assert balanced / 8 <= curve.best_step <= 8 * balanced


def test_noise_asks_for_larger_steps():
    quiet, noisy = gradcheck.scan(math.sin, at=1.0), gradcheck.scan(lambda x: round(math.sin(x), 7), at=1.0)

    assert noisy.best_step > 30 * quiet.best_step
    assert noisy.noise > 1e5 * quiet.noise


def test_the_best_step_is_one_of_the_steps():
    curve = gradcheck.scan(model, at=X)

    assert curve.best_step in curve.steps


def test_the_best_derivative_comes_with_its_bound():
    curve = gradcheck.scan(math.exp, at=1.0)

    assert abs(curve.value - math.e) <= curve.bound < 1e-11


def test_at_a_kink_the_bound_covers_both_slopes():
    curve = gradcheck.scan(lambda x: abs(x), at=0.0)

    assert curve.bound >= 1.0


# --- along what ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("along", ["chord", 1, np.int64(1), [0.0, 1.0]])
def test_a_variable_is_chosen_by_name_position_or_direction(along):
    curve = gradcheck.scan(model, at=X, along=along, names=["span", "chord"])

    assert abs(curve.value - 2.4 * math.exp(0.3)) <= curve.bound
    assert curve.along in ("chord", "direction")


def test_the_first_variable_is_the_default():
    assert gradcheck.scan(model, at=X).along == "x[0]"


def test_along_a_direction_the_slope_is_the_directional_derivative():
    curve = gradcheck.scan(model, at=X, along=[2.0, -1.0])

    right = math.exp(0.3) * (2.0 * 1.44 - 2.4)
    assert abs(curve.value - right) <= curve.bound + 1e-15


def test_one_of_several_outputs_is_picked():
    curve = gradcheck.scan(lambda x: np.array([model(x), 1.0]), at=X, output=lambda r: r[0])

    assert abs(curve.value - 1.44 * math.exp(0.3)) <= curve.bound + 1e-15


def test_a_described_model_brings_its_point():
    described = gradcheck.model(at=1.0, gradient=math.exp)(lambda x: math.exp(x))

    assert abs(gradcheck.scan(described).value - math.e) < 1e-12


def test_of_a_problem_the_objective_is_scanned():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("span", 0.3), gradcheck.Variable("chord", 1.2)],
        objective=gradcheck.Function(model),
    )

    curve = gradcheck.scan(problem, along="chord")
    assert (curve.along, curve.function) == ("chord", "objective")


# --- bounds, budget, count -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("bounds", [(1.0, 1.05), (0.9, 1.0), (0.999, 1.3)])
def test_the_model_is_never_called_outside_its_bounds(bounds):
    seen = []

    def watched(x):
        seen.append(x)
        return math.exp(x)

    gradcheck.scan(watched, at=1.0, bounds=[bounds])

    assert bounds[0] <= min(seen)
    assert max(seen) <= bounds[1]


def test_every_call_of_the_model_is_told():
    calls = []

    def counted(x):
        calls.append(1)
        return math.exp(x)

    curve = gradcheck.scan(counted, at=1.0)
    assert curve.evaluations == len(calls) <= 200


def test_the_budget_is_never_exceeded():
    calls = []

    def counted(x):
        calls.append(1)
        return math.exp(x)

    gradcheck.scan(counted, at=1.0, budget=60)
    assert len(calls) <= 60


@pytest.mark.parametrize("budget", [1, 3, 10])
def test_with_a_tiny_budget_there_is_still_an_answer(budget):
    assert isinstance(gradcheck.scan(math.exp, at=1.0, budget=budget), Scan)


def test_the_record_is_made_of_plain_things_on_request():
    told = gradcheck.scan(lambda x: 3.0 * x, at=1.0).to_dict()

    assert json.loads(json.dumps(told, allow_nan=False))["order"] == "nan"


# --- mistakes of the caller ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"along": "mass"}, r"along='mass' is no variable; the variables are x\[0\], x\[1\]"),
        ({"along": 2}, "along=2 is no variable; positions run from 0 to 1"),
        ({"along": -1}, "along=-1 is no variable"),
        ({"along": [1.0]}, "a finite direction of 2 entries"),
        ({"along": [0.0, 0.0]}, r"along is \[0.0, 0.0\]; .* not all zero"),
        ({"along": None}, "along is None; give the name or position of a variable"),
        ({"along": True}, "along is True; give the name or position of a variable"),
        ({"at": None}, "the point is missing"),
        ({"seed": -1}, "seed is -1"),
        ({"at": gradcheck.points(X, X)}, "scan takes one point"),
        ({"bounds": [(0.3, 0.3), (0.0, 2.0)]}, r"the bounds leave no room for a step along x\[0\]"),
        (
            {"output": lambda r: np.ones(2)},
            "returns 2 numbers; a scan looks at one: pick it with output=.* or scan a function",
        ),
    ],
)
def test_what_makes_no_sense_is_refused(options, words):
    with pytest.raises(UsageError, match=words):
        gradcheck.scan(model, **({"at": X} | options))


def test_a_model_that_fails_at_the_point_is_told():
    with pytest.raises(ModelFailure, match="nan"):
        gradcheck.scan(lambda x: math.nan, at=1.0)
