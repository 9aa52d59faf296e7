"""What an audit says of the start point, and of variables that do nothing there."""

import gradcheck


def problem(start=(0.0, 2.0), **limits):
    return gradcheck.Problem(
        variables=[
            gradcheck.Variable("gap", start[0], lower=-1.0, upper=1.0),
            gradcheck.Variable("stiffness", start[1], lower=0.5, upper=4.0),
            gradcheck.Variable("colour", 1.0, lower=0.0, upper=2.0),
        ],
        objective=lambda x: 0.5 * x[1] * x[0] ** 2 + x[0],
        constraints={"force": gradcheck.Function(lambda x: x[1] * x[0], **limits)},
    )


def dead(report):
    return {f.variable: str(f.severity) for f in report.findings if f.code == "dead-variable"}


def test_a_variable_that_only_rests_at_the_start_is_not_called_dead():
    report = gradcheck.audit(problem(upper=1.0))

    assert dead(report) == {"stiffness": "remark", "colour": "hazard"}


def test_away_from_rest_only_the_unused_variable_is_dead():
    assert dead(gradcheck.audit(problem(start=(0.3, 2.0), upper=1.0))) == {"colour": "hazard"}


def test_the_values_at_the_start_are_told():
    assert any("objective = 0" in notice for notice in gradcheck.audit(problem(upper=1.0)).notices)


def test_a_start_that_breaks_a_constraint_is_told():
    notices = gradcheck.audit(problem(start=(0.9, 2.0), upper=1.0)).notices

    assert any(notice.startswith("the start point breaks force: 1.8, where upper 1 is asked") for notice in notices)


def test_a_constraint_that_limits_nothing_is_told():
    assert any("has no limit" in notice for notice in gradcheck.audit(problem()).notices)


def test_progress_begins_with_a_forecast_and_counts_what_was_spent():
    told = []

    report = gradcheck.audit(problem(upper=1.0), progress=told.append)

    assert told[0].startswith("about ")
    assert "a budget makes it shorter" in told[0]
    assert all("(so far " in line for line in told[1:])
    assert len(told) > 5
    assert report.complete
