"""Planted mistakes are named and honest claims are left alone, at rates that are stated with their counts.

The corpus (`mistake_corpus`) was written before any of its claims was checked. With no failure among N independent
claims, the true rate of failure lies below 3/N with 95 % confidence; `python -m benchmarks --only verdicts` measures
more points.
"""

import functools

import numpy as np
import pytest

import gradcheck
from benchmarks.verdicts import Told, ask, flipped, kinds_of_noise, shortcomings
from gradcheck import Verdict
from tests.quality.mistake_corpus import (
    INNER_ITERATIONS,
    MISTAKES,
    PLAIN,
    WRAPPINGS,
    Claim,
    noisy_claims,
    planted,
    right_claims,
)

#: Points of each model, and the most variables: what a minute allows. The corpus has models of up to 50 variables.
POINTS, SEED, MOST = 2, 11, 9


@functools.cache
def right() -> list[Told]:
    return ask(right_claims(POINTS, SEED))


@functools.cache
def wrong(mistake: str) -> list[Told]:
    return ask([claim for claim in planted(POINTS, SEED, most=MOST) if claim.mistake == mistake])


@functools.cache
def noisy() -> dict[str, list[Told]]:
    return kinds_of_noise(ask(noisy_claims(POINTS, SEED)))


@functools.cache
def noisy_and_wrong() -> dict[str, list[Told]]:
    return kinds_of_noise(ask(flipped(noisy_claims(POINTS, SEED))))


def share(marks: list[bool]) -> float:
    return sum(marks) / len(marks)


# --- the corpus itself -----------------------------------------------------------------------------------------------


def test_the_corpus_is_large_enough_to_speak_of_rates():
    claims = planted(POINTS, SEED, most=MOST)

    assert len({claim.name for claim in claims}) >= 12
    assert {claim.mistake for claim in claims} == set(MISTAKES)
    assert all(claim.wrong.any() for claim in claims)
    assert min(len(wrong(mistake)) for mistake in MISTAKES if mistake != "transposed") >= 60


def complex_step(claim: Claim) -> np.ndarray:
    steps = claim.x + 1e-30j * np.eye(claim.x.size)
    return np.stack([np.imag(claim.function(row)) / 1e-30 for row in steps], axis=-1)


def test_right_claims_are_right():
    """By complex steps, which need nothing of the library."""
    for claim in right_claims(POINTS, SEED):
        largest = np.abs(claim.right).max(initial=1e-300)
        np.testing.assert_allclose(complex_step(claim), claim.right, rtol=0, atol=1e-12 * largest, err_msg=claim.name)


@pytest.mark.parametrize("name", [each[0] for each in INNER_ITERATIONS])
def test_gradients_of_inner_iterations_are_those_of_the_converged_model(name):
    _, program, gradient, x0 = next(each for each in INNER_ITERATIONS if each[0] == name)

    for i, right_slope in enumerate(gradient(x0)):
        step = 1e-5 * x0[i] * np.eye(x0.size)[i]
        slope = (program(x0 + step, 1e-14) - program(x0 - step, 1e-14)) / (2e-5 * x0[i])
        assert slope == pytest.approx(right_slope, rel=1e-5)


# --- right claims about smooth models --------------------------------------------------------------------------------


def test_no_right_claim_about_a_smooth_model_is_accused():
    accused = [told for told in right() if told.entries(Verdict.REFUTED).any()]

    assert accused == [], shortcomings(accused)


def test_ninety_nine_of_a_hundred_right_claims_about_smooth_models_are_confirmed():
    """Undecided is no success."""
    assert share([told.verdict == Verdict.CONFIRMED for told in right()]) >= 0.99, shortcomings(right())


def test_ninety_nine_of_a_hundred_right_entries_are_confirmed():
    marks = np.concatenate([np.ravel(told.entries(Verdict.CONFIRMED)) for told in right()])

    assert marks.mean() >= 0.99


def test_a_right_claim_about_a_smooth_model_costs_six_evaluations_a_variable_and_three_for_all():
    spent = [(told.report.evaluations - 3) / told.claim.x.size for told in right()]

    assert np.median(spent) <= 6


# --- planted mistakes ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("mistake", MISTAKES)
def test_every_planted_mistake_is_refuted(mistake):
    missed = [told for told in wrong(mistake) if told.verdict != Verdict.REFUTED]

    assert missed == [], shortcomings(missed)


@pytest.mark.parametrize("mistake", MISTAKES)
def test_exactly_the_wrong_entries_are_named(mistake):
    inexact = [told for told in wrong(mistake) if not told.named_exactly]

    assert inexact == [], shortcomings(inexact)


@pytest.mark.parametrize("mistake", MISTAKES)
def test_no_wrong_entry_is_confirmed(mistake):
    assert [told for told in wrong(mistake) if told.believed] == []


@pytest.mark.parametrize("mistake", MISTAKES)
def test_the_planted_mistake_is_the_story_in_nineteen_of_twenty(mistake):
    assert share([told.told_rightly for told in wrong(mistake)]) >= 0.95, shortcomings(wrong(mistake))


# --- noisy models ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("noise", WRAPPINGS)
def test_no_right_claim_about_a_noisy_model_is_accused(noise):
    accused = [told for told in noisy()[noise] if told.entries(Verdict.REFUTED).any()]

    assert accused == [], shortcomings(accused)


@pytest.mark.parametrize("noise", WRAPPINGS)
def test_noise_buys_no_confirmation(noise):
    """Values good to 1e-6 cannot confirm a derivative to 1e-8."""
    bought = [told for told in noisy()[noise] if (told.entries(Verdict.CONFIRMED) & (told.claim.share >= PLAIN)).any()]

    assert bought == [], shortcomings(bought)


@pytest.mark.parametrize("noise", WRAPPINGS)
def test_an_undecided_entry_that_stands_out_from_the_noise_tells_its_digits(noise):
    digits = np.concatenate(
        [told.digits[(told.claim.share >= PLAIN) & told.entries(Verdict.UNDECIDED)] for told in noisy()[noise]]
    )

    assert digits.size >= 40
    assert np.all(digits > 0)


@pytest.mark.parametrize("noise", WRAPPINGS)
def test_an_undecided_entry_says_why(noise):
    for told in noisy()[noise]:
        reasons = np.array(told.report.entries.reason, dtype=object)
        assert all(reasons[np.ravel(told.entries(Verdict.UNDECIDED))]), told.claim.name


@pytest.mark.parametrize("noise", WRAPPINGS)
def test_a_sign_that_is_wrong_is_refuted_through_the_noise(noise):
    missed = [told for told in noisy_and_wrong()[noise] if not told.named_exactly]

    assert missed == [], shortcomings(missed)


INNER = "inner iteration"


@pytest.mark.parametrize(
    "name",
    [
        "orbit by simple iteration",
        "pipe by simple iteration",
        "frame by Jacobi sweeps",
        "weir by halving",
    ],
)
def test_no_right_claim_about_a_model_with_an_inner_iteration_is_accused(name):
    accused = [t for t in noisy()[INNER] if t.claim.name == name and t.entries(Verdict.REFUTED).any()]

    assert accused == [], shortcomings(accused)


def orbit_distance_after(x, sweeps):
    """The program of `orbit_distance` once its iteration count is fixed; takes complex numbers."""
    anomaly, eccentricity, axis = x
    eccentric = anomaly
    for _ in range(sweeps):
        eccentric = anomaly + eccentricity * np.sin(eccentric)
    return axis * (1.0 - eccentricity * np.cos(eccentric))


def test_between_two_changes_of_the_iteration_count_the_witness_is_right_about_the_program():
    """Which is why a right claim about the *model* is refuted there: its slope is another one, 1e-6 away."""
    _, program, gradient, x = INNER_ITERATIONS[0]
    sweeps = next(k for k in range(1, 99) if orbit_distance_after(x, k) == program(x, 1e-6))
    of_program = [orbit_distance_after(x + 1e-30j * row, sweeps).imag / 1e-30 for row in np.eye(3)]
    answer = gradcheck.estimate(lambda y: program(y, 1e-6), at=x)

    assert np.all(np.abs(answer.value - of_program) <= answer.bound)
    assert np.abs(of_program - gradient(x)).max() == pytest.approx(1e-6, rel=0.5)


def test_a_sign_that_is_wrong_is_refuted_through_an_inner_iteration():
    missed = [told for told in noisy_and_wrong()[INNER] if told.verdict != Verdict.REFUTED]

    assert missed == [], shortcomings(missed)
