"""Noise levels against published tables, deterministic noise and real solvers.

J. J. Moré, S. M. Wild, "Estimating computational noise", SIAM J. Sci. Comput. 33(3) (2011) 1292-1314; "Estimating
derivatives of noisy simulations", ACM TOMS 38(3) (2012) art. 19; "Benchmarking derivative-free optimization
algorithms", SIAM J. Optim. 20(1) (2009) 172-191. Formulas and table digits were typed from memory of the papers; each
column of the table is the difference of the one before within its rounding, and the levels follow from the columns.
Everything else was recomputed (numpy, scipy), with seven values around the point; figures of solvers depend on their
version: the order of magnitude counts.
"""

import math
from functools import cache

import numpy as np
import pytest
from scipy.integrate import solve_ivp

import gradcheck
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.health.step_formulas import forward_step
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.difference_table import difference_table, gamma
from gradcheck.witnesses.noise import noise
from gradcheck.witnesses.noise_reading import NoiseReading
from gradcheck.witnesses.steps import room_along
from tests.gates import gate_of
from tests.problem_sets.more_garbow_hillstrom import rosenbrock

GAMMA = (2, 6, 20, 70, 252, 924, 3432, 12870, 48620, 184756)

#: The worked example of the paper of 2011: f = cos t + sin t + 1e-3·U[0, 2·sqrt(3)], h = 1e-2, seven values.
VALUES = (1.003, 1.011, 1.021, 1.033, 1.041, 1.050, 1.059)
COLUMNS = (
    (7.54e-3, 9.69e-3, 12.0e-3, 8.67e-3, 8.38e-3, 9.52e-3),
    (2.15e-3, 2.33e-3, -3.35e-3, -0.296e-3, 1.14e-3),
    (0.187e-3, -5.68e-3, 3.05e-3, 1.44e-3),
    (-5.87e-3, 8.73e-3, -1.61e-3),
    (1.46e-2, -1.03e-2),
    (-2.49e-2,),
)
PRINTED = (6.65e-3, 8.69e-4, 7.39e-4, 7.34e-4, 7.97e-4, 8.20e-4)
RECOMPUTED = (6.651e-3, 8.691e-4, 7.389e-4, 7.344e-4, 7.959e-4, 8.191e-4)

#: Share of 5 % and of 95 % of σ_k/σ for one table of seven values (recomputed, 2000 repeats).
RANGES = {2: (0.43, 1.53), 3: (0.35, 1.65), 4: (0.27, 1.77), 5: (0.18, 1.88), 6: (0.06, 1.94)}
ROOT_MEAN_SQUARE = (0.996, 1.017)

#: Moré & Wild (2012), forward differences.
STEP_FACTOR, ERROR_FACTOR = 1.681792830507429, 1.189207115002721
EXAMPLE_STEP, EXAMPLE_PREDICTED, EXAMPLE_FOUND = 1.5037260311921497e-3, 1.3300295e-3, 1.3301098e-3

#: Rosenbrock's function at (-1.2, 1) under the deterministic noise of the benchmark of 2009.
PHI_0, PHI, NOISY_ROSENBROCK = 0.06564992258362026, -0.19581798610625922, 24.195261204736223


def heard(function, x: float) -> NoiseReading:
    point, along = np.array([x]), np.array([0])
    room = room_along(point, along, domain_of(point))
    return conduct_one(noise(point, along, room, np.array([function(x)])), gate_of(lambda v: function(float(v[0]))))


def levels(function, x: float, spacing: float, count: int = 7) -> np.ndarray:
    """σ_1 ... of a table of values around x."""
    places = np.arange(count) - count // 2
    return difference_table(np.array([function(x + i * spacing) for i in places])).levels


# --- difference tables -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("order", "inverse"), list(enumerate(GAMMA, start=1)))
def test_gamma_is_the_published_factor(order, inverse):
    """Moré & Wild (2011): γ_k = (k!)²/(2k)! = 1/2, 1/6, 1/20, 1/70, 1/252, 1/924, ..."""
    assert gamma(order) == pytest.approx(1 / inverse, rel=1e-15)
    assert gamma(order) == pytest.approx(math.factorial(order) ** 2 / math.factorial(2 * order), rel=1e-15)


@pytest.mark.parametrize("order", range(1, 7))
def test_each_column_of_the_worked_table_gives_the_printed_level(order):
    """Moré & Wild (2011), worked table: the level of column k is sqrt(γ_k · mean square) of its differences."""
    column = np.array(COLUMNS[order - 1])
    level = math.sqrt(gamma(order) * np.mean(column**2))

    # A half of the last printed digit: the columns themselves are rounded to three digits.
    assert level == pytest.approx(PRINTED[order - 1], rel=2e-3)
    assert level == pytest.approx(RECOMPUTED[order - 1], abs=0.5 * 10.0 ** (math.floor(math.log10(level)) - 3))


def test_the_table_of_the_printed_differences_has_the_printed_levels():
    """From the first column on, the table computes the other columns, within the rounding of its digits."""
    start = np.concatenate([[0.0], np.cumsum(COLUMNS[0])])
    table = difference_table(start)

    assert table.levels == pytest.approx(RECOMPUTED, rel=0.01)  # the columns are rounded to three digits
    assert table.settled
    assert table.level == pytest.approx(7.7e-4, rel=0.15)  # of the true 1e-3


def test_the_printed_values_with_four_digits_give_the_first_level_only():
    """Four digits of f are good to 1 % in σ_1; the higher differences drown in their rounding."""
    assert difference_table(np.array(VALUES)).levels[0] == pytest.approx(PRINTED[0], rel=0.01)


def test_the_signs_of_the_differences_of_noise_alternate():
    table = difference_table(np.concatenate([[0.0], np.cumsum(COLUMNS[0])]))

    assert table.alternates.tolist() == [False, True, True, True, True, False]


@cache
def many_tables() -> np.ndarray:
    """(6, 2000): σ_k/σ of f = cos t + sin t + σ·U[0, 2·sqrt(3)], seven values, h = 1e-2·sqrt(σ/1e-3)."""
    rng = np.random.default_rng(20110)
    sigma = 1e-3
    t = np.arange(7)[:, None] * 1e-2 * math.sqrt(sigma / 1e-3)
    values = np.cos(t) + np.sin(t) + sigma * rng.uniform(0.0, 2 * math.sqrt(3.0), (7, 2000))
    return difference_table(values).levels / sigma


@pytest.mark.parametrize("order", range(2, 7))
def test_the_level_is_unbiased(order):
    """RMS of σ_k/σ over 2000 repeats is 0.996 to 1.017; three standard errors more for other random numbers."""
    root_mean_square = math.sqrt(np.mean(many_tables()[order - 1] ** 2))

    assert ROOT_MEAN_SQUARE[0] - 0.05 <= root_mean_square <= ROOT_MEAN_SQUARE[1] + 0.05


@pytest.mark.parametrize(("order", "limits"), RANGES.items())
def test_a_single_table_is_good_to_a_factor_of_two_or_three(order, limits):
    """5-95 % ranges of σ_k/σ of one table."""
    assert np.percentile(many_tables()[order - 1], [5, 95]) == pytest.approx(limits, abs=0.06)


# --- steps for noisy functions ---------------------------------------------------------------------------------------


def test_the_forward_step_has_the_published_constants():
    """Moré & Wild (2012): h = 8^(1/4)·sqrt(ε/|f''|); μ²h²/4 + 2ε²/h² is then sqrt(2)·μ·ε, its least value."""
    step = float(forward_step(np.array(1e-6), np.array(4.0)))
    error = math.sqrt((4.0 * step) ** 2 / 4 + 2e-12 / step**2)

    assert step == pytest.approx(STEP_FACTOR * math.sqrt(1e-6 / 4.0), rel=1e-12)
    assert error == pytest.approx(ERROR_FACTOR * math.sqrt(1e-6 * 4.0), rel=1e-12)
    assert pytest.approx(STEP_FACTOR, rel=1e-15) == 8**0.25
    assert pytest.approx(ERROR_FACTOR, rel=1e-15) == 2**0.25


def test_the_published_step_leaves_the_predicted_error():
    """f = cos + sin at t = 0.3 with noise 1e-6, 2e5 draws: RMS error 1.3300295e-3 predicted, 1.3301098e-3 found."""
    t, sigma = 0.3, 1e-6
    bend, slope = -(math.cos(t) + math.sin(t)), math.cos(t) - math.sin(t)
    step = STEP_FACTOR * math.sqrt(sigma / abs(bend))
    rng = np.random.default_rng(0)
    at, beyond = (
        np.cos(x) + np.sin(x) + rng.uniform(-1.0, 1.0, 200_000) * math.sqrt(3.0) * sigma for x in (t, t + step)
    )
    found = math.sqrt(np.mean(((beyond - at) / step - slope) ** 2))

    assert step == pytest.approx(EXAMPLE_STEP, rel=1e-12)
    assert ERROR_FACTOR * math.sqrt(sigma * abs(bend)) == pytest.approx(EXAMPLE_PREDICTED, abs=0.5e-10)
    assert found == pytest.approx(EXAMPLE_FOUND, rel=5e-3)  # other draws: a standard error is 1.3e-3


# --- deterministic noise ---------------------------------------------------------------------------------------------


def phi_0(x: np.ndarray) -> float:
    """Moré & Wild (2009): a wave of high frequency and one of low."""
    size = np.abs(x)
    return float(
        0.9 * math.sin(100 * size.sum()) * math.cos(100 * size.max()) + 0.1 * math.cos(math.sqrt((x**2).sum()))
    )


def phi(x: np.ndarray) -> float:
    return phi_0(x) * (4 * phi_0(x) ** 2 - 3)


def noisy_rosenbrock(x: np.ndarray) -> float:
    return float((1 + 1e-3 * phi(x)) * (rosenbrock(x) ** 2).sum())


def along_the_first(x: float) -> float:
    return noisy_rosenbrock(np.array([x, 1.0]))


def test_the_deterministic_noise_has_its_published_values():
    """Moré & Wild (2009), recomputed at the start of Rosenbrock's function."""
    x = np.array([-1.2, 1.0])

    assert phi_0(x) == pytest.approx(PHI_0, rel=1e-12)
    assert phi(x) == pytest.approx(PHI, rel=1e-12)
    assert noisy_rosenbrock(x) == pytest.approx(NOISY_ROSENBROCK, rel=1e-12)
    assert np.abs(rosenbrock(x)).sum() == pytest.approx(6.6, rel=1e-14)


def test_the_deterministic_noise_stays_within_one():
    points = np.random.default_rng(7).uniform(-3.0, 3.0, (5000, 2))

    assert max(abs(phi(x)) for x in points) <= 1.0


def test_at_a_spacing_of_a_hundredth_the_deterministic_noise_levels_off():
    """7e-3 to 9e-3 for k = 3 ... 6."""
    found = levels(along_the_first, -1.2, 1e-2)[2:]

    assert 6.5e-3 <= found.min() <= found.max() <= 1e-2


def test_close_together_the_deterministic_noise_is_a_smooth_function():
    """The trap: with h = 1e-4 the levels fall by orders of magnitude (7e-8, 3e-9, ...); noise depends on the scale."""
    found = levels(along_the_first, -1.2, 1e-4)[2:5]

    assert found[:2] == pytest.approx([7e-8, 3e-9], rel=0.2)
    assert (found[1:] < found[:-1] / 5).all()


def test_the_inquiry_takes_so_slow_a_wave_for_part_of_the_function():
    """On a fifth of its first interval this noise is smooth: a derivative that counts, not an error of the values."""
    reading = heard(along_the_first, -1.2)

    assert reading.kind[0][0] == "rounding"
    assert reading.width[0, 0] < 0.03


# --- rounding --------------------------------------------------------------------------------------------------------


def expanded(x: float) -> float:
    return x**7 - 7 * x**6 + 21 * x**5 - 35 * x**4 + 35 * x**3 - 21 * x**2 + 7 * x - 1


def test_an_expanded_power_carries_the_rounding_of_its_terms():
    """(x - 1)^7 at x = 1, where value, slope and curvature are 0: 4 to 7e-15 for every k, h = 1e-5 (recomputed)."""
    found = levels(expanded, 1.0, 1e-5)

    assert 3.5e-15 <= found.min() <= found.max() <= 7.5e-15


def test_the_rounding_of_an_expanded_power_is_heard_as_rounding():
    reading = heard(expanded, 1.0)

    assert 2e-15 <= reading.level[0, 0] <= 1.4e-14
    assert reading.kind[0][0] == "rounding"


def test_single_precision_near_one_carries_the_error_of_its_last_place():
    """cos t in single precision near 1: 2^-24/sqrt(12) = 1.72e-8."""
    curve = gradcheck.scan(lambda t: float(np.float32(math.cos(t))), at=0.3)

    assert curve.noise == pytest.approx(2.0**-24 / math.sqrt(12.0), rel=0.3)
    assert curve.noise_kind == "single precision"


# --- solvers ---------------------------------------------------------------------------------------------------------


def decay(p: float) -> float:
    """y(5) of y' = -p·y, y(0) = 1, by an adaptive solver with a loose tolerance."""
    return float(solve_ivp(lambda t, y: -p * y, (0.0, 5.0), [1.0], method="RK45", rtol=1e-3).y[0, -1])


def test_a_loose_tolerance_shifts_value_and_slope_smoothly():
    """RK45, rtol 1e-3: value wrong by 1.6e-3, slope by 1.4e-3 for any step from 1e-2 to 1e-8; there is no noise."""
    true = math.exp(-3.5)
    errors = [abs((decay(0.7 + h) - decay(0.7 - h)) / (2 * h) / (-5 * true) - 1) for h in (1e-2, 1e-4, 1e-6, 1e-8)]

    assert abs(decay(0.7) / true - 1) == pytest.approx(1.6e-3, rel=0.5)
    assert 0.5e-3 <= min(errors) <= max(errors) <= 4e-3


def prey(p: float, method: str, tolerance: float) -> float:
    """y_0(15) of a predator-prey model with growth rate p; the absolute tolerance is 1e-3 of the relative one."""

    def rates(t: float, y: np.ndarray) -> list[float]:
        return [p * y[0] - 0.1 * y[0] * y[1], 0.075 * y[0] * y[1] - 1.5 * y[1]]

    return float(
        solve_ivp(rates, (0.0, 15.0), [10.0, 5.0], method=method, rtol=tolerance, atol=1e-3 * tolerance).y[0, -1]
    )


@pytest.mark.parametrize(("tolerance", "low", "high"), [(1e-3, 1.14e-2, 1.39e-2), (1e-6, 2.4e-5, 2.8e-5)])
def test_a_solver_that_changes_its_steps_is_noisy_at_the_level_of_its_tolerance(tolerance, low, high):
    """Predator and prey, LSODA, h = 1e-4: σ_3..6 = 1.39e-2 .. 1.14e-2 and 2.4e-5 .. 2.8e-5 (order of magnitude)."""
    found = levels(lambda p: prey(p, "LSODA", tolerance), 1.0, 1e-4)[2:]

    assert low / 4 <= found.min() <= found.max() <= high * 4


def test_the_noise_of_that_solver_is_heard_as_an_inner_tolerance():
    reading = heard(lambda p: prey(p, "LSODA", 1e-6), 1.0)

    assert 2.4e-6 <= reading.level[0, 0] <= 2.8e-4
    assert reading.kind[0][0] == "inner tolerance"


def test_a_solver_with_few_decisions_is_smooth_from_close_by():
    """Predator and prey, RK45, rtol 1e-6, h = 1e-4: the levels fall to 1e-14, they do not level off above it."""
    found = levels(lambda p: prey(p, "RK45", 1e-6), 1.0, 1e-4)[2:]

    assert found[1] < found[0] / 100
    assert found[-1] < 1e-12
