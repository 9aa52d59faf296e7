"""Models that bring their own point, and problems as a whole."""

import numpy as np
import pytest

import gradcheck
from gradcheck.checking import check_described
from gradcheck.records.verdict import Verdict


@gradcheck.model(at=[2.0, 3.0], gradient=lambda x: [x[1], x[0]], names=["width", "height"])
def area(x):
    return x[0] * x[1]


def wrong_model():
    """Made when asked for: at the top of a test module it would be collected as a test itself, and fail."""

    @gradcheck.model(at=gradcheck.points([2.0, 3.0], [1.0, 5.0]), gradient=lambda x: [x[1], -x[0]])
    def wrong(x):
        return x[0] * x[1]

    return wrong


def spring(x):
    return 0.5 * x[0] * x[1] ** 2


PROBLEM = gradcheck.Problem(
    variables=[gradcheck.Variable("stiffness", 3.0), gradcheck.Variable("travel", 0.2)],
    objective=gradcheck.Function(spring, gradient=lambda x: [0.5 * x[1] ** 2, x[0] * x[1]]),
    constraints={"force": gradcheck.Function(lambda x: x[0] * x[1], gradient=lambda x: [x[1], 2 * x[0]], upper=1.0)},
)


def test_a_decorated_model_is_checked_where_it_says():
    report = gradcheck.check(area)

    assert report.verdict == Verdict.CONFIRMED
    assert report.entries.name == ("width", "height")


def test_what_is_given_to_check_goes_before_what_the_model_says():
    report = gradcheck.check(area, jacobian=[[3.0, 2.0]], names=["a", "b"])

    assert (report.kind, report.entries.name) == ("jacobian", ("a", "b"))


def test_a_model_that_says_nothing_needs_a_point():
    with pytest.raises(gradcheck.UsageError, match="the point is missing"):
        gradcheck.check(spring, gradient=[0.0, 0.0])


def test_a_problem_is_no_function_and_the_error_says_where_it_goes():
    with pytest.raises(gradcheck.UsageError, match="audit\\(problem\\)"):
        gradcheck.check(PROBLEM)


def test_all_claims_of_a_problem_are_looked_at_and_no_verdict_raises():
    reports = check_described(PROBLEM)

    assert [(r.function, r.verdict) for r in reports] == [
        ("objective", Verdict.CONFIRMED),
        ("force", Verdict.REFUTED),
    ]


def test_a_problem_without_claims_has_nothing_to_check():
    bare = gradcheck.Problem(variables=PROBLEM.variables, objective=spring)

    with pytest.raises(gradcheck.UsageError, match="claims no derivative"):
        check_described(bare)


def test_options_that_a_problem_describes_itself_are_refused():
    with pytest.raises(gradcheck.UsageError, match="at cannot be set for a Problem"):
        check_described(PROBLEM, at=[1.0, 2.0])


def test_all_points_of_a_decorated_model_are_in_one_report_that_does_not_raise():
    (report,) = check_described(wrong_model())

    assert report.verdict == Verdict.REFUTED
    assert "x[1] @ point 1" in report.entries.name


def test_a_function_is_described_by_the_options_beside_it():
    (report,) = check_described(spring, at=[3.0, 0.2], gradient=[0.02, 0.6])

    assert report.verdict == Verdict.CONFIRMED


class Plate:
    def __init__(self, thickness):
        self.thickness = thickness

    def __call__(self, x):
        return self.thickness * x[0] ** 2

    def weight(self, x):
        return self.thickness * x[0]


@pytest.mark.parametrize(
    ("model", "claim"), [(Plate(2.0), [4.0]), (Plate(2.0).weight, [2.0])], ids=["instance", "bound method"]
)
def test_instances_and_bound_methods_are_models(model, claim):
    assert gradcheck.check(model, at=[1.0], gradient=claim).verdict == Verdict.CONFIRMED


def test_a_class_is_no_model():
    with pytest.raises(gradcheck.UsageError, match="is the class Plate; pass an instance"):
        gradcheck.check(Plate, at=[1.0], gradient=[2.0])


def test_a_method_without_its_instance_is_no_model():
    with pytest.raises(gradcheck.UsageError, match=r"pass the method of an instance: instance\.weight"):
        gradcheck.check(Plate.weight, at=[1.0], gradient=[2.0])


def test_a_claim_in_single_precision_is_judged_by_it_and_that_is_told():
    report = gradcheck.check(spring, at=[3.0, 0.2], gradient=np.array([0.02, 0.6], dtype=np.float32))

    assert report.verdict == Verdict.CONFIRMED
    assert any("single precision" in notice for notice in report.notices)
