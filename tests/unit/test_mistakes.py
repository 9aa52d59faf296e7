"""Likely mistakes behind refuted entries: which story is told, about which entries, and how to mend it."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gradcheck.claims.mistakes.case import Block, Case
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


# --- stories about single entries -------------------------------------------------------------------------------------

LONG = np.array([[0.31, -1.72, 2.45, 0.87, -3.1, 1.93, 0.64, -0.29]])
X = np.array([0.7, 1.3, 0.37, 2.2, 0.55, 1.9, 0.81, 3.4])


@pytest.mark.parametrize(
    ("factor", "words"),
    [(0.3048, "feet and metres"), (4.1868, "calories and joules"), (1 / 9.80665, "1/9.80665"), (1e5, "1e5")],
)
def test_a_conversion_says_between_which_units(factor, words):
    diagnosis = only(told(with_entry(2, factor * 2.9), RIGHT))

    assert diagnosis.code == "unit-factor"
    assert words in diagnosis.text


@pytest.mark.parametrize(("factor", "words"), [(1 / 14, "1/14"), (14.0, "14 terms")])
def test_a_whole_number_in_all_entries_is_a_number_of_observations_though_nobody_told_it(factor, words):
    diagnosis = only(told(factor * LONG, LONG))

    assert diagnosis.code == "mean-for-sum"
    assert words in diagnosis.text


def test_a_whole_number_in_some_entries_is_no_number_of_observations():
    claim = LONG.copy()
    claim[0, :3] *= 14.0

    assert only(told(claim, LONG)).code == "constant-factor"


CHAINS = [
    ("x", lambda x: x),
    ("1/x", lambda x: 1 / x),
    ("exp(x)", np.exp),
    ("exp(-x)", lambda x: np.exp(-x)),
    ("2x", lambda x: 2 * x),
    ("x(1-x)", lambda x: x * (1 - x)),
    ("logit", lambda x: 1 / (1 + np.exp(-x)) * (1 - 1 / (1 + np.exp(-x)))),
]


@pytest.mark.parametrize(("name", "factor"), CHAINS, ids=[name for name, _ in CHAINS])
def test_a_factor_of_the_chain_rule_is_told_of_a_single_entry(name, factor):
    diagnosis = only(told(with_entry(2, 2.9 * factor(0.37)), RIGHT, x=np.array([0.7, 1.3, 0.37, 2.2])))

    assert (diagnosis.code, diagnosis.entries) == ("missing-chain-rule", ("x[2]",))
    assert "x[2] = 0.37" in diagnosis.text


def test_the_derivative_by_the_logarithm_of_every_variable_is_one_story():
    diagnosis = only(told(LONG * X, LONG, x=X))

    assert (diagnosis.code, len(diagnosis.entries)) == ("missing-chain-rule", 8)
    assert "all 8 entries" in diagnosis.text


def test_where_the_variable_is_two_a_doubled_entry_is_called_doubled_and_the_other_story_is_told_too():
    diagnosis = only(told(with_entry(2, 5.8), RIGHT, x=np.array([0.7, 1.3, 2.0, 2.2])))

    assert diagnosis.code == "constant-factor"
    assert "x would fit as well" in diagnosis.text


def test_one_chain_rule_for_two_variables_beats_a_factor_for_one_of_them():
    claim = np.array([[1.3 * 2.0, -0.7 * 0.3, 2.9, 11.0]])

    assert only(told(claim, RIGHT, x=np.array([2.0, 0.3, 1.7, 0.9]))).code == "missing-chain-rule"


# --- entries out of place ---------------------------------------------------------------------------------------------


def test_all_entries_one_place_on_and_the_last_one_first():
    diagnosis = only(told(np.roll(LONG, 1), LONG))

    assert (diagnosis.code, len(diagnosis.entries)) == ("shifted-entries", 8)
    assert "the claim for x[1] is that of x[0]" in diagnosis.text
    assert "x[0] holds that of x[7]" in diagnosis.text


def test_all_entries_one_place_on_and_nothing_in_the_first():
    claim = np.roll(LONG, 1)
    claim[0, 0] = 0.0

    diagnosis = only(told(claim, LONG))
    assert diagnosis.code == "shifted-entries"
    assert "x[0] holds zero" in diagnosis.text


def test_a_few_neighbours_one_place_on():
    claim = LONG.copy()
    claim[0, 2:6] = np.roll(claim[0, 2:6], -1)

    diagnosis = only(told(claim, LONG))
    assert (diagnosis.code, diagnosis.entries) == ("shifted-entries", ("x[2]", "x[3]", "x[4]", "x[5]"))


def test_rows_of_a_jacobian_two_places_on():
    right = np.outer([1.0, 2.3, -0.4, 1.7, 3.1], [1.0, 0.7]) + np.arange(10.0).reshape(5, 2) ** 1.5
    diagnosis = only(told(np.roll(right, 2, axis=0), right))

    assert diagnosis.code == "shifted-entries"
    assert "all 5 rows" in diagnosis.text


def test_three_entries_that_went_round_are_told_together():
    claim = LONG.copy()
    claim[0, [0, 3, 6]] = LONG[0, [3, 6, 0]]

    diagnosis = only(told(claim, LONG))
    assert (diagnosis.code, set(diagnosis.entries)) == ("swapped-entries", {"x[0]", "x[3]", "x[6]"})
    assert "x[0], x[3] and x[6]: the claim holds what is due in x[3], x[6] and x[0]" in diagnosis.text


def test_columns_of_a_jacobian_in_each_others_place_are_one_story():
    diagnosis = only(told(SQUARE[:, [0, 2, 1]], SQUARE))

    assert (diagnosis.code, len(diagnosis.entries)) == ("swapped-entries", 6)


def test_equal_entries_cannot_be_seen_to_be_swapped():
    assert only(told([[2.0, 2.0, 1.0, 5.0]], [[2.0, 2.0, 1.0, 7.1]])).code == "unknown"


def test_a_square_block_of_a_jacobian_that_is_transposed():
    right = np.arange(1.0, 31.0).reshape(5, 6) ** 1.3
    claim = right.copy()
    claim[1:4, 2:5] = right[1:4, 2:5].T

    diagnosis = only(told(claim, right))
    assert (diagnosis.code, len(diagnosis.entries)) == ("transposed", 6)
    assert "[1:4, 2:5]" in diagnosis.text


def test_a_matrix_parameter_laid_out_by_columns():
    claim = LONG[0].reshape(2, 4).ravel(order="F")
    diagnosis = only(told(claim, LONG, blocks=(Block("W", 0, (2, 4)),)))

    assert diagnosis.code == "reordered"
    assert "W (2 × 4) laid out by columns (order='F')" in diagnosis.text


def test_a_matrix_that_nobody_spoke_of_is_recognised_by_its_order():
    diagnosis = only(told(LONG[0].reshape(2, 4).T.ravel(), LONG))

    assert diagnosis.code == "reordered"
    assert "what looks like a" in diagnosis.text


def test_outputs_of_two_axes_laid_out_by_columns():
    right = np.arange(1.0, 13.0).reshape(6, 2) ** 1.7
    order = np.arange(6).reshape(2, 3).T.ravel()
    diagnosis = only(told(right[order], right, outputs=(2, 3)))

    assert diagnosis.code == "reordered"
    assert "the output (2 × 3)" in diagnosis.text


# --- terms and precision ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("missing", "words"),
    [(0.83, "the same 0.83 in each"), (0.4 * X, "0.4 times the variable"), (0.6 / X, "0.6 over the variable")],
)
def test_a_simple_term_that_several_entries_lack(missing, words):
    diagnosis = only(told(LONG - missing, LONG, x=X))

    assert (diagnosis.code, len(diagnosis.entries)) == ("missing-path", 8)
    assert words in diagnosis.text


def test_a_whole_number_that_one_entry_lacks():
    diagnosis = only(told(with_entry(1, -0.7123 - 12.0, np.array([[1.3, -0.7123]])), [[1.3, -0.7123]]))

    assert diagnosis.code == "missing-path"
    assert "lacks 12 exactly" in diagnosis.text


def test_a_claim_that_holds_one_simple_term_only():
    diagnosis = only(told(0.04 * X, LONG, x=X))

    assert diagnosis.code == "missing-path"
    assert "nothing but 0.04 times the variable" in diagnosis.text


def test_a_path_through_one_intermediate_quantity_that_a_jacobian_lacks():
    right = np.arange(1.0, 13.0).reshape(4, 3) ** 1.4
    lacking = right - np.outer([0.3, -1.1, 0.8, 0.45], [1.7, 0.2, -0.9])

    diagnosis = only(told(lacking, right))
    assert diagnosis.code == "missing-path"
    assert "one column times one row" in diagnosis.text


def test_what_is_the_derivative_of_another_function_lacks_a_term():
    asked = []

    def ask(row, columns):
        asked.append((row, tuple(columns)))
        return True

    claim = LONG.copy()
    claim[0, 2:5] += [0.31, -0.77, 0.13]
    diagnosis = only(likely_mistakes(case_of(claim, LONG), ask))
    assert (diagnosis.code, asked) == ("missing-path", [(0, (2, 3, 4))])


@pytest.mark.parametrize("answer", [False, None])
def test_what_is_no_derivative_of_anything_stays_unknown(answer):
    claim = LONG.copy()
    claim[0, 2:5] += [0.31, -0.77, 0.13]

    assert only(likely_mistakes(case_of(claim, LONG), lambda row, columns: answer)).code == "unknown"


def test_a_claim_stored_in_single_precision():
    right = LONG * np.pi
    diagnosis = only(told(right.astype(np.float32).astype(float), right))

    assert diagnosis.code == "single-precision"
    assert "every claimed number is one of single precision" in diagnosis.text


def test_seven_digits_alone_do_not_prove_single_precision_but_it_is_among_what_to_look_for():
    """A model that iterates to a tolerance of 1e-7 leaves the same."""
    slips = np.array([[3.1, -1.2, 0.7, -2.8, 1.9, -0.4, 2.2, -1.6]]) * 1e-7

    diagnosis = only(told(LONG * (1 + slips), LONG))
    assert diagnosis.code == "unknown"
    assert "iterates to a tolerance" in diagnosis.text
    assert "float32" in diagnosis.text


def test_one_constant_with_seven_digits_is_no_single_precision():
    assert only(told(LONG * (1 + 3e-7), LONG)).code != "single-precision"


def test_one_slight_error_is_no_single_precision():
    claim = LONG.copy()
    claim[0, 3] *= 1 + 2e-7

    assert only(told(claim, LONG)).code == "unknown"


# --- what is said -----------------------------------------------------------------------------------------------------


def test_a_block_is_told_by_its_name():
    claim = LONG.copy()
    claim[0, 3:7] *= -1
    blocks = (Block("W", 0, (3,)), Block("b", 3, (4,)), Block("c", 7, (1,)))

    assert "all 4 entries of b " in only(told(claim, LONG, blocks=blocks)).text


def test_a_row_of_a_jacobian_is_told_as_a_row():
    claim = SQUARE.copy()
    claim[1] *= -1

    assert only(told(claim, SQUARE)).text.startswith("row 1 (f[1]) ")


def test_a_column_of_a_jacobian_is_told_by_its_variable():
    claim = SQUARE.copy()
    claim[:, 2] *= 2

    assert only(told(claim, SQUARE)).text.startswith("all outputs by x[2]: ")


def test_zeros_in_a_row_do_not_hide_that_all_of_it_is_wrong():
    right = np.array([[1.3, 0.0, -2.2, 0.9], [0.4, 1.1, 0.0, 2.0]])
    claim = right * np.array([[-1.0], [1.0]])

    assert only(told(claim, right)).text.startswith("row 0 (f[0]) ")


def test_what_is_unknown_says_which_ratios_and_what_is_right():
    text = only(told([[1.4, -0.7, 2.9, 11.2]], RIGHT)).text

    assert "1.077 and 1.018 times the derivative" in text
    assert "the other 2 entries are right" in text


@pytest.mark.parametrize("seed", range(100))
def test_arbitrary_wrong_numbers_get_no_story(seed):
    random = np.random.default_rng(seed)
    right = random.standard_normal((1, 8))
    claim = right.copy()
    claim[0, :5] = random.standard_normal(5)

    assert only(told(claim, right, x=random.uniform(0.2, 3.0, 8))).code == "unknown"


def test_of_a_part_of_the_claim_nothing_is_said_about_all_entries():
    text = only(told(-RIGHT, RIGHT, whole=False)).text

    assert "all" not in text.partition("have")[0]
    assert only(told(RIGHT / 14, RIGHT, whole=False)).code == "constant-factor"


def test_a_hundred_thousand_wrong_entries_are_one_story_in_one_sentence():
    right = np.random.default_rng(1).standard_normal(100_000)
    diagnosis = only(told(-right, right))

    assert (diagnosis.code, len(diagnosis.entries)) == ("sign-flipped", 100_000)
    assert len(diagnosis.text) < 200


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("bad", [math.inf, -math.inf, math.nan, 0.0, 1e308, 5e-324])
@pytest.mark.parametrize("x", [X, 0 * X, -X, np.full(8, math.nan), 1e200 * X], ids=["x", "0", "-x", "nan", "large"])
def test_no_number_disturbs_the_naming(bad, x):
    for right in (LONG, 0 * LONG, 1e300 * LONG, 1e-300 * LONG):
        claim = np.vstack([right, LONG])
        claim[0, 2:5] = bad
        names = [n for d in told(claim, np.vstack([right, LONG]), x=x, values=np.array([1.0, 0.0])) for n in d.entries]

        assert len(names) == len(set(names))
