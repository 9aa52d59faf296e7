"""`gradcheck.estimate`: the best derivative from function values, value ± bound."""

import json
import math

import numpy as np
import pytest

import gradcheck
from gradcheck import ModelFailure, UsageError
from tests.problems import OWN_MODELS

X = [0.3, 1.2]


def model(x):
    return math.exp(x[0]) * x[1] ** 2


GRADIENT = np.array([math.exp(0.3) * 1.44, 2.4 * math.exp(0.3)])
HESSIAN = math.exp(0.3) * np.array([[1.44, 2.4], [2.4, 2.0]])


def holds(answer, right):
    """Whether the bound holds everywhere, rounding of the right value aside."""
    return np.all(np.abs(answer.value - right) <= answer.bound + 4e-16 * np.abs(right))


# --- first derivatives -----------------------------------------------------------------------------------------------


def test_a_gradient_has_the_shape_of_the_point_and_so_has_its_bound():
    answer = gradcheck.estimate(model, at=X)

    assert answer.value.shape == answer.bound.shape == answer.step.shape == (2,)
    assert holds(answer, GRADIENT)
    assert answer.bound.max() < 1e-11


def test_a_model_of_a_number_has_a_derivative_without_axes():
    answer = gradcheck.estimate(math.exp, at=0.7)

    assert answer.value.shape == ()
    assert holds(answer, math.exp(0.7))


def test_a_matrix_of_parameters_has_a_gradient_of_its_shape():
    weights = np.array([[0.3, 1.2], [0.8, -0.4]])

    answer = gradcheck.estimate(lambda w: float(np.sum(np.sin(w))), at=weights)
    assert answer.value.shape == (2, 2)
    assert holds(answer, np.cos(weights))


def test_a_vector_model_has_a_jacobian_row_by_output():
    answer = gradcheck.estimate(lambda x: np.array([x[0] * x[1], math.sin(x[0]), 3.0]), at=X)

    assert answer.value.shape == (3, 2)
    assert holds(answer, np.array([[1.2, 0.3], [math.cos(0.3), 0.0], [0.0, 0.0]]))
    assert answer.noise.shape == (3,)


def test_along_a_direction_there_is_one_slope():
    answer = gradcheck.estimate(model, at=X, direction=[2.0, -1.0])

    assert answer.value.shape == ()
    assert holds(answer, GRADIENT @ [2.0, -1.0])


def test_a_direction_in_a_nesting_has_its_structure():
    answer = gradcheck.estimate(
        lambda p: p["a"] * float(p["b"] @ p["b"]),
        at={"a": 2.0, "b": np.array([1.0, 3.0])},
        direction={"a": 1.0, "b": [0.0, 1.0]},
    )

    assert holds(answer, 10.0 + 12.0)


def test_wrt_leaves_the_other_arguments_alone():
    answer = gradcheck.estimate(lambda a, b: a * b**2, at=gradcheck.args(2.0, 3.0), wrt="b")

    assert answer.names == ("b",)
    assert holds(answer, np.array([12.0]))


def test_output_picks_what_is_differentiated():
    assert holds(gradcheck.estimate(lambda x: {"drag": model(x)}, at=X, output=lambda r: r["drag"]), GRADIENT)


@pytest.mark.parametrize("problem", [p for p in OWN_MODELS if p.x0.size <= 13], ids=lambda p: p.name)
def test_the_bound_holds_on_gradients_written_by_hand(problem):
    answer = gradcheck.estimate(problem.function, at=problem.x0)

    right = problem.gradient(problem.x0)
    assert np.all(np.abs(answer.value - right) <= answer.bound + 1e-14 * np.abs(right).max())


def test_a_typical_size_tells_how_far_to_step_from_zero():
    assert holds(gradcheck.estimate(lambda x: math.sin(1e9 * x), at=0.0, typical=1e-9), 1e9)


def test_a_model_is_never_called_outside_its_bounds():
    seen = []

    def watched(x):
        seen.append(x)
        return math.exp(x)

    answer = gradcheck.estimate(watched, at=0.3, bounds=[(0.3, 0.31)])

    assert min(seen) >= 0.3
    assert max(seen) <= 0.31
    assert holds(answer, math.exp(0.3))


# --- second derivatives ----------------------------------------------------------------------------------------------


def test_the_second_derivatives_of_a_number_are_a_symmetric_matrix():
    answer = gradcheck.estimate(model, at=X, order=2)

    assert answer.value.shape == (2, 2)
    assert np.array_equal(answer.value, answer.value.T)
    assert holds(answer, HESSIAN)
    assert answer.bound.max() < 1e-7


def test_the_second_derivative_along_a_direction_is_its_quadratic_form():
    direction = np.array([2.0, -1.0])
    answer = gradcheck.estimate(model, at=X, order=2, direction=direction)

    assert answer.value.shape == ()
    assert holds(answer, direction @ HESSIAN @ direction)


def test_variables_of_very_different_size_have_mixed_derivatives_too():
    answer = gradcheck.estimate(lambda x: math.sin(x[0] * 1e6) * math.exp(x[1] * 1e-6), at=[2e-6, 1e6], order=2)

    s, c, e = math.sin(2.0), math.cos(2.0), math.e
    assert holds(answer, np.array([[-1e12 * s * e, c * e], [c * e, 1e-12 * s * e]]))
    assert abs(answer.bound[0, 1] / answer.value[0, 1]) < 1e-6


def test_second_derivatives_of_a_number_of_a_number():
    answer = gradcheck.estimate(math.exp, at=0.7, order=2)

    assert answer.value.shape == ()
    assert holds(answer, math.exp(0.7))


def test_at_a_kink_there_is_no_second_derivative():
    assert gradcheck.estimate(lambda x: abs(x[0]), at=[0.0], order=2).bound == np.inf


# --- where nothing can be said ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("function", "reason"),
    [
        (lambda x: math.floor(x), "jump"),
        (lambda x: math.copysign(abs(x - 3.0) ** 0.5, x - 3.0), "grow without limit"),
        (lambda x: math.nan if x != 3.0 else 1.0, "fails"),
    ],
    ids=["jump", "steep", "fails"],
)
def test_the_bound_is_infinite_and_the_reason_told_by_name(function, reason):
    answer = gradcheck.estimate(function, at=3.0)

    assert answer.bound == np.inf
    assert reason in answer.reasons["x"]


def test_at_a_kink_the_bound_covers_both_slopes():
    answer = gradcheck.estimate(lambda x: abs(x[0]) + x[1], at=[0.0, 1.0])

    assert answer.value[0] - answer.bound[0] <= -1.0
    assert answer.value[0] + answer.bound[0] >= 1.0
    assert "kink" in answer.reasons["x[0]"]
    assert abs(answer.value[1] - 1.0) <= answer.bound[1] < 1e-12


def test_a_budget_that_is_too_small_leaves_infinite_bounds_and_says_so():
    answer = gradcheck.estimate(model, at=X, budget=5)

    assert np.all(np.isinf(answer.bound))
    assert set(answer.reasons.values()) == {"the budget was spent"}
    assert answer.evaluations <= 5


# --- the record ------------------------------------------------------------------------------------------------------


def test_every_call_of_the_model_is_told():
    calls = []

    def counted(x):
        calls.append(1)
        return model(x)

    assert gradcheck.estimate(counted, at=X).evaluations == len(calls)


def test_a_linear_model_takes_eleven_evaluations():
    assert gradcheck.estimate(lambda x: 3.0 * x - 7.0, at=1.7).evaluations == 11


def test_the_same_question_has_the_same_answer():
    first, second = gradcheck.estimate(model, at=X), gradcheck.estimate(model, at=X)

    assert np.array_equal(first.value, second.value)
    assert np.array_equal(first.bound, second.bound)


def test_the_record_cannot_be_changed():
    with pytest.raises(ValueError, match="read-only"):
        gradcheck.estimate(model, at=X).value[0] = 0.0


def test_the_record_is_made_of_plain_things_on_request():
    told = gradcheck.estimate(lambda x: math.floor(x), at=3.0).to_dict()

    assert json.loads(json.dumps(told, allow_nan=False))["bound"] == "inf"


def test_the_text_shows_value_and_bound_by_name():
    text = str(gradcheck.estimate(model, at=X, names=["span", "chord"]))

    assert "span" in text
    assert "±" in text


def test_the_noise_of_the_values_is_told():
    assert 1e-9 < gradcheck.estimate(lambda x: round(math.sin(x), 6), at=0.7).noise.item() < 1e-5


def test_integers_become_floats_and_the_record_says_so():
    assert any("integers" in notice for notice in gradcheck.estimate(lambda x: x[0] ** 2, at=[3]).notices)


# --- mistakes of the caller ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"order": 3}, r"order is 3; first \(1\) and second \(2\)"),
        ({"order": 0}, "order is 0"),
        ({"order": True}, "order is True"),
        ({"order": "2"}, "order is '2'"),
        ({"output": "mass"}, "output is 'mass'; give a function that picks"),
        ({"direction": [1.0]}, "direction has 1 entry but there are 2 variables"),
        ({"direction": [0.0, 0.0]}, "finite and not all zero"),
        ({"direction": [math.nan, 1.0]}, "finite and not all zero"),
        ({"at": gradcheck.points(X, X)}, "estimate takes one point"),
        ({"at": []}, "no real number"),
        ({"bounds": [(0.5, 1.0), (0.0, 2.0)]}, "outside its bounds"),
        ({"budget": -1}, "budget is -1"),
        ({"names": ["a"]}, "names has 1 entry"),
        ({"names": "ab"}, "names is 'ab'; give a list with one name a variable"),
        ({"names": 2}, "names is 2; give a list"),
        ({"names": ["a", "a"]}, "names holds 'a' more than once"),
        ({"at": [None, 1]}, "whole numbers beside text, flags or None are no variables: write 1.0"),
    ],
)
def test_what_makes_no_sense_is_refused(options, words):
    with pytest.raises(UsageError, match=words):
        gradcheck.estimate(model, **({"at": X} | options))


def test_the_order_may_be_any_whole_number_of_one_or_two():
    answer = gradcheck.estimate(math.exp, at=0.0, order=np.float64(2.0))

    assert type(answer.order) is int
    assert answer.order == 2


def test_a_direction_that_is_no_direction_is_refused():
    with pytest.raises(UsageError, match="direction"):
        gradcheck.estimate(model, at=X, direction="up")


def test_second_derivatives_of_several_outputs_are_refused_with_the_mend():
    with pytest.raises(UsageError, match=r"returns 2: pick one with output="):
        gradcheck.estimate(lambda x: np.array([x[0], x[1]]), at=X, order=2)


def test_a_model_that_fails_at_the_point_is_told():
    with pytest.raises(ModelFailure, match="nan"):
        gradcheck.estimate(lambda x: math.nan, at=X)
