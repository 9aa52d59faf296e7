"""How often the noise of values is known: its level and its kind, on functions whose errors are known.

Functions of two seeds that no threshold was chosen on. `python -m benchmarks --only noise` measures the same on more of
them beside the goals (90 % within a factor of 2, 99 % within 4, 95 % of the kinds); the shares asserted here leave room
for what a few unlucky functions cost.
"""

from functools import cache

import pytest

from benchmarks.corpus import CASES
from benchmarks.noise import Heard, by_estimate, by_inquiry, by_scan, measure, share
from benchmarks.noise_corpus import FAMILIES, corpus

SEEDS = (7001, 7002)
#: Families whose levels or kinds are hard: few decisions on the interval, or a step like that of single precision.
HARD = {"relaxation", "quadrature", "halving", "single_intermediate", "single_inside"}


@cache
def heard() -> tuple[Heard, ...]:
    return tuple(measure(by_inquiry, [case for seed in SEEDS for case in corpus(seed)]))


def levels(among: tuple[Heard, ...] | list[Heard], factor: float) -> float:
    return share(one.factor <= factor for one in among if one.counted)


def test_the_level_is_right_within_a_factor_of_two_nearly_always() -> None:
    assert levels(heard(), 2.0) >= 93.0


def test_the_level_is_right_within_a_factor_of_four_but_for_few() -> None:
    assert levels(heard(), 4.0) >= 96.0


def test_what_was_kept_aside_is_no_worse() -> None:
    assert levels([one for one in heard() if one.case.kept_aside], 2.0) >= 92.0


def test_the_kind_is_right_nearly_always() -> None:
    assert share(one.right for one in heard() if one.visible) >= 92.0


@pytest.mark.parametrize("family", sorted(family.__name__ for family in FAMILIES))
def test_each_family_is_recognised(family: str) -> None:
    mine = [one for one in heard() if one.case.family == family and one.visible]

    assert share(one.right for one in mine) >= (60.0 if family in HARD else 90.0)


@pytest.mark.parametrize(("families", "most"), [(("rounding",), 32), (tuple(f.__name__ for f in FAMILIES), 60)])
def test_a_look_costs_thirty_evaluations_where_it_is_rounding_and_twice_that_where_it_is_not(families, most) -> None:
    calls = sorted(one.calls for one in heard() if one.case.family in families)

    assert calls[len(calls) // 2] <= most


def test_smooth_functions_carry_rounding() -> None:
    told = [by_inquiry(case.f, x) for case in CASES for x in case.points(1, 11)]

    assert share(kind in ("rounding", "not examined") for _, kind in told) >= 95.0


@pytest.mark.parametrize(("method", "within"), [(by_scan, 92.0), (by_estimate, 82.0)], ids=["scan", "estimate"])
def test_the_verbs_tell_what_the_inquiry_hears(method, within: float) -> None:
    found = measure(method, corpus(SEEDS[0])[::2])

    assert levels(found, 2.0) >= within
