"""Mistakes that only more points or more calls show: stale points, regions, answers that change."""

import math
import re

import numpy as np

import gradcheck
from gradcheck.claims.closedness import derivative_of_something
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.evaluation.protocol import Reply


def volume(x):
    return x[0] ** 2 * x[1] + math.sin(x[2]) * x[0]


def volume_gradient(x):
    return np.array([2 * x[0] * x[1] + math.sin(x[2]), x[0] ** 2, math.cos(x[2]) * x[0]])


POINTS = ([0.7, 1.3, 0.37], [1.1, 0.4, 0.81], [0.52, 2.2, 1.4], [1.7, 0.9, 0.23])


def checked(function, at, gradient):
    return gradcheck.check(function, at, gradient=gradient, on_refuted="return", on_undecided="pass")


def codes(report):
    return [str(diagnosis.code) for diagnosis in report.diagnoses]


# --- an earlier point -------------------------------------------------------------------------------------------------


def test_a_claim_that_lags_a_point_behind_is_told_as_such():
    places = {tuple(p): max(k - 1, 0) for k, p in enumerate(POINTS)}
    report = checked(volume, gradcheck.points(*POINTS), lambda x: volume_gradient(POINTS[places[tuple(x)]]))

    assert codes(report) == ["stale-point"]
    assert "at points 1, 2 and 3 the claim is the derivative of the point before" in report.diagnoses[0].text
    assert "x[0] @ point 1" in report.diagnoses[0].entries
    assert not any("point 0" in name for name in report.diagnoses[0].entries)


def test_a_claim_of_another_of_the_points_names_it():
    places = {tuple(p): [0, 1, 0, 3][k] for k, p in enumerate(POINTS)}
    report = checked(volume, gradcheck.points(*POINTS), lambda x: volume_gradient(POINTS[places[tuple(x)]]))

    assert codes(report) == ["stale-point"]
    assert "at point 2 the claim is the derivative at point 0" in report.diagnoses[0].text


# --- changing answers -------------------------------------------------------------------------------------------------


class Workspace:
    """A model that leaves its x behind for a derivative that does not look at its own."""

    def __init__(self):
        self.x = None

    def model(self, x):
        self.x = np.array(x, dtype=complex).real
        return volume(np.array(x, dtype=complex).real) if np.iscomplexobj(x) else volume(x)

    def gradient(self, x):
        return volume_gradient(self.x)


def test_a_claim_that_uses_what_the_last_evaluation_left_is_refuted_though_it_was_right_at_first():
    workspace = Workspace()
    report = checked(workspace.model, POINTS[0], workspace.gradient)

    assert (report.verdict, codes(report)) == ("refuted", ["stale-point"])
    assert "right before and wrong after the model was evaluated elsewhere" in report.diagnoses[0].text
    first, later = re.findall(r"claimed (\S+) at first and (\S+) later", report.diagnoses[0].text)[0]
    assert first != later


def test_a_claim_that_returns_what_an_earlier_call_worked_out_is_told_as_such():
    kept = [volume_gradient(POINTS[1])]

    def behind(x):
        kept.append(volume_gradient(x))
        return kept[-2]

    report = checked(volume, POINTS[0], behind)
    assert codes(report) == ["stale-point"]
    assert "wrong in the first call and right in the next" in report.diagnoses[0].text


def test_a_claim_with_random_numbers_is_told_to_change_at_each_call():
    random = np.random.default_rng(3)
    report = checked(volume, POINTS[0], lambda x: volume_gradient(x) * (1 + 0.01 * random.standard_normal(3)))

    assert (report.verdict, codes(report)) == ("refuted", ["unknown"])
    assert "another number at each call; look for unseeded random numbers" in report.diagnoses[0].text


def test_answers_that_part_by_rounding_only_change_nothing():
    random = np.random.default_rng(3)
    report = checked(volume, POINTS[0], lambda x: volume_gradient(x) * (1 + 1e-15 * random.standard_normal(3)))

    assert (report.verdict, report.diagnoses) == ("confirmed", ())


def test_a_claim_that_fails_when_it_is_asked_again_is_judged_by_its_first_answer():
    calls = []

    def once(x):
        calls.append(1)
        if len(calls) > 1:
            raise RuntimeError("only once")
        return volume_gradient(x)

    assert checked(volume, POINTS[0], once).verdict == "confirmed"


def test_a_claim_is_called_twice_and_no_model_evaluation_is_spent_on_that():
    calls = []

    def counted(x):
        calls.append(tuple(x))
        return volume_gradient(x)

    by_call = checked(volume, POINTS[0], counted)
    by_array = checked(volume, POINTS[0], volume_gradient(POINTS[0]))
    assert calls == [tuple(POINTS[0])] * 2
    assert by_call.evaluations == by_array.evaluations


# --- regions ----------------------------------------------------------------------------------------------------------


def spring(x):
    return 0.5 * x[0] * x[1] ** 2 + (40.0 * (x[1] - 0.5) ** 2 if x[1] > 0.5 else 0.0)


def soft(x):
    return np.array([0.5 * x[1] ** 2, x[0] * x[1]])


STIFFNESS = (3.1, 2.2, 2.8, 3.4)


def test_a_claim_that_is_right_below_a_threshold_names_the_variable_and_both_sides():
    at = gradcheck.points(*([k, s] for k, s in zip(STIFFNESS, (0.31, 0.41, 0.58, 0.72), strict=True)))
    report = checked(spring, at, soft)

    assert codes(report) == ["region-only"]
    assert "right at points 0 and 1, wrong at points 2 and 3" in report.diagnoses[0].text
    assert "wrong where x[1] ≥ 0.58, right where x[1] ≤ 0.41" in report.diagnoses[0].text
    assert report.diagnoses[0].entries == ("x[1] @ point 2", "x[1] @ point 3")


def test_with_one_point_on_a_side_no_variable_is_said_to_tell_them_apart():
    report = checked(spring, gradcheck.points([3.1, 0.31], [2.2, 0.58]), soft)

    assert codes(report) == ["region-only"]
    assert "where" not in report.diagnoses[0].text


def test_a_claim_that_is_wrong_everywhere_in_the_same_way_is_one_story():
    report = checked(volume, gradcheck.points(*POINTS), lambda x: -volume_gradient(x))

    assert codes(report) == ["sign-flipped"]
    assert report.diagnoses[0].text.startswith("At points 0, 1, 2 and 3: all 3 entries")
    assert len(report.diagnoses[0].entries) == 12


def test_a_true_zero_at_one_point_makes_no_region():
    def square(x):
        return (x[0] - 1.0) ** 2 + x[1]

    report = checked(square, gradcheck.points([1.0, 2.0], [2.5, 1.1]), lambda x: [4.0 * (x[0] - 1.0), 1.0])
    assert codes(report) == ["constant-factor"]


# --- symmetry of the claim's own derivatives --------------------------------------------------------------------------


def asked(claim, x, columns, **bounds):
    """What `derivative_of_something` says of a gradient claim."""
    x = np.array(x, dtype=float)

    def gate(requests):
        values = [np.asarray(claim(request.base), dtype=float)[None, None, :] for request in requests]
        return [Reply(values=v, status=np.zeros((1, 1), np.int8), spent=0) for v in values]

    limits = {"lower": np.full(x.size, -np.inf), "upper": np.full(x.size, np.inf)} | bounds
    inquiry = derivative_of_something(x, np.array(columns), 0, np.abs(x), limits["lower"], limits["upper"], "gradient")
    return conduct_one(inquiry, gate)


def test_the_derivative_of_a_function_that_lacks_a_term_is_symmetric():
    assert asked(volume_gradient, POINTS[0], [0, 1, 2]) is True


def test_entries_with_slips_of_their_own_are_not_symmetric():
    assert asked(lambda x: volume_gradient(x) * np.array([1.0, 1.7, 1.0]), POINTS[0], [0, 1, 2]) is False


def test_variables_that_do_not_interact_say_nothing():
    assert asked(lambda x: 3 * x**2, POINTS[0], [0, 1, 2]) is None


def test_a_claim_of_constants_says_nothing():
    assert asked(lambda x: np.array([0.3, 0.7, 0.1]), POINTS[0], [0, 1, 2]) is None


def test_the_claim_is_never_called_outside_the_bounds():
    assert asked(volume_gradient, POINTS[0], [0, 1, 2], upper=np.array(POINTS[0])) is None


def test_a_term_left_out_is_named_from_the_claim_itself():
    def energy(x):
        return x[0] * x[1] ** 2 * x[2] + math.exp(0.3 * x[0] * x[2] * x[1])

    def lacking(x):
        return [x[1] ** 2 * x[2], 2 * x[0] * x[1] * x[2], x[0] * x[1] ** 2]

    report = checked(energy, POINTS[0], lacking)
    assert set(codes(report)) == {"missing-path"}
    assert {name for diagnosis in report.diagnoses for name in diagnosis.entries} == {"x[0]", "x[1]", "x[2]"}


def test_two_slips_are_not_taken_for_a_term_left_out():
    def energy(x):
        return x[0] * x[1] ** 2 * x[2] + math.exp(0.3 * x[0] * x[2] * x[1])

    def slipped(x):
        grown = 0.3 * math.exp(0.3 * x[0] * x[2] * x[1])
        return [
            x[1] ** 2 * x[2] + grown * x[1],
            2 * x[0] * x[1] * x[2] + grown * x[0] ** 2,
            x[0] * x[1] ** 2 + grown * x[0] * x[1],
        ]

    assert codes(checked(energy, POINTS[0], slipped)) == ["unknown"]
