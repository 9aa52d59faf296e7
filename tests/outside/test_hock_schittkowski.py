"""Objectives and constraints of Hock & Schittkowski at their starting points, most of them infeasible.

W. Hock, K. Schittkowski, "Test Examples for Nonlinear Programming Codes", LNEMS 187,
Springer (1981); formulas typed from memory, see ``tests/problem_sets/hock_schittkowski.py``.
"""

import numpy as np
import pytest

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, interval_of, places, report_on, verdicts
from tests.problems import HOCK_SCHITTKOWSKI, HOCK_SCHITTKOWSKI_CONSTRAINTS


def each(problems):
    cases = [pytest.param(problem, id=problem.name) for problem in problems]
    return pytest.mark.parametrize("problem", cases)


@each(HOCK_SCHITTKOWSKI)
def test_every_entry_of_the_right_gradient_is_confirmed(problem):
    assert report_on(problem.function, problem.x0, gradient=problem.gradient).verdict == CONFIRMED


@each(HOCK_SCHITTKOWSKI)
def test_the_published_gradient_at_the_starting_point_is_not_refuted(problem):
    assert report_on(problem.function, problem.x0, gradient=problem.gradient0).verdict != REFUTED


@each(HOCK_SCHITTKOWSKI_CONSTRAINTS)
def test_every_entry_of_the_right_constraint_jacobian_is_confirmed(problem):
    report = report_on(problem.function, problem.x0, jacobian=problem.jacobian)

    assert report.verdict == CONFIRMED
    assert len(report.entries) == problem.jacobian(problem.x0).size


@each(HOCK_SCHITTKOWSKI_CONSTRAINTS)
def test_the_published_constraint_jacobian_at_the_starting_point_is_confirmed(problem):
    assert report_on(problem.function, problem.x0, jacobian=problem.jacobian0).verdict == CONFIRMED


@each(HOCK_SCHITTKOWSKI_CONSTRAINTS)
def test_one_entry_with_the_wrong_sign_is_refuted_and_no_other(problem):
    wrong = np.array(problem.jacobian(problem.x0))
    place = tuple(np.argwhere(wrong != 0)[-1])
    wrong[place] *= -1

    words = verdicts(report_on(problem.function, problem.x0, jacobian=wrong))

    assert words[place] == REFUTED
    assert np.count_nonzero(words == CONFIRMED) == words.size - 1


def test_problem_71_is_judged_as_one_problem_although_its_start_violates_a_constraint():
    """x0 = (1, 5, 5, 1) gives 52 where 40 is required; HS71 has bounds 1 <= x <= 5, so that x0 sits on all four."""
    objective = next(problem for problem in HOCK_SCHITTKOWSKI if problem.name == "HS71")
    constraints = next(problem for problem in HOCK_SCHITTKOWSKI_CONSTRAINTS if problem.name == "HS71 constraints")
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable(f"x{i + 1}", x, lower=1.0, upper=5.0) for i, x in enumerate(objective.x0)],
        objective=gradcheck.Function(objective.function, gradient=objective.gradient),
        constraints={
            "sum of squares": gradcheck.Function(
                lambda x: constraints.function(x)[0], gradient=lambda x: constraints.jacobian(x)[0], equal=0.0
            ),
            "product": gradcheck.Function(
                lambda x: constraints.function(x)[1], gradient=lambda x: constraints.jacobian(x)[1], lower=0.0
            ),
        },
    )

    report = gradcheck.audit(problem)

    assert [claim.verdict for claim in report.claims] == [CONFIRMED] * 3
    assert report.ready


#: HS87, the electrical network: cost terms in steps of the price (formulas from memory, jumps by arithmetic).
def first_cost(x):
    return 30 * x if x < 300 else 31 * x


def second_cost(x):
    return (28 if x < 100 else 29 if x < 200 else 30) * x


@pytest.mark.parametrize(
    ("cost", "upper", "expected"),
    [(first_cost, 400.0, {300: (9000, 9300)}), (second_cost, 1000.0, {100: (2800, 2900), 200: (5800, 6000)})],
    ids=["first", "second"],
)
def test_the_prices_of_problem_87_make_its_cost_jump_at_the_published_breaks(cost, upper, expected):
    found = interval_of(cost, 0.0, upper).of_kind("jump")

    brackets = places(found, 0.0, upper)
    assert len(found) == len(expected)
    for jump, (lower, higher), (place, (before, after)) in zip(found, brackets, expected.items(), strict=True):
        assert lower - 1e-12 * upper <= place <= higher + 1e-12 * upper
        assert higher - lower <= 1e-10 * upper
        assert (jump.left, jump.right) == (pytest.approx(before, rel=1e-9), pytest.approx(after, rel=1e-9))
