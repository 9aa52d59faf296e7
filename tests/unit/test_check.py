"""`gradcheck.check`: silent, or raises with the story."""

import json
import math
import pickle
import warnings

import numpy as np
import pytest

import gradcheck
from gradcheck import (
    CheckReport,
    DerivativeMismatch,
    DerivativeShapeError,
    ModelFailure,
    UndecidedWarning,
    UsageError,
    Verdict,
)

X = [0.3, 1.2]


def drag(x):
    return math.exp(x[0]) * x[1] ** 2


def drag_gradient(x):
    return [math.exp(x[0]) * x[1] ** 2, 2 * math.exp(x[0]) * x[1]]


def wrong_gradient(x):
    return [math.exp(x[0]) * x[1] ** 2, math.exp(x[0]) * x[1]]


def look(function=drag, at=X, **options):
    """The report, whatever it says."""
    return gradcheck.check(function, at, **({"on_refuted": "return", "on_undecided": "pass"} | options))


def verdicts(*positional, **options):
    return [str(verdict) for verdict in look(*positional, **options).entries.verdict]


# --- the three outcomes ----------------------------------------------------------------------------------------------


def test_a_right_claim_is_silent(capsys):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        report = gradcheck.check(drag, at=X, gradient=drag_gradient)

    assert capsys.readouterr() == ("", "")
    assert report.verdict == Verdict.CONFIRMED


def test_a_wrong_claim_raises_and_the_text_is_the_report():
    with pytest.raises(DerivativeMismatch) as told:
        gradcheck.check(drag, at=X, gradient=wrong_gradient)

    assert isinstance(told.value, AssertionError)
    assert str(told.value) == str(told.value.report)
    assert "x[1]" in str(told.value)


def test_a_wrong_claim_is_returned_where_that_was_asked_for():
    assert gradcheck.check(drag, at=X, gradient=wrong_gradient, on_refuted="return").verdict == Verdict.REFUTED


ALL_NOISY = {"function": lambda x: round(math.sin(x[0]), 5), "at": [0.3], "gradient": [math.cos(0.3)]}


def half_open(**options):
    """One variable can be confirmed; the other stands at a kink."""
    return gradcheck.check(lambda x: x[0] ** 2 + abs(x[1]), at=[1.5, 0.0], gradient=[3.0, 0.5], **options)


def test_an_undecided_entry_warns():
    with pytest.warns(UndecidedWarning, match=r"x\[1\]"):
        assert half_open().verdict == Verdict.UNDECIDED


def test_the_warning_points_at_the_line_that_called_check():
    with pytest.warns(UndecidedWarning) as heard:
        half_open()

    assert heard[0].filename == __file__


def test_an_undecided_entry_raises_where_that_was_asked_for():
    with pytest.raises(DerivativeMismatch):
        half_open(on_undecided="raise")


def test_an_undecided_entry_passes_in_silence_where_that_was_asked_for():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        assert half_open(on_undecided="pass").verdict == Verdict.UNDECIDED


@pytest.mark.parametrize("on_undecided", ["warn", "raise"])
def test_where_every_entry_is_undecided_it_raises(on_undecided):
    with pytest.raises(DerivativeMismatch) as told:
        gradcheck.check(**ALL_NOISY, on_undecided=on_undecided)

    assert told.value.report.verdict == Verdict.UNDECIDED


def test_where_every_entry_is_undecided_it_passes_only_on_request():
    assert gradcheck.check(**ALL_NOISY, on_undecided="pass").verdict == Verdict.UNDECIDED


def test_a_refuted_entry_outweighs_the_undecided_ones():
    with pytest.raises(DerivativeMismatch):
        gradcheck.check(lambda x: x[0] ** 2 + abs(x[1]), at=[1.5, 0.0], gradient=[2.0, 0.5], on_undecided="pass")


# --- the report ------------------------------------------------------------------------------------------------------


def test_entries_are_parallel_arrays_with_names_and_places():
    entries = look(gradient=wrong_gradient).entries

    assert entries.name == ("x[0]", "x[1]")
    assert entries.index.tolist() == [0, 1]
    assert entries.claim.tolist() == wrong_gradient(X)
    assert np.all(np.abs(entries.witness - drag_gradient(X)) <= entries.bound)
    assert [str(v) for v in entries.verdict] == ["confirmed", "refuted"]
    assert entries.digits[0] > 8 > 1 > entries.digits[1]


def test_entries_of_a_jacobian_are_placed_by_row_and_column():
    report = look(lambda x: np.array([x[0] * x[1], x[1]]), jacobian=[[1.2, 0.3], [0.0, 1.0]])

    assert report.entries.index.tolist() == [[0, 0], [0, 1], [1, 0], [1, 1]]
    assert report.verdict == Verdict.CONFIRMED


def test_the_report_holds_the_point_the_kind_and_the_function():
    report = look(gradient=drag_gradient)

    assert (report.kind, report.function) == ("gradient", "drag")
    assert report.point.tolist() == X


def test_the_diagnosis_of_a_wrong_claim_names_its_entries():
    report = look(gradient=wrong_gradient)
    (diagnosis,) = report.diagnoses

    assert (diagnosis.code, diagnosis.entries) == ("constant-factor", ("x[1]",))
    assert "the claim is 1/2 times the derivative" in " ".join(str(report).split())


def test_a_right_claim_has_no_diagnosis_and_no_finding():
    report = look(gradient=drag_gradient)

    assert report.diagnoses == report.findings == ()


def test_the_report_is_made_of_plain_things_on_request():
    told = look(gradient=[math.nan, 1.0]).to_dict()

    assert json.loads(json.dumps(told, allow_nan=False))["entries"]["claim"] == ["nan", 1.0]


def test_a_report_and_its_error_survive_pickling():
    with pytest.raises(DerivativeMismatch) as told:
        gradcheck.check(drag, at=X, gradient=wrong_gradient)
    again = pickle.loads(pickle.dumps(told.value))

    assert str(again) == str(told.value)
    assert again.report.entries.verdict == told.value.report.entries.verdict


def test_two_checks_of_the_same_claim_say_the_same():
    first, second = (look(gradient=wrong_gradient).to_dict() for _ in range(2))

    assert {**first, "seconds": 0} == {**second, "seconds": 0}


def test_names_of_the_variables_are_used():
    assert look(gradient=wrong_gradient, names=["span", "chord"]).diagnoses[0].entries == ("chord",)


# --- forms of the claim ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "claim",
    [drag_gradient, lambda x: np.array(drag_gradient(x)), drag_gradient(X), tuple(drag_gradient(X))],
    ids=["function that gives a list", "function that gives an array", "list", "tuple"],
)
def test_a_claim_is_a_function_or_its_value(claim):
    assert look(gradient=claim).verdict == Verdict.CONFIRMED


def test_the_claim_gets_a_point_of_its_own():
    def careless(x):
        gradient = np.array(drag_gradient(x))
        x[:] = 0.0
        return gradient

    report = look(gradient=careless)

    assert report.verdict == Verdict.CONFIRMED
    assert [f.code for f in report.findings] == ["mutates-input"]


def test_a_model_of_a_number_has_a_claim_without_axes():
    report = look(math.exp, 0.7, gradient=math.exp)

    assert report.verdict == Verdict.CONFIRMED
    assert report.entries.name == ("x",)


def test_a_number_for_a_claim_of_a_model_of_a_number():
    assert look(math.exp, 0.7, gradient=math.exp(0.7)).verdict == Verdict.CONFIRMED


def test_an_array_without_axes_is_an_input_like_any_other():
    assert look(np.exp, np.array(0.7), gradient=np.exp).verdict == Verdict.CONFIRMED


def test_an_output_of_size_one_with_a_gradient_is_a_number():
    assert look(lambda x: np.array([drag(x)]), gradient=drag_gradient).verdict == Verdict.CONFIRMED


def test_a_matrix_of_parameters_has_a_gradient_of_its_shape():
    weights = np.array([[0.3, 1.2], [0.8, -0.4]])

    report = look(lambda w: float(np.sum(np.sin(w))), weights, gradient=np.cos)
    assert report.verdict == Verdict.CONFIRMED
    assert report.entries.name[2] == "w[1, 0]"


def test_parameters_in_a_nesting_have_a_gradient_of_the_same_structure():
    params = {"weights": np.array([0.3, 1.2]), "offset": 0.5}

    def loss(p):
        return float(np.sum(p["weights"] ** 2) * p["offset"])

    def gradient(p):
        return {"weights": 2 * p["weights"] * p["offset"], "offset": float(np.sum(p["weights"] ** 2))}

    assert look(loss, params, gradient=gradient).verdict == Verdict.CONFIRMED


def test_a_read_only_point_is_no_trouble():
    x = np.array(X)
    x.setflags(write=False)

    assert look(at=x, gradient=drag_gradient).verdict == Verdict.CONFIRMED


def test_a_read_only_claim_is_no_trouble():
    claim = np.array(drag_gradient(X))
    claim.setflags(write=False)

    assert look(gradient=claim).verdict == Verdict.CONFIRMED


def test_the_users_point_is_left_as_it_was():
    x = np.array(X)
    look(lambda y: y.fill(2.0) or 1.0, x, gradient=[0.0, 0.0])

    assert x.tolist() == X


def test_a_claim_that_raises_is_refuted_with_its_own_words():
    def broken(x):
        raise KeyError("chord")

    report = look(gradient=broken)

    assert report.verdict == Verdict.REFUTED
    assert [f.code for f in report.findings] == ["crash"]
    assert "KeyError" in report.findings[0].text


def test_a_claim_that_is_nan_is_refuted_in_that_entry_only():
    assert verdicts(gradient=[math.nan, drag_gradient(X)[1]]) == ["refuted", "confirmed"]


# --- where -----------------------------------------------------------------------------------------------------------


def test_every_one_of_several_points_is_checked():
    points = gradcheck.points([0.3, 1.2], [0.5, -0.7], [1.1, 2.0])
    report = look(at=points, gradient=drag_gradient)

    assert report.verdict == Verdict.CONFIRMED
    assert len(report.entries) == 6
    assert report.entries.name[2] == "x[0] @ point 1"


def test_a_claim_that_fails_at_one_of_several_points_is_refuted_there():
    def in_one_region_only(x):
        return drag_gradient(x) if x[1] > 0 else wrong_gradient(x)

    report = look(at=gradcheck.points([0.3, 1.2], [0.5, -0.7]), gradient=in_one_region_only)

    assert report.verdict == Verdict.REFUTED
    assert [str(v) for v in report.entries.verdict] == ["confirmed", "confirmed", "confirmed", "refuted"]


def test_a_check_at_several_points_says_at_how_many():
    report = look(at=gradcheck.points([0.3, 1.2], [0.5, -0.7], [1.1, 2.0]), gradient=drag_gradient)

    assert "Checked at (0.3, 1.2) and 2 other points against" in str(report)


def test_a_matrix_is_never_several_points():
    report = look(lambda x: float(np.sum(x**2)), np.array([[1.0, 2.0], [3.0, 4.0]]), gradient=lambda x: 2 * x)

    assert report.verdict == Verdict.CONFIRMED


def test_several_arguments_have_several_parts_of_a_gradient():
    report = look(lambda a, b: a * b**2, gradcheck.args(2.0, 3.0), gradient=lambda a, b: (b**2, 2 * a * b))

    assert report.verdict == Verdict.CONFIRMED
    assert report.entries.name == ("a", "b")


def test_only_the_arguments_named_by_wrt_are_checked():
    def moment(load, length, mode="fast"):
        return load * length**2 if mode == "fast" else 0.0

    at = gradcheck.args(2.0, 3.0, mode="fast")
    report = look(moment, at, wrt="length", gradient=lambda load, length, mode: 2 * load * length)

    assert report.verdict == Verdict.CONFIRMED
    assert report.entries.name == ("length",)


def test_output_picks_what_is_differentiated():
    report = look(lambda x: {"drag": drag(x), "log": "done"}, output=lambda r: r["drag"], gradient=drag_gradient)

    assert report.verdict == Verdict.CONFIRMED


def test_a_model_is_never_called_outside_its_bounds():
    seen = []

    def watched(x):
        seen.append(np.array(x))
        return drag(x)

    look(watched, [0.3, 1.0], bounds=[(0.3, 2.0), (0.0, 1.0)], gradient=wrong_gradient)

    low, high = np.min(seen, axis=0), np.max(seen, axis=0)
    assert low[0] >= 0.3
    assert high[0] <= 2.0
    assert low[1] >= 0.0
    assert high[1] <= 1.0


def test_a_claim_on_a_bound_can_be_confirmed():
    assert look(bounds=[(0.3, 2.0), (0.0, 1.2)], gradient=drag_gradient).verdict == Verdict.CONFIRMED


# --- the rule, seen from outside -------------------------------------------------------------------------------------


@pytest.mark.parametrize("claim", [-1.0, -0.5, 0.0, 1.0])
def test_at_a_kink_a_slope_between_both_sides_is_undecided(claim):
    report = look(lambda x: abs(x[0]), [0.0], gradient=[claim])

    assert report.verdict == Verdict.UNDECIDED
    assert [f.code for f in report.findings] == ["kink"]


@pytest.mark.parametrize("claim", [1.5, -1.01, math.nan])
def test_at_a_kink_a_slope_beyond_both_sides_is_refuted(claim):
    assert look(lambda x: abs(x[0]), [0.0], gradient=[claim]).verdict == Verdict.REFUTED


@pytest.mark.parametrize(
    ("steps", "claim"),
    [
        (10.0, 0.0),
        (1000.0, 0.0),
        (1e5, 0.0),
        (10.0, 1.0),
        (1000.0, 1.0),
        (1e5, 1.0),
    ],
)
def test_on_a_staircase_neither_zero_nor_the_mean_slope_is_decided(steps, claim):
    report = look(lambda x: math.floor(steps * x[0] + 0.4) / steps, [2.0], gradient=[claim])

    assert report.verdict == Verdict.UNDECIDED


@pytest.mark.parametrize(
    "model",
    [
        lambda x: math.floor(x[0]),
        lambda x: round(3 * x[0]) / 3,
        lambda x: float(int(x[0] * 7)),
        lambda x: 4.0 if x[0] > 0.5 else 1.0,
    ],
)
def test_zero_on_the_flat_of_a_staircase_is_left_open_and_the_staircase_is_told(model):
    report = look(model, [0.3], gradient=[0.0])

    assert report.verdict == Verdict.UNDECIDED
    assert [str(f.code) for f in report.findings] == ["staircase"]
    assert "staircase" in report.entries.reason[0]


@pytest.mark.parametrize(
    "model",
    [lambda x: max(0.0, x[0] - 1.5) ** 2, lambda x: max(0.0, x[0] - 1.2), lambda x: min(x[0], 0.5), lambda x: 5.0],
)
def test_zero_of_a_part_that_is_switched_off_is_confirmed(model):
    assert look(model, [1.0], gradient=[0.0]).verdict == Verdict.CONFIRMED


def test_a_staircase_within_bounds_is_looked_for_inside_them_only():
    seen = []

    def model(x):
        seen.append(float(x[0]))
        return math.floor(x[0] + 0.4)

    look(model, [0.3], gradient=[0.0], bounds=[(0.25, 0.5)])

    assert min(seen) >= 0.25
    assert max(seen) <= 0.5


def test_a_jump_at_the_point_is_told():
    report = look(lambda x: x[0] + (1.0 if x[0] > 2.0 else 0.0), [2.0], gradient=[1.0])

    assert report.verdict == Verdict.UNDECIDED
    assert [str(f.code) for f in report.findings] == ["jump"]


def test_a_difference_that_honest_rounding_may_leave_is_told_as_such():
    report = look(lambda x: 3.0 + 1e-6 * x[0], [0.55], gradient=[1.00000003e-6])

    assert report.verdict == Verdict.UNDECIDED
    assert "honest code" in report.entries.reason[0]


def test_zero_for_a_variable_that_is_not_used_is_confirmed():
    assert verdicts(lambda x: x[0] ** 2, gradient=[0.6, 0.0]) == ["confirmed", "confirmed"]


@pytest.mark.parametrize("offset", [0.0, 1.0, 1e6])
def test_a_gradient_of_zero_at_an_optimum_is_confirmed(offset):
    report = look(lambda x: offset + (x[0] - 1.0) ** 2 + 3 * (x[1] + 2.0) ** 4, [1.0, -2.0], gradient=[0.0, 0.0])

    assert report.verdict == Verdict.CONFIRMED


def test_a_constant_has_the_derivative_zero():
    assert look(lambda x: 7.0, gradient=[0.0, 0.0]).verdict == Verdict.CONFIRMED


def test_a_constant_has_no_other_derivative():
    assert look(lambda x: 7.0, gradient=[1e-6, 0.0]).verdict == Verdict.REFUTED


@pytest.mark.parametrize(("error", "expected"), [(1e-9, "confirmed"), (1e-7, "refuted")])
def test_the_default_tolerance_is_a_hundred_millionth(error, expected):
    right = drag_gradient(X)

    assert verdicts(gradient=[right[0] * (1 + error), right[1]])[0] == expected


def test_a_relative_tolerance_is_taken_as_given():
    right = drag_gradient(X)

    assert verdicts(gradient=[right[0] * 1.001, right[1]], rel_tol=0.01)[0] == "confirmed"


def test_an_absolute_tolerance_is_taken_as_given():
    right = drag_gradient(X)

    assert verdicts(gradient=[right[0] + 0.005, right[1]], abs_tol=0.01)[0] == "confirmed"


def test_a_model_in_single_precision_is_judged_to_a_thousandth():
    def single(x):
        return np.float32(drag(x))

    right = drag_gradient(X)
    assert look(single, gradient=right).verdict == Verdict.CONFIRMED
    assert look(single, gradient=[right[0] * 1.01, right[1]]).verdict == Verdict.REFUTED


def test_a_claim_about_rounded_values_is_undecided_and_tells_its_digits():
    report = look(lambda x: float(f"{drag(x):.5e}"), gradient=drag_gradient)

    assert report.verdict == Verdict.UNDECIDED
    assert np.all(report.entries.digits > 2)
    assert all(report.entries.reason)


def test_variables_of_very_different_size_are_each_checked_on_their_own_scale():
    def model(x):
        return math.sin(x[0] * 1e9) + math.cos(x[1] * 1e-9)

    at = [2e-9, 0.7e9]
    gradient = [1e9 * math.cos(2.0), -1e-9 * math.sin(0.7)]
    assert verdicts(model, at, gradient=gradient) == ["confirmed", "confirmed"]
    assert verdicts(model, at, gradient=[gradient[0], 1.001 * gradient[1]]) == ["confirmed", "refuted"]


def test_a_budget_that_is_too_small_leaves_entries_undecided_and_says_so():
    report = look(gradient=drag_gradient, budget=8)

    assert report.verdict == Verdict.UNDECIDED
    assert report.entries.reason[1] == "the budget was spent"


def test_the_budget_is_never_exceeded():
    calls = []

    def counted(x):
        calls.append(1)
        return drag(x)

    look(counted, gradient=wrong_gradient, budget=30)

    assert len(calls) <= 30


def test_a_right_smooth_claim_costs_four_evaluations_a_variable_and_three_for_all():
    """The three: the value at the point, and a pair close to it along a direction that moves all variables."""
    assert look(gradient=drag_gradient).evaluations == 4 * 2 + 3


@pytest.mark.parametrize("witness", ["differences", "complex step", ["differences", "complex step"]])
def test_the_witnesses_can_be_chosen(witness):
    def analytic(x):
        return np.exp(x[0]) * x[1] ** 2

    assert look(analytic, gradient=drag_gradient, witnesses=witness).verdict == Verdict.CONFIRMED
    assert look(analytic, gradient=wrong_gradient, witnesses=witness).verdict == Verdict.REFUTED


def test_a_model_that_writes_into_its_input_is_told():
    def careless(x):
        value = drag(x)
        x[0] = 0.0
        return value

    report = look(careless, gradient=drag_gradient)

    assert report.verdict == Verdict.CONFIRMED
    assert [f.code for f in report.findings] == ["mutates-input"]


# --- what was changed on the way to the model ------------------------------------------------------------------------


@pytest.mark.parametrize("at", [[2, 3], np.array([2, 3]), (2, 3)])
def test_integers_become_floats_and_the_report_says_so(at):
    report = look(lambda x: x[0] * x[1], at, gradient=[3.0, 2.0])

    assert report.verdict == Verdict.CONFIRMED
    assert any("integers" in notice for notice in report.notices)


def test_single_precision_becomes_double_and_the_report_says_so():
    report = look(at=np.array(X, dtype=np.float32), gradient=drag_gradient)

    assert report.verdict == Verdict.CONFIRMED
    assert any("float32" in notice for notice in report.notices)


# --- every mistake of the caller is one clear error ------------------------------------------------------------------


def refused(words, function=drag, at=X, error=UsageError, **options):
    """`check` refuses with these words, and with an error that is a ValueError as well."""
    if not options.keys() & {"gradient", "jacobian"}:
        options["gradient"] = drag_gradient
    with pytest.raises(error, match=words) as told:
        gradcheck.check(function, at, **options)
    assert isinstance(told.value, ValueError)
    return told.value


@pytest.mark.parametrize("model", [None, 3.0, "drag", [1.0]])
def test_a_model_that_cannot_be_called(model):
    refused("cannot be called; pass the function itself", function=model)


def test_a_model_with_other_arguments():
    refused(r"two\(a, b\).* cannot be called with `at`.*gradcheck.args", function=two)


def two(a, b):
    return a * b


def test_a_model_that_returns_none():
    refused("returned None; does it lack a return statement", function=lambda x: None)


def test_a_model_that_returns_text():
    refused("a number or an array is needed", function=lambda x: "12.5")


def test_a_model_that_returns_complex_numbers():
    refused("returned complex numbers", function=lambda x: 1j * x[0])


def test_a_model_that_returns_parts_of_unequal_shape():
    refused("parts of unequal shape", function=lambda x: [1.0, [2.0, 3.0]])


def test_a_model_that_changes_its_shape():
    refused("the same shape everywhere", function=lambda x: np.ones(1 if x[0] == 0.3 else 2))


def test_a_model_of_several_outputs_with_a_gradient():
    refused("2 outputs.*jacobian=", function=lambda x: np.array([x[0], x[1]]), error=DerivativeShapeError)


def test_a_gradient_of_the_wrong_length():
    refused(r"shape \(3,\), but x has shape \(2,\)", gradient=[1.0, 2.0, 3.0], error=DerivativeShapeError)


def test_a_jacobian_that_lies_on_its_side():
    error = refused(
        "its transpose would fit",
        function=lambda x: np.array([x[0], x[1], x[0] * x[1]]),
        jacobian=np.ones((2, 3)),
        error=DerivativeShapeError,
    )

    assert (error.expected, error.found) == ((3, 2), (2, 3))


@pytest.mark.parametrize(
    "claim", [lambda x: None, lambda x: "steep", lambda x: np.ones(2) * 1j, lambda x: [1.0, [2.0]]]
)
def test_a_claim_that_is_no_array_of_real_numbers(claim):
    refused("the gradient claim", gradient=claim)


@pytest.mark.parametrize(
    ("at", "words"),
    [
        ([], "no real number"),
        ([0.3, math.nan], r"nan at x\[1\]"),
        ([0.3, math.inf], r"inf at x\[1\]"),
        ("0.3", "numbers are needed"),
        (None, "the point is missing"),
        ([0.3, 1j], "complex"),
        (gradcheck.points([0.3, 1.2], [0.3, math.nan]), "nan"),
    ],
    ids=["empty", "NaN", "infinite", "text", "None", "complex", "NaN in one of several"],
)
def test_a_point_that_is_no_point(at, words):
    refused(words, at=at)


def test_a_point_outside_the_bounds():
    refused(r"entry 1 of the point is 1.2, outside its bounds \[0, 1\]", bounds=[(0, 1), (0, 1)])


def test_names_of_another_number():
    refused("names has 1 entry but there are 2 variables", names=["span"])


@pytest.mark.parametrize(
    ("option", "value", "words"),
    [
        ("on_refuted", "warn", "on_refuted is 'warn'; choose 'raise' or 'return'"),
        ("on_undecided", "ignore", "on_undecided is 'ignore'; choose 'warn' or 'raise' or 'pass'"),
        ("witnesses", "oracle", "witnesses is 'oracle'; choose among 'differences', 'complex step'"),
        ("witnesses", [], "choose among"),
        ("rel_tol", -1e-8, "rel_tol is -1e-08; give a finite number >= 0"),
        ("rel_tol", math.nan, "rel_tol is nan"),
        ("abs_tol", math.inf, "abs_tol is inf"),
        ("rel_tol", "tight", "rel_tol is 'tight'"),
        ("budget", 0, "budget is 0"),
        ("time_limit", "soon", "time_limit is 'soon'"),
        ("typical", -1.0, "typical"),
        ("typical", "large", "typical is 'large'; give a number > 0"),
        ("seed", "a", "seed is 'a'; give a whole number >= 0"),
        ("gradient", "calculus", "gradient='calculus' names no derivative source"),
    ],
)
def test_an_option_that_makes_no_sense(option, value, words):
    refused(words, **{option: value})


def test_an_option_that_does_not_exist():
    with pytest.raises(TypeError, match="tolerance"):
        gradcheck.check(drag, X, gradient=drag_gradient, tolerance=1e-8)


def test_a_wrt_without_several_arguments():
    refused("wrt", wrt="mass", at=[0.3, 1.2])


def test_no_claim_at_all():
    with pytest.raises(UsageError, match="none was given, so there is nothing to check"):
        gradcheck.check(drag, X)


@pytest.mark.parametrize("position", [2, 3])
def test_claims_are_given_by_keyword_only(position):
    with pytest.raises(TypeError, match="positional"):
        gradcheck.check(drag, X, *[drag_gradient] * (position - 1))


# --- a model that cannot be evaluated --------------------------------------------------------------------------------


def test_a_model_that_raises_at_the_point():
    def broken(x):
        raise ValueError("negative thickness")

    with pytest.raises(ModelFailure, match="negative thickness"):
        gradcheck.check(broken, X, gradient=[0.0, 0.0])


def test_a_model_that_is_nan_at_the_point():
    with pytest.raises(ModelFailure, match="nan"):
        gradcheck.check(lambda x: math.nan, X, gradient=[0.0, 0.0])


def test_what_comes_back_is_a_report():
    assert isinstance(gradcheck.check(drag, X, gradient=drag_gradient), CheckReport)


@pytest.mark.parametrize("claimed", [1.0, 5.0, math.inf])
def test_the_verdict_on_every_entry_is_a_verdict(claimed):
    report = gradcheck.check(
        lambda x: abs(x[0]) + x[1],
        at=[0.0, 2.0],
        gradient=lambda x: [0.5, claimed],
        on_refuted="return",
        on_undecided="pass",
    )
    assert report.entries.verdict[0] == "undecided"
    assert all(type(verdict) is Verdict for verdict in report.entries.verdict)


def test_a_claim_that_is_the_slope_of_a_ripple_close_to_the_point_is_not_refuted():
    random = np.random.default_rng(0)
    weights, at = random.uniform(0.5, 2.0, 1001), random.normal(size=1001)

    def rippled(x):
        return float(weights @ np.sin(x) + 1e-6 * np.sin(1e5 * x[3]))

    def gradient(x):
        slope = weights * np.cos(x)
        slope[3] += 0.1 * np.cos(1e5 * x[3])
        return slope

    report = gradcheck.check(
        rippled, at=at, gradient=gradient, directions="all", on_refuted="return", on_undecided="pass"
    )

    assert report.verdict == "undecided"
    (place,) = [k for k, verdict in enumerate(report.entries.verdict) if verdict != "confirmed"]
    assert report.entries.name[place] == "x[3]"
    assert "very close to the point" in report.entries.reason[place]


@pytest.mark.parametrize(
    ("wrong", "meant"), [("grad", "gradient"), ("x0", "at"), ("rtol", "rel_tol"), ("kwargs", "gradcheck.args")]
)
def test_an_unknown_argument_is_answered_with_the_one_that_was_meant(wrong, meant):
    for verb in (gradcheck.check, gradcheck.estimate, gradcheck.audit, gradcheck.scan):
        if verb is gradcheck.check or meant in ("at", "gradcheck.args"):
            with pytest.raises(gradcheck.UsageError, match=f"'{wrong}': did you mean .*{meant}") as caught:
                verb(lambda x: x[0], **{wrong: 1})
            assert isinstance(caught.value, TypeError)


def test_a_claim_that_raises_is_told_first_and_is_the_cause():
    def broken(x):
        raise ValueError("no table")

    with pytest.raises(
        gradcheck.DerivativeMismatch, match="refuted: the gradient raised ValueError: no table"
    ) as found:
        gradcheck.check(lambda x: x[0] ** 2, at=[1.0], gradient=broken)

    assert isinstance(found.value.__cause__, ValueError)
    assert "none of the usual ones" not in str(found.value)


def test_rows_of_a_table_that_were_meant_as_points_are_suspected_in_the_shape_error():
    with pytest.raises(gradcheck.DerivativeShapeError, match=r"gradcheck\.points"):
        gradcheck.check(lambda x: x[0] * x[1], at=[[1.0, 2.0], [5.0, 2.0]], gradient=lambda x: x)


def test_where_all_derivatives_are_zero_another_point_is_asked_for():
    def bowl(x):
        return x[0] ** 2 + x[1] ** 2

    def slopes(x):
        return [2 * x[0], 2 * x[1]]

    at_rest = gradcheck.check(bowl, at=[0.0, 0.0], gradient=slopes)
    with_another = gradcheck.check(bowl, at=gradcheck.points([0.0, 0.0], [1.0, 2.0]), gradient=slopes)

    assert any("all derivatives are zero" in notice for notice in at_rest.notices)
    assert not any("all derivatives are zero" in notice for notice in with_another.notices)


def test_what_is_raised_where_nothing_could_be_confirmed_says_so_first():
    with pytest.raises(
        gradcheck.DerivativeMismatch, match=r"^gradient of .*: nothing could be confirmed \(on_undecided"
    ):
        gradcheck.check(lambda x: abs(x[0]), at=[0.0], gradient=[0.5])


def test_an_asymmetric_hessian_is_told_below_the_table_with_both_entries():
    claimed = [[2.0, 0.5], [0.0, 2.0]]
    with pytest.raises(gradcheck.DerivativeMismatch) as found:
        gradcheck.check(lambda x: x[0] ** 2 + x[1] ** 2, at=[1.0, 2.0], hessian=claimed)

    assert "asymmetric, H[x[0], x[1]] is 0.5, H[x[1], x[0]] is 0." in str(found.value)
