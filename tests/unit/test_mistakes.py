"""Likely mistakes behind refuted entries: which story is told, about which entries, and how to mend it."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.naming import likely_mistakes

RIGHT = np.array([[1.3, -0.7, 2.9, 11.0]])
SQUARE = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0], [7.0, 8.0, 10.0]])


def case_of(claim, value, *, bound=1e-12, tolerance=1e-8, **more):
    """A claim whose entries are refuted where they part from the value, and confirmed elsewhere."""
    claim, value = np.atleast_2d(np.asarray(claim, dtype=float)), np.atleast_2d(np.asarray(value, dtype=float))
    bounds = np.full(value.shape, bound)
    with np.errstate(invalid="ignore"):
        refuted = ~(np.abs(claim - value) <= tolerance * np.fmax(np.abs(claim), np.abs(value)) + 3 * bounds)
    details = {
        "kind": "gradient" if value.shape[0] == 1 else "jacobian",
        "rel_tol": tolerance,
        "floor": np.zeros(value.shape),
        "name": lambda i, j: f"x[{j}]" if value.shape[0] == 1 else f"f[{i}] by x[{j}]",
        "x": np.full(value.shape[1], np.nan),
    }
    return Case(claim=claim, value=value, bound=bounds, refuted=refuted, confirmed=~refuted, **(details | more))


def told(claim, value, **more):
    """Diagnoses of such a claim."""
    return likely_mistakes(case_of(claim, value, **more))


def only(diagnoses):
    (diagnosis,) = diagnoses
    return diagnosis


def with_entry(place, value, right=RIGHT):
    claim = right.copy()
    claim[np.unravel_index(place, claim.shape)] = value
    return claim


def test_a_right_claim_has_no_story():
    assert told(RIGHT, RIGHT) == ()


def test_one_entry_of_the_wrong_sign():
    diagnosis = only(told(with_entry(1, 0.7), RIGHT))

    assert (diagnosis.code, diagnosis.entries) == ("sign-flipped", ("x[1]",))
    assert "lost minus" in diagnosis.text


def test_all_entries_of_the_wrong_sign():
    diagnosis = only(told(-RIGHT, RIGHT))

    assert (diagnosis.code, len(diagnosis.entries)) == ("sign-flipped", 4)
    assert "a maximum written as a minimum" in diagnosis.text


def test_an_entry_that_was_never_filled_in():
    diagnosis = only(told(with_entry(2, 0.0), RIGHT))

    assert (diagnosis.code, diagnosis.entries) == ("zero-entry", ("x[2]",))
    assert "exactly zero" in diagnosis.text


def test_two_entries_in_each_others_place():
    diagnosis = only(told([[1.3, 2.9, -0.7, 11.0]], RIGHT))

    assert (diagnosis.code, set(diagnosis.entries)) == ("swapped-entries", {"x[1]", "x[2]"})
    assert "order of the variables" in diagnosis.text


def test_two_entries_of_one_row_of_a_jacobian_in_each_others_place():
    claim = SQUARE.copy()
    claim[1] = [4.0, 6.0, 5.0]

    assert only(told(claim, SQUARE)).entries == ("f[1] by x[1]", "f[1] by x[2]")


def test_two_exchanges_are_both_told():
    diagnoses = told([[-0.7, 1.3, 11.0, 2.9]], RIGHT)

    assert {d.code for d in diagnoses} == {"swapped-entries"}
    assert {name for d in diagnoses for name in d.entries} == {"x[0]", "x[1]", "x[2]", "x[3]"}


@pytest.mark.parametrize(
    "factor",
    [
        2.0,
        0.5,
        3.0,
        4.0,
        0.25,
        math.log(10),
        math.pi,
        -2.0,
    ],
)
def test_a_factor_that_has_a_name_is_told_of_a_single_entry(factor):
    diagnosis = only(told(with_entry(0, factor * 1.3), RIGHT))

    assert (diagnosis.code, diagnosis.entries) == ("constant-factor", ("x[0]",))


@pytest.mark.parametrize(("factor", "word"), [(2.0, "is 2 times"), (0.5, "1/2"), (math.log(10), "ln 10"), (-2.0, "−2")])
def test_the_factor_stands_in_the_text(factor, word):
    assert word in only(told(with_entry(0, factor * 1.3), RIGHT)).text


def test_any_factor_is_told_where_several_entries_share_it():
    diagnosis = only(told(1.7 * RIGHT, RIGHT))

    assert (diagnosis.code, len(diagnosis.entries)) == ("constant-factor", 4)
    assert "1.7 times" in diagnosis.text


@pytest.mark.parametrize("factor", [1.7, 1 + 1e-6, 0.83])
def test_a_factor_without_a_name_in_one_entry_alone_is_no_story(factor):
    assert only(told(with_entry(0, factor * 1.3), RIGHT)).code == "unknown"


@pytest.mark.parametrize("factor", [math.pi / 180, 180 / math.pi])
def test_degrees_for_radians(factor):
    diagnosis = only(told(with_entry(3, factor * 11.0), RIGHT))

    assert (diagnosis.code, diagnosis.entries) == ("degrees-for-radians", ("x[3]",))


@pytest.mark.parametrize("factor", [1e3, 1e-3, 1e6, 1e-6, 60.0, 1 / 3600, 10.0, 0.01, 1e-4, 1e5])
def test_a_conversion_between_units(factor):
    assert only(told(with_entry(0, factor * 1.3), RIGHT)).code == "unit-factor"


@pytest.mark.parametrize("factor", [4.0, 0.25])
def test_a_mean_for_a_sum_over_all_variables(factor):
    diagnosis = only(told(factor * RIGHT, RIGHT))

    assert diagnosis.code == "mean-for-sum"
    assert "4 variables" in diagnosis.text


def test_a_mean_for_a_sum_over_ten_variables_is_no_unit():
    right = np.arange(1.0, 11.0)

    assert only(told(right / 10, right)).code == "mean-for-sum"


def test_a_transposed_jacobian():
    diagnosis = only(told(SQUARE.T, SQUARE))

    assert diagnosis.code == "transposed"
    assert len(diagnosis.entries) == 6
    assert "claim.T" in diagnosis.text


def test_a_jacobian_whose_transpose_fits_but_for_one_entry_is_not_called_transposed():
    claim = SQUARE.T.copy()
    claim[0, 0] = 1.7

    assert "transposed" not in {d.code for d in told(claim, SQUARE)}


def test_different_mistakes_in_different_entries_are_told_apart():
    diagnoses = told([[0.0, 0.7, 2.9, 22.0]], RIGHT)

    assert {d.code: d.entries for d in diagnoses} == {
        "zero-entry": ("x[0]",),
        "sign-flipped": ("x[1]",),
        "constant-factor": ("x[3]",),
    }


def test_what_no_story_explains_is_said_to_be_unknown():
    diagnosis = only(told([[1.4, -0.7, 2.9, 11.2]], RIGHT))

    assert (diagnosis.code, diagnosis.entries) == ("unknown", ("x[0]", "x[3]"))
    assert "derive them afresh" in diagnosis.text


def test_a_claim_that_is_not_a_number_has_no_simple_story():
    assert only(told(with_entry(0, math.nan), RIGHT)).code == "unknown"


def test_a_value_claimed_where_the_derivative_is_zero_has_no_simple_story():
    assert only(told([[1.0, -0.7]], [[0.0, -0.7]])).code == "unknown"


def test_a_story_needs_no_more_digits_than_the_witness_has():
    witness = RIGHT * (1 + 1e-5)

    assert only(told(with_entry(1, 0.7), witness, bound=1e-3)).code == "sign-flipped"


def test_a_story_that_fails_in_digits_that_the_witness_does_have_is_not_told():
    assert only(told(with_entry(1, 0.7001), RIGHT)).code == "unknown"


entries = st.floats(-1e3, 1e3).filter(lambda v: abs(v) > 1e-3)


@given(st.lists(st.tuples(entries, entries | st.just(0.0) | st.just(math.nan)), min_size=1, max_size=6))
def test_every_refuted_entry_is_explained_exactly_once(pairs):
    value, claim = (np.array([[pair[k] for pair in pairs]]) for k in (0, 1))
    names = [name for diagnosis in told(claim, value) for name in diagnosis.entries]

    with np.errstate(invalid="ignore"):
        wrong = np.flatnonzero(~(np.abs(claim - value)[0] <= 1e-8 * np.abs(value)[0] + 3e-12))
    assert sorted(names) == sorted(f"x[{j}]" for j in wrong)


@given(st.lists(entries, min_size=2, max_size=6), st.sampled_from([-1.0, 2.0, 0.5, math.pi / 180, 1e3]))
def test_the_unit_of_the_function_changes_no_story(value, factor):
    right = np.array([value])
    codes = [
        [d.code for d in told(factor * scale * right, scale * right, bound=1e-12 * scale)] for scale in (1.0, 2.0**20)
    ]

    assert codes[0] == codes[1]
