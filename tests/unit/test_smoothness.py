"""What the examination of a line says about functions whose breaks are known."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

from gradcheck.evaluation.conduct import conduct_one
from gradcheck.health.line_report import LineReport
from gradcheck.health.smoothness import examine_line
from tests.gates import gate_of

START, ROW = np.zeros(1), np.ones(1)
Scalar = Callable[[float], Any]


def examined(function: Scalar, **options: Any) -> LineReport:
    """The report on a function of t in [0, 1]."""
    return conduct_one(examine_line(START, ROW, **options), gate_of(lambda x: function(float(x[0]))))


def kinds(report: LineReport) -> set[str]:
    return {str(irregularity.kind) for irregularity in report.irregularities}


KNOTS = np.linspace(0.0, 1.0, 12)
SPLINE = CubicSpline(KNOTS, np.sin(7.0 * KNOTS), bc_type="natural")

LOOK_ALIKES: dict[str, Scalar] = {
    "constant": lambda t: 4.25,
    "linear": lambda t: 3.0 - 2.0 * t,
    "exponential": lambda t: math.exp(5.0 * t),
    "steep transition": lambda t: math.tanh(400.0 * (t - 0.4321)),
    "rounded corner": lambda t: math.sqrt((t - 0.4321) ** 2 + 1e-8),
    "sharper rounded corner": lambda t: math.sqrt((t - 0.4321) ** 2 + 1e-12),
    "fast wave": lambda t: math.sin(300.0 * t),
    "unresolvable wave": lambda t: math.sin(1e4 * t),
    "wave within a stencil": lambda t: math.sin(1e6 * t),
    "twice differentiable spline": lambda t: float(SPLINE(t)),
    "huge offset": lambda t: 1e12 + math.sin(3.0 * t),
    "saturated": lambda t: 1.0 / (1.0 + math.exp(-1000.0 * (t - 0.4321))),
    "boundary layer": lambda t: math.exp(-1000.0 * t) + t,
    "tiny values": lambda t: 1e-200 * math.sin(5.0 * t),
}


@pytest.mark.parametrize("function", LOOK_ALIKES.values(), ids=LOOK_ALIKES)
def test_what_is_smooth_however_steep_is_not_called_rough(function: Scalar) -> None:
    assert examined(function).irregularities == ()


def fixed_point(t: float) -> float:
    """An inner iteration that stops at 1e-5."""
    y = 0.0
    while abs(y - (new := 0.6 * math.cos(y) + t)) > 1e-5:
        y = new
    return new


def single(t: float) -> float:
    return float(np.sin(np.float32(3.0) * np.float32(t)))


ROUGH: dict[str, tuple[Scalar, str]] = {
    "small kink on a wave": (lambda t: 1e-3 * abs(t - 0.4321) + math.sin(3.0 * t), "kink"),
    "clipped": (lambda t: max(t, 0.4321), "kink"),
    "interpolation table": (lambda t: float(np.interp(t, KNOTS, np.sin(9.0 * KNOTS))), "kink"),
    "small step": (lambda t: math.sin(2.0 * t) + 1e-4 * (t > 0.4321), "jump"),
    "penalty": (lambda t: 1e300 if t > 0.4321 else t, "jump"),
    "inner iteration": (fixed_point, "jump"),
    "counting": (lambda t: float(math.floor(10.0 * t)), "staircase"),
    "fine staircase": (lambda t: math.sin(math.floor(700.0 * t) / 700.0), "staircase"),
    "half a square": (lambda t: max(0.0, t - 0.4321) ** 2, "curvature-break"),
    "contact": (lambda t: max(0.0, t - 0.4321) ** 1.5, "curvature-break"),
    "root": (lambda t: math.sqrt(abs(t - 0.4321)), "kink"),
    "root at a bound": (lambda t: math.sqrt(t), "kink"),
    "pole": (lambda t: math.tan(3.0 * t), "non-finite"),
    "single precision": (single, "low-precision"),
    "single precision inside": (lambda t: math.pi * single(t) + 0.1 * t, "low-precision"),
    "printed to six digits": (lambda t: float(f"{math.exp(t):.6g}"), "coarse-output"),
    "logarithm": (lambda t: float(np.log(t - 0.4321)), "non-finite"),
    "exception": (lambda t: 1.0 / (t > 0.4321), "crash"),
}


@pytest.mark.parametrize(("function", "kind"), ROUGH.values(), ids=ROUGH)
def test_what_is_rough_is_named(function: Scalar, kind: str) -> None:
    assert kinds(examined(function)) == {kind}


def test_a_smooth_line_is_resolved_completely() -> None:
    report = examined(lambda t: math.exp(t) * math.sin(4.0 * t))

    assert (report.unresolved, report.complete, report.repeatable) == (0.0, True, True)


def test_a_wave_that_was_not_resolved_is_said_to_be_unresolved() -> None:
    assert examined(lambda t: math.sin(1e4 * t)).unresolved > 0.9


def test_a_kink_is_located_with_its_one_sided_slopes() -> None:
    (kink,) = examined(lambda t: abs(t - 0.4321) + math.sin(t)).irregularities
    slope = math.cos(0.4321)

    assert kink.lower < 0.4321 < kink.upper
    assert kink.upper - kink.lower < 1e-9
    assert (kink.left, kink.right) == pytest.approx((slope - 1.0, slope + 1.0), abs=1e-8)
    assert kink.size == pytest.approx(2.0, rel=1e-8)


def test_a_jump_is_located_with_the_values_on_both_sides() -> None:
    (jump,) = examined(lambda t: math.exp(t) - 0.25 * (t > 0.4321)).irregularities

    assert jump.lower <= 0.4321 <= jump.upper
    assert jump.upper - jump.lower < 2e-11
    assert (jump.left, jump.right) == pytest.approx((math.exp(0.4321), math.exp(0.4321) - 0.25))
    assert jump.size == pytest.approx(-0.25)


def test_a_curvature_break_is_located_with_its_size() -> None:
    (found,) = examined(lambda t: (t - 0.4321) * abs(t - 0.4321) + t).irregularities

    assert found.lower < 0.4321 < found.upper
    assert found.size == pytest.approx(4.0, rel=1e-6)


def test_an_infinite_slope_is_a_kink_of_infinite_size() -> None:
    (found,) = examined(lambda t: math.sqrt(abs(t - 0.4321))).irregularities

    assert math.isinf(found.size)
    assert 0.0 < found.evidence["power"] < 1.0


def test_a_single_step_is_a_jump_and_not_a_staircase() -> None:
    assert kinds(examined(lambda t: float(t > 0.4321))) == {"jump"}


def test_all_kinks_between_two_bounds_are_found() -> None:
    found = examined(lambda t: min(max(t, 0.3), 0.7)).of_kind("kink")

    assert [kink.lower for kink in found] == pytest.approx([0.3, 0.7])


def test_a_tiny_break_tells_how_small_it_is() -> None:
    (jump,) = examined(lambda t: math.sin(2.0 * t) + 1e-5 * (t > 0.4321)).irregularities

    assert 1e-6 < jump.relative < 1e-4


@pytest.mark.parametrize("size", [1e-9, 1e-6, 1e-3])
def test_the_noise_level_is_the_standard_deviation_of_one_value(size: float) -> None:
    dice = np.random.default_rng(4)
    report = examined(lambda t: math.sin(3.0 * t) + size * dice.normal())

    assert 0.4 < report.noise[0] / size < 2.5
    assert "noise" in kinds(report)


def test_rounding_is_no_noise() -> None:
    report = examined(lambda t: 1e6 * math.cos(3.0 * t))

    assert report.noise[0] < 1e-9
    assert report.irregularities == ()


def test_the_same_point_with_two_answers_is_unrepeatable() -> None:
    calls = iter(range(10**6))
    report = examined(lambda t: t + 1e-4 * next(calls))

    assert not report.repeatable
    assert "unrepeatable" in kinds(report)


def test_a_quantum_of_the_output_is_told() -> None:
    (found,) = examined(lambda t: round(math.exp(t), 5)).irregularities

    assert found.size == pytest.approx(1e-5)


def test_a_stretch_without_values_is_bracketed_on_both_sides() -> None:
    report = examined(lambda t: math.nan if 0.3 < t < 0.45 else math.sin(t))

    np.testing.assert_allclose(report.nonfinite, [[0.3, 0.45]], atol=1e-8)


def test_both_sides_of_a_stretch_without_values_are_examined() -> None:
    report = examined(lambda t: math.nan if 0.3 < t < 0.45 else abs(t - 0.2) + abs(t - 0.8))

    assert [kink.lower for kink in report.of_kind("kink")] == pytest.approx([0.2, 0.8])


def test_the_edge_of_the_domain_is_not_called_a_break() -> None:
    assert kinds(examined(lambda t: float(np.sqrt(t - 0.4321)))) == {"non-finite"}


def test_a_function_without_any_value_is_one_stretch() -> None:
    report = examined(lambda t: math.nan)

    np.testing.assert_array_equal(report.nonfinite, [[0.0, 1.0]])
    assert np.isnan(report.noise[0])


# ------------------------------------------------------------------ several outputs


def test_each_break_names_its_output() -> None:
    report = examined(lambda t: [math.sin(t), abs(t - 0.3), math.exp(t) + (t > 0.6)])

    assert [(str(i.kind), i.output) for i in report.irregularities] == [("kink", 1), ("jump", 2)]
    assert report.noise.shape == (3,)


def test_outputs_share_their_points() -> None:
    def break_at(place: float) -> int:
        return examined(lambda t: abs(t - place)).evaluations

    together = examined(lambda t: [abs(t - 0.3), abs(t - 0.4), abs(t - 0.7)]).evaluations

    assert together < 0.7 * (break_at(0.3) + break_at(0.4) + break_at(0.7))


def test_an_output_without_values_leaves_the_others_examined() -> None:
    report = examined(lambda t: [math.nan, abs(t - 0.3)])

    assert {(str(i.kind), i.output) for i in report.irregularities} == {("non-finite", 0), ("kink", 1)}


# ------------------------------------------------------------------ lines and requests


def test_a_break_in_many_variables_is_found_along_a_row() -> None:
    scale = np.array([1e-3, 1.0, 50.0])
    start, row = scale * np.array([-1.0, 0.2, 0.5]), scale * np.array([2.0, 1.0, -0.3])
    place = 0.5  # where the first coordinate is zero
    report = conduct_one(examine_line(start, row), gate_of(lambda x: abs(x[0]) + 1e-3 * np.sin(x[1:]).sum()))

    (kink,) = report.irregularities
    assert kink.lower <= place <= kink.upper


def test_a_coordinate_and_a_length_say_the_same_as_a_row() -> None:
    def function(x: Any) -> float:
        return abs(x[1] - 5.3) + x[0]

    start = np.array([1.0, 5.0])
    along_row = conduct_one(examine_line(start, np.array([0.0, 2.0])), gate_of(function))
    along_coordinate = conduct_one(examine_line(start, (1, 2.0)), gate_of(function))

    assert along_row.irregularities[0].size == pytest.approx(along_coordinate.irregularities[0].size)
    assert along_coordinate.irregularities[0].lower == pytest.approx(0.15)


def test_a_break_far_from_the_origin_is_located_as_finely_as_points_can_be_told_apart() -> None:
    report = conduct_one(examine_line(np.array([1e8]), (0, 1.0)), gate_of(lambda x: float(x[0] > 1e8 + 0.3)))

    (jump,) = report.irregularities
    assert jump.lower <= 0.3 <= jump.upper
    assert jump.upper - jump.lower < 1e-6


def test_the_first_request_is_one_row_of_points() -> None:
    request = next(examine_line(np.zeros(3), np.ones(3), worth=2.5))

    assert request.directions.shape == (1, 3)
    assert request.offsets.shape == (1, 47)
    assert request.worth == 2.5


def test_a_repetition_asks_for_fresh_values() -> None:
    seen = []

    def watching(requests: Any) -> Any:
        seen.extend(requests)
        return gate_of(lambda x: float(x[0]))(requests)

    conduct_one(examine_line(START, ROW), watching)

    assert [request.fresh for request in seen].count(True) == 1


def test_the_same_seed_asks_for_the_same_points_and_another_for_others() -> None:
    def first_points(seed: int) -> Any:
        return next(examine_line(START, ROW, seed=seed)).offsets

    np.testing.assert_array_equal(first_points(3), first_points(3))
    assert (first_points(3) != first_points(4)).any()


# ------------------------------------------------------------------ budgets


@pytest.mark.parametrize("budget", [60, 100, 200, 400])
def test_the_budget_is_never_exceeded(budget: int) -> None:
    gate = gate_of(lambda x: math.sqrt(abs(x[0] - 0.3)) + math.sin(3e3 * x[0]))
    report = conduct_one(examine_line(START, ROW, budget=budget), gate)

    assert gate.evaluations <= budget
    assert report.evaluations == gate.evaluations


def test_what_was_found_before_the_budget_ended_is_kept() -> None:
    report = examined(lambda t: abs(t - 0.3) + math.sin(3e3 * t) * (t > 0.5), budget=400)
    short = examined(lambda t: abs(t - 0.3) + math.sin(3e3 * t) * (t > 0.5), budget=90)

    assert "kink" in kinds(report)
    assert not short.complete
    assert short.unresolved > 0.3


def test_a_refusal_in_the_middle_ends_the_examination_with_what_is_known() -> None:
    gate = gate_of(lambda x: math.tanh(4000.0 * (x[0] - 0.3)), limit=80)
    report = conduct_one(examine_line(START, ROW), gate)

    assert gate.evaluations == 80
    assert not report.complete
    assert report.unresolved > 0.0


def test_a_refusal_at_once_says_that_nothing_is_known() -> None:
    report = conduct_one(examine_line(START, ROW), gate_of(lambda x: 1.0, limit=0))

    assert (report.irregularities, report.unresolved, report.complete) == ((), 1.0, False)


def test_a_smooth_line_is_cheap() -> None:
    assert examined(lambda t: math.exp(t)).evaluations <= 80
