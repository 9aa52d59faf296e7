"""The parts of the examination of a line, one by one."""

import math

import numpy as np
import pytest

from gradcheck.health.line_cells import difference_weights, hidden_jumps
from gradcheck.health.line_noise import read_stencil, stencil
from gradcheck.health.line_one_sided import one_sided
from gradcheck.health.line_predictions import whole
from gradcheck.health.line_samples import jitter, line_through
from gradcheck.witnesses.fingerprints import crosses_a_single, decimal_lattice, single_precision

RNG = np.random.default_rng(11)
GRID = np.sort(RNG.uniform(0.0, 1.0, 40))
QUIET = np.full(40, 1e-16)
ANY_JUMP = np.full(39, np.inf)  # a tolerance that every window meets


def test_differences_of_every_order_annihilate_polynomials_below_that_order() -> None:
    for order, weights in difference_weights(GRID):
        for power in range(order):
            windows = np.lib.stride_tricks.sliding_window_view(GRID**power, order + 1)

            assert np.abs((weights * windows).sum(axis=1)).max() < 1e-11


@pytest.mark.parametrize("cell", [0, 17, 30, 38])
def test_a_jump_can_hide_only_in_its_own_cell(cell: int) -> None:
    f = GRID**3 - GRID + 1e-3 * (np.arange(40) > cell)
    hidden = hidden_jumps(GRID, f, QUIET, np.full(39, 1e-9))

    assert hidden[cell] == pytest.approx(1e-3, rel=1e-6)  # less what the noise of the samples may pretend
    assert np.delete(hidden, cell).max() < 1e-9


def test_nothing_hides_in_the_cells_of_a_resolved_function() -> None:
    assert hidden_jumps(GRID, np.exp(GRID), QUIET, ANY_JUMP)[2:-2].max() < 1e-9


def test_noise_hides_nothing_above_itself() -> None:
    f = np.sin(GRID) + 1e-6 * RNG.normal(size=40)

    assert hidden_jumps(GRID, f, np.full(40, 1e-6), ANY_JUMP).max() < 1e-5


def test_too_few_samples_say_nothing() -> None:
    assert np.isinf(hidden_jumps(GRID[:4], GRID[:4], QUIET[:4], ANY_JUMP[:3])).all()


@pytest.mark.parametrize("function", [np.exp, np.sin, lambda t: 1.0 / (1.0 + t), lambda t: 0.0 * t + 2.0])
def test_the_doubt_of_a_prediction_covers_its_error(function) -> None:
    view = whole(GRID, function(GRID), QUIET)
    left = np.arange(8, 31)
    x = GRID[left][:, None] + np.diff(GRID)[left][:, None] * np.linspace(0.1, 0.9, 5)

    for seen in (view.from_left(left, left + 1, x), view.from_right(left, left + 1, x)):
        assert (np.abs(seen.value - function(x)) <= 3.0 * seen.doubt + 4e-16).all()


def test_a_prediction_from_two_samples_is_worth_nothing() -> None:
    view = whole(GRID, GRID, QUIET)
    left = np.array([1])

    assert np.isinf(view.from_left(left, left + 1, GRID[[1]][:, None] + 1e-3).doubt).all()


def test_one_sided_derivatives_at_a_kink_are_those_of_each_side() -> None:
    t = np.sort(np.concatenate([GRID, [0.5 - 1e-9, 0.5 + 1e-9]]))
    view = whole(t, np.where(t < 0.5, np.sin(t), np.exp(t) + math.sin(0.5) - math.exp(0.5)), np.full(t.size, 1e-16))
    sides = one_sided(view, 0.5 - 1e-9, 0.5 + 1e-9)

    assert sides.value[:, 0] == pytest.approx([math.cos(0.5), math.exp(0.5)], abs=1e-6)
    assert sides.value[:, 1] == pytest.approx([-math.sin(0.5), math.exp(0.5)], abs=1e-2)


# ------------------------------------------------------------------ stencils


def reading(function, spacing: float = 6e-8):
    t = stencil(0.3, spacing, np.random.default_rng(2))
    return read_stencil(t, np.array([[function(x)] for x in t]), 1e-16)


def test_a_stencil_reads_the_standard_deviation_of_the_noise() -> None:
    dice = np.random.default_rng(0)
    levels = [float(reading(lambda t: t + 1e-6 * dice.normal()).sigma[0]) for _ in range(200)]

    assert np.sqrt(np.mean(np.square(levels))) == pytest.approx(1e-6, rel=0.1)


def test_a_wave_in_a_stencil_is_no_noise() -> None:
    assert reading(lambda t: math.sin(1e5 * t)).sigma[0] < 1e-12


def test_a_single_jump_in_a_stencil_is_no_noise() -> None:
    assert reading(lambda t: t + (t > 0.3 + 1e-8)).sigma[0] < 1e-12


def test_a_stencil_on_a_plateau_is_flat() -> None:
    assert reading(lambda t: math.floor(7.0 * t)).flat[0]


# ------------------------------------------------------------------ digits

VALUES = np.exp(RNG.uniform(-2.0, 2.0, 33))


def test_full_mantissas_lie_on_no_decimal_lattice() -> None:
    assert decimal_lattice(VALUES).quantum == 0.0


def test_values_rounded_to_decimals_have_these_as_their_quantum() -> None:
    assert decimal_lattice(np.round(VALUES, 4)).quantum == pytest.approx(1e-4)


def test_values_with_few_digits_have_a_quantum_that_grows_with_them() -> None:
    lattice = decimal_lattice(np.array([float(f"{value:.5g}") for value in 1e4 * VALUES]))

    assert (lattice.quantum, lattice.coarsest) == (0.1, 1.0)


def test_counts_are_whole() -> None:
    assert decimal_lattice(np.arange(1.0, 40.0)).whole


def test_single_precision_shows_in_the_digits() -> None:
    assert single_precision(VALUES.astype(np.float32).astype(float))


@pytest.mark.parametrize(
    "values", [VALUES, np.arange(100.0), np.arange(100.0) / 8.0], ids=["double", "whole", "eighths"]
)
def test_doubles_and_simple_fractions_are_no_single_precision(values: np.ndarray) -> None:
    assert not single_precision(values)


def test_points_on_either_side_of_a_single_rounding_are_told_from_points_far_apart() -> None:
    border = 1.0 + 2.0**-24  # half way between two single-precision numbers
    near = np.array([1e-12])

    assert crosses_a_single(border - near, border + near)
    assert not crosses_a_single(1.0 - near, 1.0 + near)
    assert not crosses_a_single(np.array([0.0]), near)


# ------------------------------------------------------------------ points


def test_the_same_cell_is_jittered_alike_and_others_differently() -> None:
    numbers = jitter(GRID[:-1], GRID[1:])

    np.testing.assert_array_equal(numbers, jitter(GRID[:-1], GRID[1:]))
    assert np.unique(numbers).size == numbers.size
    assert (np.abs(numbers) <= 1.0).all()


def test_the_abscissae_of_a_coordinate_line_are_those_at_which_the_model_is_called() -> None:
    line = line_through(np.array([1e9]), (0, 1.0))
    t = line.realised(np.array([0.123456789]))

    assert (1e9 + t[0]) - 1e9 == t[0]


def test_the_grain_of_a_line_grows_with_the_distance_from_the_origin() -> None:
    near, far = line_through(np.array([1.0]), (0, 1.0)), line_through(np.array([1e9]), (0, 1.0))

    assert far.grain(np.ones(1))[0] > 1e8 * near.grain(np.zeros(1))[0]
