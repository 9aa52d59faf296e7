"""The noise inquiry: what it hears where there is little to hear it from, and what it costs."""

import json
import math

import numpy as np
import pytest

import gradcheck
from gradcheck import NoiseKind
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.difference_table import difference_table
from gradcheck.witnesses.noise import noise
from gradcheck.witnesses.noise_kind import digits_of
from gradcheck.witnesses.noise_reading import NoiseReading
from gradcheck.witnesses.steps import room_along
from tests.gates import CountingGate, gate_of

ROUNDING, SINGLE, INNER = NoiseKind.ROUNDING, NoiseKind.SINGLE_PRECISION, NoiseKind.INNER_TOLERANCE
DIGITS, UNREPEATABLE, SILENT = NoiseKind.FEW_DIGITS, NoiseKind.UNREPEATABLE, NoiseKind.NOT_EXAMINED


def scrambled(x: float) -> float:
    """A number in [-1, 1] without any pattern in x."""
    return 2.0 * math.modf(abs(math.sin(1e9 * x + 0.3)) * 43758.5453)[0] - 1.0


def heard(function, at, *, limit=None, along=None, **domain) -> tuple[NoiseReading, CountingGate]:
    x = np.atleast_1d(np.asarray(at, dtype=float))
    directions = np.arange(x.size) if along is None else np.atleast_2d(along)
    centre = np.atleast_1d(np.asarray(function(x), dtype=float))
    gate = gate_of(function, limit)
    room = room_along(x, directions, domain_of(x, **domain))
    return conduct_one(noise(x, directions, room, centre), gate), gate


def kind_of(function, at, **options) -> NoiseKind:
    return heard(function, at, **options)[0].kind[0][0]


# --- kinds -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("function", "kind"),
    [
        (lambda x: math.exp(x[0]), ROUNDING),
        (lambda x: (math.exp(x[0]) + 1e6) - 1e6, ROUNDING),
        (lambda x: float(np.float32(math.exp(x[0]))), SINGLE),
        (lambda x: float(np.sin(np.float32(x[0]))) * 3.1, SINGLE),
        (lambda x: math.exp(x[0]) + 1e-6 * scrambled(x[0]), INNER),
        (lambda x: round(math.exp(x[0]), 6), DIGITS),
        (lambda x: float(f"{math.exp(x[0]):.5g}"), DIGITS),
    ],
)
def test_each_kind_is_told(function, kind):
    assert kind_of(function, 0.7) == kind


def test_values_that_differ_at_the_same_point_are_unrepeatable():
    dice = np.random.default_rng(3)
    reading, _ = heard(lambda x: math.sin(x[0]) + 1e-5 * dice.normal(), 0.7)

    assert reading.kind[0][0] == UNREPEATABLE
    assert reading.level[0, 0] == pytest.approx(1e-5, rel=1.0)
    assert reading.apart[0] > 0


def test_a_state_that_shows_only_after_other_points_is_unrepeatable():
    last = [0.0]

    def model(x):
        value, last[0] = math.sin(x[0]) + 1e-4 * last[0], float(x[0] != 0.7)
        return value

    assert kind_of(model, 0.7) == UNREPEATABLE


# --- levels ----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", [1e-12, 1e-9, 1e-6, 1e-3])
@pytest.mark.parametrize("at", [0.7, 0.0, 1e8, -3.0])
def test_the_level_is_the_standard_deviation_of_one_value(size, at):
    scale = abs(at) or 1.0
    reading, _ = heard(lambda x: math.exp(x[0] / scale) + size * scrambled(x[0] / scale), at)

    assert 0.4 < reading.level[0, 0] / (size / math.sqrt(3.0)) < 2.5


def test_the_step_of_printed_digits_is_told():
    reading, _ = heard(lambda x: round(math.exp(x[0]), 5), 0.7)

    assert reading.quantum[0, 0] == pytest.approx(1e-5)
    assert reading.level[0, 0] == pytest.approx(1e-5 / math.sqrt(12.0))


def test_one_noisy_output_among_exact_ones_is_the_only_noisy_one():
    reading, _ = heard(lambda x: [math.sin(x[0]), 1e9 * (math.exp(x[0]) + 1e-6 * scrambled(x[0])), 1e-9 * x[0]], 0.7)

    assert reading.kind[0] == (ROUNDING, INNER, ROUNDING)
    assert reading.level[0, 1] == pytest.approx(1e3 / math.sqrt(3.0), rel=1.0)
    assert reading.level[0, 0] < 1e-14
    assert reading.level[0, 2] < 1e-23


def test_noise_of_one_variable_is_heard_along_that_one():
    reading, _ = heard(lambda x: math.sin(x[0]) + math.exp(x[1]) + 1e-7 * scrambled(x[1]), [0.7, 0.4])

    assert [kinds[0] for kinds in reading.kind] == [ROUNDING, INNER]
    assert reading.of_outputs().kind == (INNER,)


def test_noise_is_heard_along_a_general_direction():
    function = lambda x: math.sin(x[0]) * x[1] + 1e-7 * scrambled(x[0] + x[1])  # noqa: E731

    assert kind_of(function, [0.7, 1.4], along=[1.0, -0.5]) == INNER


# --- little to hear from ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "function",
    [lambda x: 3.0, lambda x: 0.0, lambda x: 3.0 * x[0], lambda x: x[0], lambda x: 7, lambda x: 1e300 * x[0]],
    ids=["constant", "zero", "multiple", "x itself", "whole number", "huge"],
)
@pytest.mark.parametrize("at", [0.7, 0.0, 1e-8])
def test_exact_functions_carry_no_more_than_rounding(function, at):
    reading, _ = heard(function, at)
    size = max(abs(float(function(np.array([at])))), abs(float(function(np.array([1.0])))))

    assert reading.kind[0][0] == ROUNDING
    assert reading.level[0, 0] <= 2e-16 * max(size, 1e-290)


def test_counts_are_few_digits():
    assert kind_of(lambda x: math.floor(40.0 * x[0]), 0.7) == DIGITS


def test_a_huge_offset_leaves_the_rounding_of_the_offset():
    reading, _ = heard(lambda x: 1e12 + math.sin(x[0]), 0.7)

    assert reading.kind[0][0] == ROUNDING
    assert reading.level[0, 0] == pytest.approx(np.spacing(1e12) / math.sqrt(12.0), rel=0.5)


def test_at_a_bound_all_points_lie_on_the_other_side():
    seen = []

    def model(x):
        seen.append(x[0])
        return math.exp(x[0]) + 1e-6 * scrambled(x[0])

    reading, _ = heard(model, 0.7, bounds=[(0.7, 5.0)])

    assert min(seen) >= 0.7
    assert reading.kind[0][0] == INNER


def test_within_narrow_bounds_no_point_lies_outside():
    seen = []

    def model(x):
        seen.append(x[0])
        return math.exp(x[0])

    reading, _ = heard(model, 0.7, bounds=[(0.7 - 1e-6, 0.7 + 2e-6)])

    assert 0.7 - 1e-6 <= min(seen) <= max(seen) <= 0.7 + 2e-6
    assert reading.kind[0][0] == ROUNDING


def test_without_room_nothing_is_said():
    reading, gate = heard(lambda x: math.exp(x[0]), 0.7, bounds=[(0.7, 0.7)])

    assert reading.kind[0][0] == SILENT
    assert np.isnan(reading.level[0, 0])
    assert gate.evaluations <= 2


def test_where_one_side_is_not_a_number_the_other_side_is_heard():
    function = lambda x: math.sqrt(x[0] - 0.7) + 1e-6 * scrambled(x[0]) if x[0] >= 0.7 else math.nan  # noqa: E731

    assert kind_of(function, 0.7 + 1e-9) == INNER


def test_a_model_that_fails_at_some_points_is_heard_where_it_works():
    def model(x):
        if x[0] > 0.72:
            raise ValueError("no solution")
        return math.exp(x[0])

    assert kind_of(model, 0.7) == ROUNDING


def test_a_model_that_works_at_the_point_only_is_not_examined():
    reading, _ = heard(lambda x: 1.0 if x[0] == 0.7 else math.nan, 0.7)

    assert reading.kind[0][0] == SILENT


@pytest.mark.parametrize("limit", range(0, 40, 3))
def test_a_budget_that_ends_is_kept_and_costs_no_more(limit):
    reading, gate = heard(lambda x: math.exp(x[0]) + 1e-6 * scrambled(x[0]), 0.7, limit=limit)

    assert gate.evaluations <= limit
    assert reading.kind[0][0] in (SILENT, INNER)


def test_the_cost_of_rounding_is_thirty_evaluations():
    reading, gate = heard(lambda x: math.exp(x[0]), 0.7)

    assert gate.evaluations == reading.spent <= 30


@pytest.mark.parametrize(
    "function",
    [
        lambda x: math.tanh(400.0 * (x[0] - 0.71)),
        lambda x: math.sin(1e4 * x[0]),
        lambda x: 1.0 / (x[0] - 0.69),
        lambda x: abs(x[0] - 0.71),
        lambda x: math.sqrt((x[0] - 0.7) ** 2 + 1e-8),
        lambda x: float(x[0] > 0.71) + x[0],
        lambda x: math.log(x[0] - 0.6999),
    ],
    ids=["layer", "fast wave", "pole", "kink", "rounded kink", "jump", "singularity"],
)
def test_structure_is_no_noise(function):
    assert kind_of(function, 0.7) == ROUNDING


# --- parts -----------------------------------------------------------------------------------------------------------


def test_a_table_of_a_smooth_function_does_not_settle():
    assert not difference_table(np.exp(np.linspace(0.0, 0.1, 9))).settled


def test_a_table_takes_several_outputs_at_once():
    values = np.random.default_rng(1).normal(size=(9, 3)) * [1.0, 1e-3, 1e6]

    assert difference_table(values).level.shape == (3,)


def test_a_table_with_a_missing_value_does_not_settle():
    assert np.isnan(difference_table(np.array([1.0, 2.0, math.nan, 1.0, 2.0, 1.0])).level)


def test_full_digits_show_no_lattice():
    digits = digits_of(np.random.default_rng(2).uniform(1.0, 2.0, 30))

    assert digits.decimal == digits.binary == 0.0
    assert not digits.single


# --- what users see --------------------------------------------------------------------------------------------------


def test_an_estimate_tells_the_kind_at_no_cost_where_it_is_rounding():
    answer = gradcheck.estimate(lambda x: [math.exp(x[0]), x[0] ** 3], at=[0.7])

    assert answer.noise_kind == (ROUNDING, ROUNDING)
    assert answer.evaluations <= 40
    assert "(rounding)" in str(answer)


def test_an_estimate_tells_what_few_digits_do():
    answer = gradcheck.estimate(lambda x: round(math.exp(x), 6), at=0.7)

    assert answer.noise_kind == (DIGITS,)
    assert answer.noise.item() == pytest.approx(1e-6 / math.sqrt(12.0))


@pytest.mark.parametrize(
    ("function", "kind"),
    [(math.exp, ROUNDING), (lambda x: round(math.exp(x), 6), DIGITS), (lambda x: np.float32(math.exp(x)), SINGLE)],
    ids=["rounding", "few digits", "single precision"],
)
@pytest.mark.parametrize("at", [0.7, [0.7, 0.2]], ids=["a number", "an array"])
def test_an_estimate_of_second_derivatives_tells_the_kind_too(function, kind, at):
    answer = gradcheck.estimate(lambda x: function(float(np.sum(x))), at=at, order=2)

    assert answer.noise_kind == (kind,)
    assert answer.noise.shape == (1,)


def test_a_scan_tells_the_kind_in_words_and_in_json():
    curve = gradcheck.scan(lambda x: float(np.float32(math.exp(x))), at=0.7)

    assert curve.noise_kind == SINGLE
    assert "single precision inside" in " ".join(str(curve).split())
    assert json.loads(json.dumps(curve.to_dict()))["noise_kind"] == "single precision"


@pytest.mark.parametrize(
    ("function", "code", "kind"),
    [
        (lambda x: math.exp(x[0]) + 1e-7 * scrambled(x[0]), "noise", INNER),
        (lambda x: float(np.float32(math.exp(x[0]))), "low-precision", SINGLE),
        (lambda x: round(math.exp(x[0]), 6), "coarse-output", DIGITS),
    ],
)
def test_an_audit_makes_one_finding_of_the_kind_it_heard(function, code, kind):
    report = gradcheck.audit(function, at=[0.7], bounds=[(0.0, 2.0)])
    exactness = [f for f in report.findings if f.code in ("noise", "low-precision", "coarse-output", "unrepeatable")]

    assert [f.code for f in exactness] == [code]
    assert exactness[0].evidence["kind"] == kind == report.steps[0].noise_kind
    assert exactness[0].evidence["standard_deviation"] == report.steps[0].noise
