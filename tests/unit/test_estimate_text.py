"""A derivative from function values as text."""

import numpy as np
import pytest

from gradcheck.records.estimate import Estimate
from gradcheck.report.estimate_text import estimate_text
from tests.records import INF, NAN


def estimate(value, bound=1e-12, **fields):
    value = np.asarray(value, dtype=float)
    defaults = {
        "value": value,
        "bound": np.broadcast_to(bound, value.shape),
        "step": np.full(value.shape, 0.1),
        "noise": [1e-16],
        "evaluations": 31,
        "source": "finite difference",
        "reasons": {},
    }
    return Estimate(**(defaults | fields))


def names_shown(text):
    return [line.split("  ")[1] for line in text.splitlines() if "±" in line and "value ± bound" not in line]


def test_every_entry_of_a_small_derivative_is_shown_with_its_bound():
    text = estimate_text(estimate([2.1, -3.0], bound=[1e-12, 3e-4], names=("chord", "span")))

    assert "chord  2.1 ± 1e-12" in text
    assert "span   -3 ± 3e-4" in text


def test_of_many_entries_the_least_certain_ones_are_shown():
    bound = np.full(1000, 1e-12)
    bound[[7, 400]] = INF
    text = estimate_text(estimate(np.ones(1000), bound=bound))

    assert "the 20 least certain ones:" in text
    assert {"[7]", "[400]"} <= set(names_shown(text))
    assert len(names_shown(text)) == 20


def test_a_jacobian_of_two_outputs_names_output_and_variable():
    text = estimate_text(estimate([[1.0, 2.0], [3.0, 4.0], [5.0, 6.0]], names=("a", "b")))

    assert names_shown(text) == ["[0] a", "[0] b", "[1] a", "[1] b", "[2] a", "[2] b"]


def test_an_entry_of_a_hessian_has_the_names_of_two_variables_and_is_shown_once():
    text = estimate_text(estimate([[1.0, 2.0], [2.0, 4.0]], names=("chord", "span"), order=2))

    assert text.startswith("second derivative by finite difference: 4 entries, 3 of them different")
    assert names_shown(text) == ["chord, chord", "chord, span", "span, span"]


def test_entries_of_a_matrix_of_parameters_twice_have_two_names():
    names = ("w[0, 0]", "w[0, 1]")
    text = estimate_text(estimate(np.ones((1, 2, 1, 2)), names=names, order=2))

    assert names_shown(text) == ["w[0, 0], w[0, 0]", "w[0, 0], w[0, 1]", "w[0, 1], w[0, 1]"]


def test_a_zero_among_large_entries_is_not_taken_for_uncertain():
    value = np.full(100, 3.0)
    value[7] = 0.0
    bound = np.full(100, 1e-12)
    bound[60:] = 1e-6
    text = estimate_text(estimate(value, bound=bound))

    assert "[7]" not in names_shown(text)


def test_entries_that_share_a_reason_are_told_together():
    reasons = {f"x[0], x[{i}]": "a kink at the point" for i in range(9)}
    text = estimate_text(estimate(np.ones((3, 3)), names=("a", "b", "c"), reasons=reasons, order=2))

    assert text.count("a kink at the point") == 1
    assert "x[0], x[0]; x[0], x[1]" in text
    assert "and 3 more" in " ".join(text.split())


def test_a_derivative_along_a_direction_is_a_single_number():
    assert "2.5 ± 1e-12" in estimate_text(estimate(2.5))


def test_why_a_bound_is_infinite_is_told():
    text = estimate_text(estimate([NAN], bound=INF, names=("x",), reasons={"x": "a kink at the point"}))

    assert "nan ± inf" in text
    assert "x: a kink at the point" in text


@pytest.mark.parametrize("size", [0, 1, 30])
def test_no_line_is_wider_than_a_terminal(size):
    names = tuple(f"a_very_long_name_of_a_fuselage_frame[{i}].thickness_of_the_skin_at_the_root" for i in range(size))
    value = np.full(size, -1.2345678901234567e-123)
    text = estimate_text(
        estimate(value, 1e-200, names=names, reasons=dict.fromkeys(names, "r" * 90), notices=("n" * 99,))
    )

    assert max(len(line) for line in text.splitlines()) <= 80


def test_an_entry_that_no_step_decided_has_a_dash_for_it():
    text = estimate_text(estimate([0.0, 1.0], bound=[1.0, 1e-12], names=("chord", "span"), step=np.array([NAN, 0.1])))

    assert "chord  0 ± 1" in text
    assert [line.split()[-1] for line in text.splitlines() if "±" in line] == ["step", "-", "0.1"]
