"""The complex-step witness on single constructs: right within its bound, or declared unsafe; never silently wrong."""

import itertools

import numpy as np
import pytest

from tests.complex_constructs import ADAPTIVE, ALL, CARRIED, CAST, LOST, POINTS, RAISING
from tests.hearing import complex_step_on, session_of


def difference(model, x):
    """The derivative by Romberg's table of central differences in real numbers, and how far its last entries part."""
    steps = 0.04 * 2.0 ** -np.arange(5)
    row = [(float(model(x + h)) - float(model(x - h))) / ((x + h) - (x - h)) for h in steps]
    ends = [row[-1]]
    for order in range(1, len(steps)):
        row = [(4**order * fine - coarse) / (4**order - 1) for coarse, fine in itertools.pairwise(row)]
        ends.append(row[-1])
    return ends[-1], max(abs(ends[-1] - ends[-2]), 1e-11 * (1 + abs(ends[-1])))


def hear(name, x):
    return complex_step_on(session_of(ALL[name], x))


each_point = pytest.mark.parametrize("x", POINTS)


def test_there_are_at_least_67_constructs():
    assert len(ALL) >= 67


@each_point
@pytest.mark.parametrize("name", ALL)
def test_no_construct_is_silently_wrong(name, x):
    testimony = hear(name, x)
    if np.isfinite(testimony.bound[0, 0]):
        reference, uncertainty = difference(ALL[name], x)

        assert abs(testimony.value[0, 0] - reference) <= testimony.bound[0, 0] + uncertainty
    else:
        assert testimony.works is False
        assert testimony.reason


@each_point
@pytest.mark.parametrize("name", [*LOST, *CAST])
def test_a_lost_imaginary_part_is_noticed(name, x):
    reference, _ = difference(ALL[name], x)

    testimony = hear(name, x)

    assert abs(reference) > 1e-3  # so that a quotient of 0 is wrong
    assert testimony.works is False
    assert np.isinf(testimony.bound).all()


@each_point
@pytest.mark.parametrize("name", [*CAST, *RAISING])
def test_a_model_that_raises_on_complex_numbers_is_unavailable_and_costs_two_evaluations(name, x):
    testimony = hear(name, x)

    assert testimony.works is False
    assert "raises on complex numbers" in testimony.reason
    assert testimony.spent == 2


@each_point
@pytest.mark.parametrize("name", CARRIED)
def test_what_carries_the_imaginary_part_through_is_trusted_to_eleven_digits(name, x):
    testimony = hear(name, x)

    assert testimony.works is True
    assert testimony.bound[0, 0] < 1e-11 * abs(testimony.value[0, 0])


@pytest.mark.parametrize("name", ADAPTIVE)
def test_an_adaptive_solver_is_not_trusted_beyond_its_step_control(name):
    testimony = hear(name, 0.7)

    assert testimony.bound[0, 0] > 1e-9
