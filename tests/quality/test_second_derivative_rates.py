"""Rates of second derivatives from function values, with a margin below what was measured.

Measured with ``python -m benchmarks --only second_derivatives --points 20``, seeds 0, 7, 99. One variable: median error
1.6e-13, held 99.96 % and more, worst miss 1.1 bounds, median bound/error 12, median evaluations 31. Hessians: every
entry held, median error 2e-13 (7e-13 of mixed entries), 19 evaluations per entry. Here two points of another seed, and
models of at most six variables; with 250 samples a true rate of 99.8 % gives at most 3 misses in 99 of 100 draws.
"""

from functools import cache, partial

import numpy as np
import pytest

from benchmarks.corpus import CASES
from benchmarks.estimator import measure
from benchmarks.hessian_corpus import HESSIAN_CASES
from benchmarks.second_derivatives import measure_hessians
from gradcheck import estimate

POINTS, SEED = 2, 20_261_201
FEW = [case for case in HESSIAN_CASES if case.size <= 6]
second = partial(estimate, order=2)


@cache
def samples():
    return measure(second, CASES, points=POINTS, seed=SEED, order=2)


@cache
def hessians():
    return measure_hessians(second, FEW, points=1, seed=SEED)


@cache
def entries():
    return [entry for hessian in hessians() for entry in hessian.entries]


@pytest.mark.parametrize("measured", [samples, hessians])
def test_nothing_raises(measured):
    assert [one.case.name for one in measured() if one.failure] == []


@pytest.mark.parametrize(("measured", "most"), [(samples, 3), (entries, 3)])
def test_bounds_hold(measured, most):
    misses = np.array([one.miss for one in measured()])

    assert np.sum(misses > 1) <= most
    assert np.max(misses) <= 3


@pytest.mark.parametrize(("measured", "most"), [(samples, 3e-13), (entries, 5e-13)])
def test_the_median_error_is_a_few_thousand_roundings(measured, most):
    assert np.median([one.relative for one in measured()]) <= most


@pytest.mark.parametrize("measured", [samples, entries])
def test_bounds_are_not_much_wider_than_errors(measured):
    ratios = [one.bound / one.error for one in measured() if one.error > 0 and np.isfinite(one.bound)]

    assert np.median(ratios) <= 20


@pytest.mark.parametrize("measured", [samples, entries])
def test_few_bounds_are_infinite(measured):
    infinite = [one for one in measured() if not np.isfinite(one.bound)]

    assert len(infinite) <= 0.02 * len(measured())


def test_a_second_derivative_takes_few_evaluations():
    assert np.median([sample.calls for sample in samples()]) <= 34


def test_an_entry_of_a_hessian_takes_fewer():
    assert np.median([hessian.calls / hessian.case.size**2 for hessian in hessians()]) <= 22


def test_what_is_not_mixed_comes_out_as_zero():
    """146 of 147 when measured."""
    zeros = [entry for entry in entries() if entry.truth == 0 and entry.place[0] != entry.place[1]]

    assert len(zeros) >= 15
    assert sum(entry.value != 0 for entry in zeros) <= 1
