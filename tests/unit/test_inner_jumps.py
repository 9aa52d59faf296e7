"""Small jumps explain a small difference between a claim and the program, and no other."""

import math

import numpy as np
import pytest

import gradcheck
from gradcheck.claims.desk import INNER_JUMPS
from gradcheck.records.verdict import Verdict


def iterated(x, stop=1e-6):
    """y = cos(y) + x by plain iteration, stopped when it moves less than `stop`."""
    y = 0.5
    while True:
        following = 0.4 * math.cos(y) + x[0]
        if abs(following - y) < stop:
            return following * x[1]
        y = following


def exact_gradient(x):
    y = 0.5
    for _ in range(200):
        y = 0.4 * math.cos(y) + x[0]
    return np.array([x[1] / (1 + 0.4 * math.sin(y)), y])


POINTS = [[0.3, 1.2], [0.55, 0.8], [0.81, 2.0], [1.02, 1.1]]


@pytest.mark.parametrize("at", POINTS)
def test_the_gradient_of_the_converged_model_is_not_accused(at):
    report = gradcheck.check(iterated, at=at, gradient=exact_gradient, on_undecided="pass")

    assert Verdict.REFUTED not in report.entries.verdict


def test_the_reason_names_the_jumps():
    reports = [gradcheck.check(iterated, at=at, gradient=exact_gradient, on_undecided="pass") for at in POINTS]

    assert any(INNER_JUMPS in report.entries.reason for report in reports)


@pytest.mark.parametrize("at", POINTS)
@pytest.mark.parametrize("off", [1.01, 1.0005])
def test_a_difference_that_the_jumps_do_not_explain_is_refuted(at, off):
    report = gradcheck.check(iterated, at=at, gradient=lambda x: exact_gradient(x) * [off, 1.0], on_refuted="return")

    assert report.entries.verdict[0] == Verdict.REFUTED


def test_a_smooth_model_excuses_nothing():
    report = gradcheck.check(
        lambda x: math.exp(x[0]), at=[0.7], gradient=[math.exp(0.7) * (1 + 1e-7)], on_refuted="return"
    )

    assert report.verdict == Verdict.REFUTED
