"""Rates of the difference witness on the corpus of the benchmark, with a margin below what was measured.

Measured at 40 points a function, seeds 0, 7, 99: median error 8e-15, held 99.90 %, worst miss 1.6 bounds, median
bound/error 12.4, median evaluations 31. Here 8 points of another seed; with 980 samples a true rate of 99.8 % gives at
most 7 misses in more than 99 of 100 draws.
"""

from functools import cache

import numpy as np
import pytest

from benchmarks.corpus import CASES
from benchmarks.estimator import measure
from gradcheck import estimate

POINTS, SEED = 8, 20_261_201


@cache
def samples():
    return measure(estimate, CASES, points=POINTS, seed=SEED)


@pytest.fixture(scope="module")
def misses():
    return np.array([sample.miss for sample in samples()])


def test_nothing_raises():
    assert [sample.case.name for sample in samples() if sample.failure] == []


def test_bounds_hold(misses):
    assert np.sum(misses > 1) <= 7


def test_no_miss_is_far_beyond_its_bound(misses):
    assert np.max(misses) <= 3


def test_few_bounds_are_infinite():
    infinite = [sample for sample in samples() if not np.isfinite(sample.bound)]

    assert len(infinite) <= 0.02 * len(samples())


def test_the_median_error_is_near_the_last_digit():
    assert np.median([sample.relative for sample in samples()]) <= 2e-14


def test_bounds_are_not_much_wider_than_errors():
    ratios = [sample.bound / sample.error for sample in samples() if sample.error > 0 and np.isfinite(sample.bound)]

    assert np.median(ratios) <= 15


def test_a_derivative_takes_few_evaluations():
    assert np.median([sample.calls for sample in samples()]) <= 34


def test_lines_and_parabolas_take_less():
    low = [sample.calls for sample in samples() if sample.case.group == "linear and quadratic"]

    assert np.median(low) <= 12
