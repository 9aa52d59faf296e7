"""Numbers, names and codes as words."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from gradcheck import wording
from gradcheck.records.advice import Family
from gradcheck.records.finding import FindingCode, Severity
from gradcheck.records.verdict import DiagnosisCode

finite = st.floats(allow_nan=False, allow_infinity=False)


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.0, "0"),
        (-0.0, "0"),
        (4.0, "4"),
        (1234.5678, "1235"),
        (999999.0, "999999"),
        (1e6, "1e6"),
        (-2.5e-7, "-2.5e-7"),
        (0.001234, "0.001234"),
        (0.99999, "1"),
        (1e-300, "1e-300"),
        (5e-324, "4.941e-324"),
        (math.nan, "nan"),
        (math.inf, "inf"),
        (-math.inf, "-inf"),
    ],
)
def test_a_number_is_written_as_short_as_it_can_be_read(value, text):
    assert wording.number(value) == text


@given(st.floats(-1e300, 1e300), st.integers(1, 17))
def test_a_number_read_back_differs_by_less_than_its_last_digit(value, digits):
    read_back = float(wording.number(value, digits))

    assert read_back == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits) + 1e-15, abs=5e-324)


@given(finite)
def test_seventeen_digits_give_a_number_back_exactly(value):
    assert float(wording.number(value, 17)) == value


def test_a_value_is_written_down_to_the_second_digit_that_its_bound_leaves_in_doubt():
    assert wording.with_bound(3.14159265, 2.2e-4) == "3.14159 ± 2.2e-4"


@pytest.mark.parametrize(
    ("value", "bound", "text"),
    [
        (0.0, 1e-16, "0 ± 1e-16"),
        (1e-20, 3e-14, "1e-20 ± 3e-14"),
        (1.5, math.inf, "1.5 ± inf"),
        (math.nan, math.inf, "nan ± inf"),
        (2.0, 0.0, "2 ± 0"),
        (2.0, math.nan, "2 ± nan"),
    ],
)
def test_a_bound_that_says_little_or_everything_is_written_too(value, bound, text):
    assert wording.with_bound(value, bound) == text


@given(st.floats(1e-3, 1e3), st.integers(1, 12))
def test_two_numbers_that_agree_to_some_digits_look_different_with_the_digits_to_tell_them_apart(value, agreed):
    other = value * (1 + 10.0**-agreed)
    digits = wording.digits_to_tell_apart(agreed)

    assert wording.number(value, digits) != wording.number(other, digits)


@pytest.mark.parametrize(
    ("digits", "text"), [(11.4, "11"), (0.3, "0"), (-2.0, "0"), (math.inf, "all"), (-math.inf, "0"), (math.nan, "-")]
)
def test_digits_that_agree_are_counted_in_whole_ones(digits, text):
    assert wording.agreed_digits(digits) == text


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "under 1 ms"),
        (0.0123, "12 ms"),
        (4.25, "4.2 s"),
        (59.99, "60.0 s"),
        (61.0, "1 min 1 s"),
        (7500.0, "2 h 5 min"),
        (math.nan, "unknown time"),
    ],
)
def test_a_duration_has_the_unit_that_a_person_would_use(seconds, text):
    assert wording.seconds(seconds) == text


@pytest.mark.parametrize(
    ("amount", "text"), [(0, "no entries"), (1, "1 entry"), (2, "2 entries"), (1200000, "1,200,000 entries")]
)
def test_a_count_agrees_with_its_noun(amount, text):
    assert wording.count(amount, "entry", "entries") == text


def test_a_long_list_of_names_is_cut_and_tells_how_many_more_there_are():
    assert wording.listed([f"x[{i}]" for i in range(1000)], limit=2) == "x[0], x[1] and 998 more"


def test_a_short_list_of_names_is_complete():
    assert wording.listed(["a", "b", "c"]) == "a, b and c"


def test_a_narrow_bracket_is_told_by_its_middle_because_its_ends_would_look_the_same():
    assert wording.bracket(1.2 - 1e-9, 1.2 + 1e-9, "m") == "at 1.2 ± 1e-9 m"


def test_a_wide_bracket_is_told_by_its_ends():
    assert wording.bracket(1.2, 1.3) == "between 1.2 and 1.3"


def test_a_bracket_without_ends_is_told_by_its_ends():
    assert wording.bracket(-math.inf, math.inf) == "between -inf and inf"


def test_a_bracket_around_zero_is_told_by_its_ends():
    assert wording.bracket(-1e-9, 2e-9) == "between -1e-9 and 2e-9"


@given(st.text(max_size=60), st.integers(4, 40))
def test_a_shortened_name_fits(name, width):
    assert len(wording.shortened(name, width)) <= width


def test_a_name_is_shortened_in_the_middle():
    assert wording.shortened("fuselage.frame[120].thickness", 16) == "fuselag..ickness"


def test_names_that_differ_in_the_middle_still_differ_when_they_are_shortened():
    names = [f"fuselage.frame[{i}].thickness_of_the_skin" for i in range(100)]

    assert len(set(wording.shortened_apart(names, 18))) == 100


def test_names_that_would_look_alike_are_told_apart_although_another_name_is_quite_different():
    names = [*(f"fuselage.frame[{i}].thickness_of_the_skin" for i in range(9)), "span"]

    assert len(set(wording.shortened_apart(names, 18))) == 10


@given(st.lists(st.text(max_size=30), max_size=6), st.integers(8, 20))
def test_names_that_are_shortened_together_all_fit(names, width):
    assert all(len(name) <= width for name in wording.shortened_apart(names, width))


def test_a_models_message_cannot_move_the_cursor_or_break_the_line():
    assert wording.clean("bad\x1b[2J\r\nnews\t!") == "bad [2J news !"


@pytest.mark.parametrize(
    ("words", "codes"),
    [
        (wording.FINDING_WORDS, FindingCode),
        (wording.DIAGNOSIS_WORDS, DiagnosisCode),
        (wording.SEVERITY_WORDS, Severity),
        (wording.FAMILY_WORDS, Family),
    ],
    ids=["findings", "diagnoses", "severities", "families"],
)
def test_every_code_has_its_own_words(words, codes):
    assert set(words) == set(codes)
    assert len(set(words.values())) == len(words)
