"""What a narrow interval says is believed only where wider ones are explained: by a wave or a kink, not by digits."""

import math

import mpmath
import numpy as np
import pytest

import gradcheck
from gradcheck import Verdict
from gradcheck.witnesses.outward import Outward


def verdict(function, at, claim):
    report = gradcheck.check(function, at, gradient=claim, on_refuted="return", on_undecided="pass")
    return report.verdict


def holds(function, at, slope):
    answer = gradcheck.estimate(function, at=at)
    return abs(float(answer.value) - slope) <= float(answer.bound)


@pytest.mark.parametrize("distance", [1e-5, 1e-4, -1e-4, 3e-4, 1e-2, -1e-2])
@pytest.mark.parametrize("change", [1e-4, 1e-2, 1.0])
def test_beside_a_kink_the_slope_of_the_own_side_is_confirmed_and_that_of_the_other_refuted(distance, change):
    x = 1.7

    def model(t):
        return math.sin(t) + change * abs(t - x * (1 + distance))

    own = math.cos(x) - math.copysign(change, distance)

    assert verdict(model, x, own) == Verdict.CONFIRMED
    assert verdict(model, x, own + math.copysign(2 * change, distance)) == Verdict.REFUTED


@pytest.mark.parametrize("x", [1e-7, 1.7e-7, 2.4e-7, 5e-7, 1e-6, 3e-6, 1e-5, 1e-4])
@pytest.mark.parametrize(
    ("model", "slope"),
    [
        (lambda t: (1 - math.cos(t)) / t**2, lambda t: -t / 12),
        (lambda t: (math.exp(t) - 1) / t, lambda t: 0.5 + t / 3),
    ],
    ids=["1 - cos", "exp - 1"],
)
def test_where_values_stand_on_their_last_digits_a_right_claim_is_not_refuted(model, slope, x):
    assert verdict(model, x, slope(x)) != Verdict.REFUTED


@pytest.mark.parametrize("power", range(1, 13))
@pytest.mark.parametrize(("x", "phase"), [(0.31, 0.4), (-7.3, 2.9), (113.7, 5.1)])
def test_the_bound_holds_for_waves_of_any_length(power, x, phase):
    frequency = 1.3717 * 10.0**power / abs(x)
    with mpmath.workdps(50):
        slope = float(frequency * mpmath.cos(mpmath.mpf(frequency) * x + phase))

    assert holds(lambda t: 2.5 + math.sin(frequency * t + phase), x, slope)


@pytest.mark.parametrize("height", [1e-12, 1e-9, 1e-6])
def test_a_faint_fast_wave_is_part_of_the_function(height):
    frequency, x = 3.1e6, 0.7713
    answer = gradcheck.estimate(lambda t: t * t + height * math.sin(frequency * t), at=x)
    slope = 2 * x + height * frequency * math.cos(frequency * x)

    assert abs(float(answer.value) - slope) <= float(answer.bound)
    assert height < 1e-9 or float(answer.bound) < 0.1 * height * frequency


def test_small_values_whose_rounding_is_larger_than_their_size_are_noise_and_not_structure():
    answer = gradcheck.estimate(lambda t: (1 + t * t) ** 2 + 3 - 4, at=0.0)

    assert abs(float(answer.value)) <= float(answer.bound) < 1e-12


def course(*tails, flat=True, start=1e-6, limit=1e-1):
    """Outward, after intervals that left over these tails; 0 stands for the floor."""
    outward = Outward.begin(start, limit, np.array([1.0]), np.array([True]))
    half = start
    for tail in tails:
        half = outward.next_half(half)
        if not half:
            break
        found = FakeFit(np.array([[tail]]), np.array([[flat]]))
        outward.hear(found, 0, half, np.array([tail == 0.0]))
    return outward


class FakeFit:
    def __init__(self, tail, flat):
        self.tail, self.flat = tail, flat
        self.before = np.where(flat, tail, 1e3 * tail)
        self.variation = np.ones_like(tail)


def test_what_is_left_over_and_stays_as_large_is_a_jump():
    assert course(0.0, 0.5, 1.0).jumps.all()


def test_what_grows_with_the_interval_is_a_kink():
    outward = course(0.0, 1e-5, 1.6e-4 * 4)

    assert outward.smooth.all()
    assert not outward.jumps.any()


def test_what_decays_is_a_wave():
    assert course(0.0, 1e-6, flat=False).smooth.all()


def test_the_last_interval_is_the_one_that_failed():
    outward = course(*[0.0] * 12)

    assert outward.asked.all()
    assert outward.next_half(0.1) == 0.0


@pytest.mark.parametrize("width", [1e-2, 1e-3, 1e-4, 1e-6])
@pytest.mark.parametrize(
    ("shape", "x", "slope", "bend"),
    [
        (lambda t, w: math.exp(-(((t - 1.1) / w) ** 2)) + t * t, 1.1, 2.2, lambda w: 2 - 2 / w**2),
        (lambda t, w: 1 / ((t - 1.3) ** 2 + w * w), 1.3, 0.0, lambda w: -2 / w**4),
        (lambda t, w: math.sqrt(t * t + w * w) + 0.5 * t, 0.0, 0.5, lambda w: 1 / w),
    ],
    ids=["well", "resonance", "rounded corner"],
)
def test_on_top_of_a_narrow_peak_both_derivatives_hold(shape, x, slope, bend, width):
    first, second = (gradcheck.estimate(lambda t: shape(t, width), at=x, order=order) for order in (1, 2))

    assert abs(float(first.value) - slope) <= float(first.bound) < np.inf
    assert abs(float(second.value) - bend(width)) <= float(second.bound) < 1e-3 * abs(bend(width))


@pytest.mark.parametrize("budget", range(2, 60, 3))
@pytest.mark.parametrize(("frequency", "x"), [(9700.0, 1.0), (300.0, 2.5), (1.0, 0.7)])
def test_a_bound_holds_wherever_the_budget_ends(frequency, x, budget):
    answer = gradcheck.estimate(lambda t: math.sin(frequency * t), at=x, budget=budget)
    error = abs(float(answer.value) - frequency * math.cos(frequency * x))

    assert float(answer.bound) == np.inf or error <= float(answer.bound)


@pytest.mark.parametrize("size", [1, 2, 3, 4, 10])
def test_equal_variables_do_not_hide_what_all_have_in_common(size):
    def model(x):
        return float(np.sum(np.exp(x) + 0.5 * (x - 1) * np.exp(-(((x - 1) / 1e-5) ** 2))))

    assert verdict(model, np.ones(size), np.exp(np.ones(size))) == Verdict.REFUTED


@pytest.mark.parametrize("width", [1e-2, 1e-3, 1e-4, 1e-5])
def test_a_boundary_layer_at_a_bound_is_seen(width):
    def model(t):
        return t * t + 10 * (t - 1) * math.exp(-(t - 1) / width)

    answer = gradcheck.estimate(model, at=1.0, bounds=[(1.0, 3.0)])

    assert abs(float(answer.value) - 12) <= float(answer.bound) < 1e-6
    for claim, expected in ((12.0, Verdict.CONFIRMED), (2.0, Verdict.REFUTED)):
        report = gradcheck.check(model, 1.0, gradient=claim, bounds=[(1.0, 3.0)], on_refuted="return")
        assert report.verdict == expected


@pytest.mark.parametrize("upper", [False, True])
def test_a_smooth_model_at_a_bound_costs_no_more_than_one_value_for_that(upper):
    bounds = [(-2.0, 0.7)] if upper else [(0.7, 3.0)]
    answer = gradcheck.estimate(lambda t: math.sin(2 * t) + math.exp(t), at=0.7, bounds=bounds)

    assert abs(float(answer.value) - (2 * math.cos(1.4) + math.exp(0.7))) <= float(answer.bound) < 1e-10
    assert answer.evaluations <= 1 + 27 + 7


@pytest.mark.parametrize("scale", [1e-3, 1.0, 1e4])
def test_a_slope_that_grows_as_a_logarithm_has_no_bound(scale):
    answer = gradcheck.estimate(lambda t: t * math.log(t / scale) if t > 0 else 0.0, at=0.0, bounds=[(0.0, scale)])

    assert float(answer.bound) == math.inf
