"""The step-size curve as text with a small plot."""

import math

import numpy as np
import pytest

import gradcheck
from gradcheck.records.estimate import Scan
from gradcheck.report.scan_text import brief_scan, plot, scan_text
from tests.records import INF, NAN

STEPS = np.logspace(-14, 0, 43)
ERRORS = 1e-16 / STEPS + STEPS**2
BEST = float(STEPS[np.argmin(ERRORS)])


def scan(**fields):
    defaults = {
        "steps": STEPS,
        "values": np.full(STEPS.size, 2.0),
        "errors": ERRORS,
        "best_step": BEST,
        "noise": 1e-16,
        "order": 2.0,
        "value": 2.0,
        "bound": 1e-11,
        "along": "span",
        "function": "cost",
        "evaluations": 91,
    }
    return Scan(**(defaults | fields))


def field_of(lines):
    """The plot's field, one string a row, from top to bottom."""
    return [line.partition("|")[2] for line in lines if "|" in line]


def places(lines, mark):
    return [(row, column) for row, text in enumerate(field_of(lines)) for column, m in enumerate(text) if m == mark]


def test_the_derivative_and_the_best_step_come_first():
    lines = scan_text(scan()).splitlines()

    assert lines[0] == "cost along span: 2 ± 1e-11"
    assert lines[1].startswith("  Best step for a central difference: ")


def test_the_best_step_is_the_lowest_point_of_the_plot():
    lines = plot(STEPS, ERRORS, BEST)
    ((best_row, _),) = places(lines, "O")

    assert best_row == max(row for row, _ in places(lines, "*") + places(lines, "O"))


def test_larger_steps_stand_further_right_and_larger_errors_higher():
    ((high, right),) = places(plot(np.array([1e-4, 1e-2]), np.array([1e-8, 1e-4]), 1e-4), "*")
    ((low, left),) = places(plot(np.array([1e-4, 1e-2]), np.array([1e-8, 1e-4]), 1e-4), "O")

    assert left < right
    assert high < low


def test_a_power_of_ten_stands_at_its_label():
    lines = plot(np.array([1e-6, 1e-3]), np.array([1e-8, 1e-2]), 1e-6)
    row, column = places(lines, "*")[0]

    assert next(line for line in lines if "1e-2" in line).partition("|")[2] == field_of(lines)[row]
    assert lines[-2].index("1e-3") <= column + 9 <= lines[-2].index("1e-3") + 4


def test_steps_without_a_finite_error_are_counted_not_drawn():
    errors = ERRORS.copy()
    errors[:5] = [NAN, INF, NAN, -1.0, NAN]

    assert plot(STEPS, errors, BEST)[-1] == "  not drawn: 5 steps without a finite error"


def test_an_error_of_zero_stands_at_the_bottom():
    errors = ERRORS.copy()
    errors[10] = 0.0
    lines = plot(STEPS, errors, STEPS[-1])

    assert max(row for row, _ in places(lines, "*")) == len(field_of(lines)) - 1


@pytest.mark.parametrize("errors", [[], [NAN, NAN], [0.0, 0.0], [1e-3, NAN]])
def test_too_few_points_give_a_sentence_instead_of_a_plot(errors):
    (line,) = plot(np.array([1e-3, 1e-2][: len(errors)]), np.array(errors), 1e-3)

    assert "no curve to draw" in line


def test_a_scan_that_found_nothing_says_so():
    nothing = scan(errors=np.full(43, NAN), best_step=NAN, order=NAN, noise=NAN, value=NAN, bound=INF)

    assert "No step gives a finite difference quotient." in scan_text(nothing)


def test_a_scan_whose_budget_ended_before_the_curve_blames_no_step():
    text = str(gradcheck.scan(math.exp, at=0.7, budget=5))

    assert "The budget ended before the curve could be looked at." in text
    assert "No step" not in text


def test_the_brief_line_holds_the_best_step():
    assert brief_scan(scan(text="cost along span: 2\nmore", best_step=1.7e-5)) == "cost along span: 2, best step 1.7e-5"
    assert brief_scan(scan(text="cost along span: 2\nmore", best_step=NAN)) == "cost along span: 2, no best step"


@pytest.mark.parametrize("decades", [1, 30, 300])
def test_no_line_is_wider_than_a_terminal(decades):
    steps = np.logspace(-decades, 0, 50)
    name = "a_very_long_name_of_a_fuselage_frame.thickness_of_the_skin_at_the_root"
    text = scan_text(
        scan(steps=steps, errors=steps[::-1], values=steps, along=name, function=name, notices=("n" * 99,))
    )

    assert max(len(line) for line in text.splitlines()) <= 80
