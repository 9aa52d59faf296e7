"""What is said when evaluations or time run out: nothing that was not seen."""

import numpy as np
import pytest

import gradcheck
from gradcheck.claims.desk import SUSPECT
from gradcheck.records.verdict import Verdict

AT = [0.5, 0.7, 0.3, 1.1, 0.9]


def model(x):
    return (x[0] - 1) ** 2 + x[0] * x[1] ** 3 + np.sin(x[2]) + x[3] * x[4] ** 2


def gradient(x):
    return np.array([2 * (x[0] - 1) + x[1] ** 3, 3 * x[0] * x[1] ** 2, np.cos(x[2]), x[4] ** 2, 2 * x[3] * x[4]])


def wrong(x):
    return gradient(x) * [1, 1, 1, 1, 0.5]


def test_a_budget_too_small_for_the_start_is_the_callers_mistake_and_not_the_models():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("a", 1.0)],
        objective=lambda x: x[0],
        constraints={"c": gradcheck.Function(lambda x: x[0], upper=2.0)},
    )
    with pytest.raises(gradcheck.UsageError, match="at least 2 evaluations are needed"):
        gradcheck.audit(problem, budget=1)


@pytest.mark.parametrize("budget", range(2, 100, 7))
def test_a_right_claim_is_never_refuted_for_want_of_evaluations(budget):
    report = gradcheck.check(model, at=AT, gradient=gradient, budget=budget, on_undecided="pass")

    assert Verdict.REFUTED not in report.entries.verdict
    assert report.evaluations <= budget


@pytest.mark.parametrize("budget", range(2, 100, 7))
def test_a_wrong_entry_is_never_confirmed_for_want_of_evaluations(budget):
    report = gradcheck.check(model, at=AT, gradient=wrong, budget=budget, on_undecided="pass", on_refuted="return")

    assert report.entries.verdict[4] != Verdict.CONFIRMED


def test_an_entry_whose_second_look_was_cut_off_is_suspect_and_blocks():
    needed = gradcheck.check(model, at=AT, gradient=wrong, on_refuted="return").evaluations
    found = [gradcheck.audit(model, at=AT, gradient=wrong, budget=budget) for budget in range(needed - 10, needed)]

    suspects = [report for report in found if SUSPECT in report.claims[0].entries.reason]
    assert suspects
    assert not any(report.ready for report in suspects)


@pytest.mark.parametrize("budget", [10, 40, 70])
def test_steps_and_scalings_that_were_not_measured_are_not_told(budget):
    report = gradcheck.audit(model, at=AT, gradient=gradient, budget=budget)

    assert not report.complete
    assert report.steps == ()
    assert report.scaling is None
    assert "steps" not in report.advice.snippet


def test_sources_that_did_not_speak_are_not_said_to_fail():
    report = gradcheck.audit(model, at=AT, gradient=gradient, budget=40)

    told = {witness.source: witness.reason for witness in report.witnesses}
    assert told["finite difference"] == told["complex step"] == "not looked at"
    assert [f.code for f in report.findings if f.code == "complex-unsafe"] == []


def test_an_interrupted_audit_gives_no_verdict_and_no_advice():
    calls = 0

    def slow(x):
        nonlocal calls
        calls += 1
        if calls > 60:
            raise KeyboardInterrupt
        return model(x)

    with pytest.raises(KeyboardInterrupt) as caught:
        gradcheck.audit(slow, at=AT, gradient=gradient)

    report = caught.value.found
    assert not report.ready
    assert not report.complete
    assert str(report).startswith("NO VERDICT: the audit of slow was interrupted")
    assert report.advice.solvers == ()
