"""Problems as users describe them, and the one form in which the verbs see them."""

import math

import numpy as np
import pytest

from gradcheck import Function, Output, Problem, UsageError, Variable, model, points
from gradcheck.problem.subject import subject_of_problem, subjects_of_function
from tests.hearing import session_of

SPAN = Variable("span", 1.2, lower=0.5, upper=3.0, unit="m", typical=1.0)
PLIES = Variable("plies", 4, lower=1, upper=12, integer=True)


def cost(x):
    return x[0] ** 2 + x[1]


def described(**changes):
    parts = {"variables": [SPAN, PLIES], "objective": Function(cost)} | changes
    return Problem(**parts)


# --- variables -------------------------------------------------------------------------------------------------------


def test_a_variable_without_bounds_is_unbounded():
    variable = Variable("span", 1.2)

    assert (variable.lower, variable.upper) == (-math.inf, math.inf)


def test_a_whole_start_value_becomes_a_float():
    assert type(PLIES.value) is float


@pytest.mark.parametrize("name", ["", None, 3])
def test_a_variable_needs_a_name(name):
    with pytest.raises(UsageError, match="name must be a non-empty string"):
        Variable(name, 1.0)


@pytest.mark.parametrize("value", [math.nan, math.inf])
def test_a_start_value_must_be_finite(value):
    with pytest.raises(UsageError, match=f"'span': the start value is {value}; give a finite number"):
        Variable("span", value)


def test_a_start_value_must_be_a_number():
    with pytest.raises(UsageError, match="'span': value is 'long'; a real number is needed"):
        Variable("span", "long")


def test_a_start_value_outside_its_bounds_is_refused_with_both():
    with pytest.raises(UsageError, match=r"start value 5 lies outside its bounds \[0.5, 3\]; move the start or widen"):
        Variable("span", 5.0, lower=0.5, upper=3.0)


def test_a_bound_of_nan_is_refused():
    with pytest.raises(UsageError, match="span"):
        Variable("span", 1.2, upper=math.nan)


@pytest.mark.parametrize("side", ["lower", "upper"])
def test_a_bound_that_is_nan_is_told_as_such(side):
    with pytest.raises(UsageError, match=f"'span': {side} is NaN; leave it out where there is no bound"):
        Variable("span", 1.2, **{side: math.nan})


@pytest.mark.parametrize("typical", [0.0, -1.0, math.nan, math.inf])
def test_a_typical_size_must_be_finite_and_positive(typical):
    with pytest.raises(UsageError, match=r"'span': typical is .*; give a finite size > 0"):
        Variable("span", 1.2, typical=typical)


# --- problems --------------------------------------------------------------------------------------------------------


def test_a_problem_needs_a_variable():
    with pytest.raises(UsageError, match="at least one Variable"):
        described(variables=[])


def test_what_is_no_variable_is_refused_with_the_mend():
    with pytest.raises(UsageError, match=r"each must be a gradcheck.Variable\(name, value, ...\)"):
        described(variables=[("span", 1.2)])


def test_a_variable_name_may_stand_only_once():
    with pytest.raises(UsageError, match="more than once: span; names must differ"):
        described(variables=[SPAN, SPAN])


def test_a_plain_callable_is_an_objective_without_claims():
    assert described(objective=cost).objective.gradient is None


def test_what_cannot_be_called_is_no_function():
    with pytest.raises(UsageError, match=r"something that can be called, not 3.0"):
        Function(3.0)


def test_what_cannot_be_called_is_no_constraint():
    with pytest.raises(UsageError, match=r"constraint 'stress' is 3.0; it must be a callable"):
        described(constraints={"stress": 3.0})


def test_with_one_run_every_function_is_an_output():
    with pytest.raises(UsageError, match=r"with model=..., each output is named by gradcheck.Output\(key\)"):
        described(model=cost)


def test_without_a_run_an_output_leads_nowhere():
    with pytest.raises(UsageError, match=r"objective is .*; it must be a callable"):
        described(objective=Output("cost"))


def test_a_run_must_be_callable():
    with pytest.raises(UsageError, match=r"something that can be called, not 3.0"):
        described(model=3.0, objective=Output("cost"))


def test_a_constraint_must_not_take_the_name_of_the_objective():
    with pytest.raises(UsageError, match="'objective'; that name is taken"):
        subject_of_problem(described(constraints={"objective": Function(cost)}))


# --- what the verbs see ----------------------------------------------------------------------------------------------


def test_the_subject_of_a_problem_carries_names_units_bounds_sizes_and_integers():
    subject = subject_of_problem(described())

    assert subject.names == ("span", "plies")
    assert subject.units == ("m", "")
    assert subject.start.tolist() == [1.2, 4.0]
    assert subject.domain.lower.tolist() == [0.5, 1.0]
    assert subject.domain.upper.tolist() == [3.0, 12.0]
    assert subject.domain.scale.tolist() == [1.0, 4.0]
    assert subject.domain.integer.tolist() == [False, True]


def test_the_functions_of_a_problem_are_its_objective_and_its_constraints_by_name():
    problem = described(constraints={"stress": Function(cost, jacobian=np.ones((1, 2)), upper=0.0)})
    subject = subject_of_problem(problem)

    assert list(subject.targets) == ["objective", "stress"]
    assert list(subject.targets["stress"].claims) == ["jacobian"]
    assert subject.targets["stress"].limits == {"upper": 0.0}


def test_all_outputs_of_one_run_share_one_callable():
    problem = described(
        model=lambda x: {"cost": 1.0, "s": 2.0}, objective=Output("cost"), constraints={"s": Output("s")}
    )
    subject = subject_of_problem(problem)

    assert len(subject.runs) == 1
    assert {target.run for target in subject.targets.values()} == set(subject.runs)


def test_a_function_gives_one_subject_a_point():
    subjects = subjects_of_function(cost, points([1.0, 2.0], [3.0, 4.0]), claims={})

    assert [subject.start.tolist() for subject in subjects] == [[1.0, 2.0], [3.0, 4.0]]


def test_a_lambda_is_called_the_model():
    assert subjects_of_function(lambda x: x, 1.0, claims={})[0].name == "model"


def test_the_start_point_of_a_subject_cannot_be_changed():
    with pytest.raises(ValueError, match="read-only"):
        session_of(cost, [1.0, 2.0]).subject.start[0] = 5.0


# --- the decorator ---------------------------------------------------------------------------------------------------


def test_a_described_model_is_still_the_same_function():
    assert model(at=[1.0, 2.0])(cost) is cost
    assert cost(np.array([1.0, 2.0])) == 3.0


def test_only_functions_can_be_described():
    with pytest.raises(UsageError, match=r"decorates a function, not 3.0"):
        model(at=[1.0])(3.0)
