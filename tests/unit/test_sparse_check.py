"""Checks of sparse Jacobians: what is wrong, misplaced or missing is told apart, and innocents are left alone."""

import json
import zlib

import jsonschema
import numpy as np
import pytest
from scipy import sparse

import gradcheck
from gradcheck.checking import check_described
from gradcheck.errors import DerivativeMismatch, DerivativeShapeError, UndecidedWarning, UsageError
from gradcheck.report.json_format import document, schema

N = 60
X = np.random.default_rng(3).uniform(0.5, 2.0, N)


def defects(x):
    """A band of five diagonals, with products of neighbours."""
    y = np.sin(x) * x
    y[1:] += 0.5 * np.exp(0.3 * x[:-1]) * x[1:]
    y[2:] += np.cos(x[:-2])
    y[:-1] += 0.1 * x[1:] ** 2 * x[:-1]
    y[:-2] += np.log(x[2:])
    return y


def defects_jacobian(x):
    middle = np.sin(x) + x * np.cos(x)
    middle[1:] += 0.5 * np.exp(0.3 * x[:-1])
    middle[:-1] += 0.1 * x[1:] ** 2
    below, above = 0.15 * np.exp(0.3 * x[:-1]) * x[1:], 0.2 * x[1:] * x[:-1]
    return sparse.diags_array([-np.sin(x[:-2]), below, middle, above, 1 / x[2:]], offsets=range(-2, 3)).tocsr()


def changed(**entries):
    """The right Jacobian with entries ``r12c13=value`` set; what is set to 0 is left out."""
    claim = defects_jacobian(X).tolil()
    for name, value in entries.items():
        row, _, column = name[1:].partition("c")
        claim[int(row), int(column)] = value
    claim = claim.tocsr()
    claim.eliminate_zeros()
    return claim


def looked_at(claim, function=defects, at=X, **options):
    return gradcheck.check(function, at=at, jacobian=claim, on_refuted="return", on_undecided="pass", **options)


def lists(report):
    return {name: getattr(report.sparsity, name).tolist() for name in ("wrong", "missing", "misplaced", "unused")}


NOTHING = {"wrong": [], "missing": [], "misplaced": [], "unused": []}
RIGHT = defects_jacobian(X)


@pytest.mark.parametrize("format", ["bsr", "coo", "csc", "csr", "dia", "dok", "lil"])
def test_a_right_claim_is_confirmed_in_every_format(format):
    report = looked_at(lambda x: defects_jacobian(x).asformat(format))

    assert report.verdict == "confirmed"
    assert lists(report) == NOTHING
    assert report.sparsity.confirmed == RIGHT.nnz
    assert report.sparsity.groups == 5


def test_a_right_claim_costs_evaluations_by_its_groups_not_by_its_columns():
    spent = []
    for n in (60, 600):
        x = np.random.default_rng(0).uniform(0.5, 2.0, n)
        spent.append(looked_at(defects_jacobian, at=x).evaluations)

    assert max(spent) <= 40


def test_wrong_misplaced_and_missing_entries_are_told_apart():
    value = RIGHT[30, 32]
    report = looked_at(changed(r10c11=2 * RIGHT[10, 11], r30c32=0, r30c37=value, r50c49=0))

    assert report.verdict == "refuted"
    assert report.sparsity.wrong.tolist() == [[10, 11], [30, 37]]
    assert report.sparsity.missing.tolist() == [[30, 32], [50, 49]]
    assert report.sparsity.misplaced.tolist() == [[30, 37, 30, 32]]
    assert {str(diagnosis.code) for diagnosis in report.diagnoses} == {
        "constant-factor",
        "shifted-entries",
        "zero-entry",
    }
    assert "1 wrong, 1 misplaced, 1 outside the pattern" in str(report)
    assert "belongs to defects[30] by x[32]" in " ".join(str(report).split())


def test_a_claim_that_drops_an_entry_accuses_no_entry_that_shares_its_group():
    report = looked_at(changed(r20c21=0))

    assert lists(report) == NOTHING | {"missing": [[20, 21]]}


def test_several_faults_in_one_row_are_all_found():
    report = looked_at(changed(r20c19=0, r20c20=-RIGHT[20, 20], r20c21=0, r20c22=0, r20c50=1.5))

    assert report.sparsity.missing.tolist() == [[20, 19], [20, 21], [20, 22]]
    assert report.sparsity.wrong.tolist() == [[20, 20], [20, 50]]


def test_a_claim_that_drops_whole_diagonals_is_completed():
    report = looked_at(sparse.diags_array(RIGHT.diagonal()))

    assert report.sparsity.wrong.size == 0
    assert len(report.sparsity.missing) == RIGHT.nnz - N


@pytest.mark.parametrize("factor", [1 + 1e-3, 1 + 1e-6])
def test_a_slight_error_is_refuted(factor):
    report = looked_at(changed(r10c12=factor * RIGHT[10, 12]))

    assert lists(report) == NOTHING | {"wrong": [[10, 12]]}


def test_a_claim_of_nan_is_refuted():
    report = looked_at(changed(r10c12=np.nan))

    assert lists(report) == NOTHING | {"wrong": [[10, 12]]}


def test_a_transposed_claim_is_called_that():
    report = looked_at(RIGHT.T.tocsr())

    assert [str(diagnosis.code) for diagnosis in report.diagnoses] == ["transposed"]


def test_the_same_mistake_in_every_step_is_told_once():
    claim = RIGHT.tolil()
    for row in range(4, N - 2, 6):
        claim[row, row + 1] *= -1
    report = looked_at(claim.tocsr())

    (repetition,) = report.sparsity.repetitions
    assert (repetition.row, repetition.row_step, repetition.column_step, repetition.count) == (4, 6, 6, 9)
    (diagnosis,) = report.diagnoses
    assert diagnosis.code == "sign-flipped"
    assert "9 times, from defects[4] by x[5] to defects[52] by x[53] (every 6th row and 6th column)" in diagnosis.text


def test_an_explicit_zero_that_never_counts_is_told_as_unused():
    claim = RIGHT.tolil()
    claim[10, 40] = 1.0
    claim = claim.tocsr()
    claim.data[claim.data == 1.0] = 0.0
    report = looked_at(claim)

    assert report.verdict == "confirmed"
    assert lists(report) == NOTHING | {"unused": [[10, 40]]}
    assert [str(finding.code) for finding in report.findings] == ["dead-variable"]
    assert any("explicit zero" in notice for notice in report.notices)


def test_an_entry_that_is_zero_here_and_not_elsewhere_is_not_unused():
    x = np.append(X[:-1], 0.0)
    claim = sparse.eye_array(N).tolil()
    claim[3, N - 1] = 1.0
    claim = claim.tocsr()
    claim[3, N - 1] = 0.0

    def squared(x):
        y = x.copy()
        y[3] += x[-1] ** 2
        return y

    report = looked_at(claim, squared, x)

    assert report.verdict == "confirmed"
    assert report.sparsity.unused.size == 0


def test_duplicates_are_summed_and_that_is_said():
    coo = RIGHT.tocoo()
    twice = sparse.coo_array((np.tile(coo.data / 2, 2), (np.tile(coo.row, 2), np.tile(coo.col, 2))), shape=coo.shape)
    report = looked_at(twice)

    assert report.verdict == "confirmed"
    assert any("more than once" in notice for notice in report.notices)


def test_a_wrong_shape_is_one_error_with_both_shapes():
    with pytest.raises(DerivativeShapeError, match=r"\(58, 60\).*\(60, 60\)"):
        looked_at(RIGHT[:-2])


def test_an_empty_claim_of_a_function_that_depends_is_refuted():
    report = looked_at(sparse.csr_array((N, N)), lambda x: np.concatenate([x[:1] ** 2, np.zeros(N - 1)]))

    assert lists(report) == NOTHING | {"missing": [[0, 0]]}


def test_an_empty_claim_of_a_function_that_stands_still_is_confirmed_and_of_a_staircase_not():
    empty = sparse.csr_array((N, N))

    assert looked_at(empty, lambda x: np.full(N, 3.0)).verdict == "confirmed"
    assert looked_at(empty, lambda x: x**2, np.zeros(N)).verdict == "confirmed"
    assert looked_at(empty, lambda x: np.floor(10 * x)).verdict == "undecided"


def test_explicit_zeros_on_a_staircase_are_undecided():
    zeros = sparse.diags_array(np.ones(N)).tocsr()
    zeros.data[:] = 0

    assert looked_at(zeros, lambda x: np.floor(10 * x)).verdict == "undecided"


def test_values_in_single_precision_are_judged_by_their_digits():
    report = looked_at(defects_jacobian, lambda x: defects(x).astype(np.float32))

    assert report.sparsity.refuted == 0
    assert report.sparsity.confirmed >= 0.9 * RIGHT.nnz


def test_rows_and_columns_without_entries_are_fine():
    def partly(x):
        y = np.zeros(N)
        y[::2] = x[::2] ** 2
        return y

    report = looked_at(sparse.diags_array(np.where(np.arange(N) % 2 == 0, 2 * X, 0.0)), partly)

    assert report.verdict == "confirmed"


# --- a declared pattern --------------------------------------------------------------------------------------------


def test_a_dense_claim_with_a_declared_pattern_is_checked_by_groups():
    report = looked_at(RIGHT.toarray(), pattern=RIGHT)

    assert report.verdict == "confirmed"
    assert report.sparsity.declared
    assert report.evaluations <= 40


def test_a_declared_pattern_that_misses_an_entry_refutes_even_a_right_claim():
    pattern = RIGHT.toarray() != 0
    pattern[10, 11] = False
    report = looked_at(RIGHT, pattern=pattern)

    assert report.verdict == "refuted"
    assert lists(report) == NOTHING | {"missing": [[10, 11]]}
    assert "declared pattern" in report.diagnoses[0].text


def test_a_declared_pattern_that_is_too_wide_is_told():
    pattern = RIGHT.toarray() != 0
    pattern[10, 40] = True

    assert looked_at(RIGHT, pattern=pattern).sparsity.unused.tolist() == [[10, 40]]


def test_a_pattern_of_the_wrong_shape_is_one_error_with_both_shapes():
    with pytest.raises(UsageError, match=r"pattern has shape \(60, 59\).*\(60, 60\)"):
        looked_at(RIGHT, pattern=np.ones((N, N - 1), bool))


def test_a_pattern_without_a_jacobian_is_refused():
    with pytest.raises(UsageError, match="needs jacobian"):
        gradcheck.check(lambda x: x[0], at=[1.0], gradient=[1.0], pattern=np.ones((1, 1), bool))


def test_the_functions_of_a_problem_may_declare_patterns():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable(f"v{i}", float(value)) for i, value in enumerate(X[:8])],
        objective=gradcheck.Function(lambda x: x @ x, gradient=lambda x: 2 * x),
        constraints={"c": gradcheck.Function(lambda x: x**2, jacobian=lambda x: np.diag(2 * x), pattern=np.eye(8) > 0)},
    )

    report = check_described(problem)[1]

    assert report.verdict == "confirmed"
    assert report.sparsity.declared


# --- rows that are judged as wholes --------------------------------------------------------------------------------

WIDE = 1_200
COUPLED = np.random.default_rng(5).standard_normal((6, WIDE)) / np.sqrt(WIDE)
WIDE_X = np.random.default_rng(6).uniform(0.5, 2.0, WIDE)


def mixed(x):
    return np.sin(COUPLED @ x) + 0.1 * x @ x


def mixed_jacobian(x):
    return np.cos(COUPLED @ x)[:, None] * COUPLED + 0.2 * x


def test_a_dense_jacobian_of_many_columns_is_judged_along_random_directions():
    report = looked_at(mixed_jacobian, mixed, WIDE_X)

    assert report.verdict == "confirmed"
    assert report.sparsity.whole_rows_confirmed == 6
    assert report.evaluations <= 20
    assert report.directions.verdict == ("confirmed", "confirmed")
    assert 0 < report.sparsity.smallest_visible < 1e-4


def test_wrong_entries_of_full_rows_are_found():
    claim = mixed_jacobian(WIDE_X)
    claim[2, 77] *= 2
    claim[2, 900] *= -1
    claim[4, 5] = 0
    report = looked_at(claim, mixed, WIDE_X)

    assert report.sparsity.wrong.tolist() == [[2, 77], [2, 900]]
    assert report.sparsity.missing.tolist() == [[4, 5]]
    assert report.sparsity.unexplained_rows.size == 0


def test_a_full_row_that_is_wrong_by_a_factor_is_called_that():
    claim = mixed_jacobian(WIDE_X)
    claim[2] *= 3
    report = looked_at(claim, mixed, WIDE_X)

    assert report.verdict == "refuted"
    assert report.sparsity.unexplained_rows.tolist() == [2]
    (diagnosis,) = report.diagnoses
    assert diagnosis.code == "constant-factor"
    assert "3 times the derivative" in diagnosis.text


def test_a_full_row_among_sparse_ones_is_judged_as_a_whole():
    def arrow(x):
        y = defects(x)
        y[7] = np.sum(x**2)
        return y

    claim = RIGHT.tolil()
    claim[7, :] = 2 * X
    report = looked_at(claim.tocsr(), arrow)
    assert report.verdict == "confirmed"
    assert report.sparsity.whole_rows == 1

    claim[7, 33] *= 2
    assert lists(looked_at(claim.tocsr(), arrow)) == NOTHING | {"wrong": [[7, 33]]}


def test_a_number_of_directions_judges_every_row_as_a_whole():
    report = looked_at(defects_jacobian, directions=3)

    assert report.verdict == "confirmed"
    assert len(report.directions.verdict) == 3
    assert report.sparsity.whole_rows == N


def test_all_directions_look_at_every_entry():
    assert looked_at(RIGHT, directions="all").sparsity.confirmed == RIGHT.nnz


# --- models that make it hard --------------------------------------------------------------------------------------


def test_the_model_is_never_called_outside_its_bounds():
    lower, upper = np.full(N, -9.0), np.full(N, 9.0)
    lower[::7], upper[3::11] = X[::7], X[3::11]
    both = lower == upper

    def guarded(x):
        assert (x >= lower).all()
        assert (x <= upper).all()
        return defects(x)

    report = looked_at(defects_jacobian, guarded, bounds=(lower, upper))

    assert report.verdict != "refuted"
    columns = {
        int(column)
        for (_, column), verdict in zip(report.entries.index, report.entries.verdict, strict=True)
        if verdict == "undecided"
    }
    assert columns == set(np.flatnonzero(both).tolist())


def test_faults_beside_a_bound_are_found():
    lower = np.where(np.arange(N) % 5 == 0, X, -9.0)
    claim = changed(r10c10=3 * RIGHT[10, 10], r24c25=0)

    report = looked_at(claim, bounds=(lower, np.full(N, 9.0)))

    assert lists(report) == NOTHING | {"wrong": [[10, 10]], "missing": [[24, 25]]}


def test_rows_with_a_kink_are_undecided_and_the_others_confirmed():
    def kinked(x):
        y = defects(x)
        y[12] += abs(x[13] - X[13])
        return y

    report = looked_at(defects_jacobian, kinked)

    assert report.verdict == "undecided"
    assert report.sparsity.confirmed == RIGHT.nnz - 1
    assert [str(finding.code) for finding in report.findings] == ["kink"]


def test_noisy_rows_accuse_nobody():
    def noisy(x):
        y = defects(x)
        y[5:8] += 1e-7 * np.random.default_rng(zlib.crc32(x.tobytes())).standard_normal(3)
        return y

    report = looked_at(defects_jacobian, noisy)

    assert report.sparsity.refuted == 0
    assert report.sparsity.confirmed >= RIGHT.nnz - 3 * 5


def test_a_model_that_raises_on_one_side_is_checked_on_the_other():
    def one_sided(x):
        if x[10] > X[10]:
            raise ValueError("no")
        return defects(x)

    assert looked_at(defects_jacobian, one_sided).verdict == "confirmed"


def test_a_row_that_is_not_finite_on_one_side_spoils_no_other():
    def one_sided(x):
        y = defects(x)
        if x[10] > X[10]:
            y[10] = np.nan
        return y

    assert looked_at(defects_jacobian, one_sided).verdict == "confirmed"


@pytest.mark.parametrize("budget", [2, 5, 14, 34, 60, 150])
@pytest.mark.parametrize("wrong", [False, True])
def test_a_budget_that_ends_leaves_entries_undecided_with_a_reason(budget, wrong):
    report = looked_at(changed(r20c21=0, r40c40=5.0) if wrong else RIGHT, budget=budget)

    assert report.evaluations <= budget
    assert report.sparsity.refuted == 0 or wrong
    for verdict, reason in zip(report.entries.verdict, report.entries.reason, strict=True):
        assert verdict != "undecided" or reason


def test_rows_and_columns_of_very_different_sizes_do_not_hide_errors():
    rng = np.random.default_rng(8)
    rows, columns = 10.0 ** rng.uniform(-8, 8, N), 10.0 ** rng.uniform(-5, 5, N)

    def scaled(x):
        return rows * defects(columns * x)

    def scaled_claim(claim):
        return sparse.diags_array(rows) @ claim @ sparse.diags_array(columns)

    assert looked_at(scaled_claim(RIGHT), scaled, X / columns).verdict == "confirmed"
    claim = changed(r10c11=1.01 * RIGHT[10, 11], r50c49=0)
    assert lists(looked_at(scaled_claim(claim), scaled, X / columns)) == NOTHING | {
        "wrong": [[10, 11]],
        "missing": [[50, 49]],
    }


def test_whole_numbers_are_left_out_and_that_is_said():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable(f"v{i}", float(i + 1), integer=i == 2) for i in range(8)],
        objective=gradcheck.Function(lambda x: x @ x, gradient=lambda x: 2 * x),
        constraints={
            "c": gradcheck.Function(lambda x: x**2, jacobian=lambda x: sparse.diags_array(2 * x).tocsr()),
        },
    )

    report = check_described(problem)[1]

    assert report.sparsity.confirmed == 7
    assert any("whole numbers" in notice for notice in report.notices)


def test_a_batched_model_is_checked_alike():
    def batched(x):
        return np.stack([defects(point) for point in x])

    report = looked_at(changed(r10c11=0.0), batched, batched=True)

    assert lists(report) == NOTHING | {"missing": [[10, 11]]}


def test_a_claim_in_single_precision_is_judged_by_its_digits():
    report = looked_at(RIGHT.astype(np.float32))

    assert report.verdict == "confirmed"
    assert any("single precision" in notice for notice in report.notices)


def test_an_absolute_tolerance_is_meant_for_entries():
    claim = changed(r10c11=RIGHT[10, 11] + 1e-5)

    assert looked_at(claim, abs_tol=2e-5).verdict == "confirmed"
    assert looked_at(claim, abs_tol=5e-6).verdict == "refuted"


def test_a_claim_that_raises_is_a_finding():
    def failing(x):
        raise ValueError("no derivative today")

    report = looked_at(failing, pattern=RIGHT)

    assert report.verdict != "confirmed"
    assert any("no derivative today" in finding.text for finding in report.findings)


# --- what is returned ----------------------------------------------------------------------------------------------


def test_a_refuted_sparse_claim_raises_with_its_story():
    with pytest.raises(DerivativeMismatch, match=r"defects\[20\] by x\[21\]"):
        gradcheck.check(defects, at=X, jacobian=changed(r20c21=0))


def test_an_undecided_sparse_claim_warns():
    def kinked(x):
        y = defects(x)
        y[12] += abs(x[13] - X[13])
        return y

    with pytest.warns(UndecidedWarning):
        gradcheck.check(kinked, at=X, jacobian=defects_jacobian)


@pytest.mark.parametrize("claim", [RIGHT, changed(r10c11=0, r20c20=7.0, r30c31=np.nan)])
def test_the_report_as_json_holds_to_the_schema(claim):
    content = json.loads(document(looked_at(claim)))

    jsonschema.validate(content, schema("check"))
    assert content["sparsity"]["shape"] == [N, N]


def test_no_line_of_the_text_is_wider_than_a_terminal():
    report = looked_at(changed(r10c11=0, r20c20=7.0, r30c31=0, r30c44=RIGHT[30, 31]))

    assert max(map(len, str(report).splitlines())) <= 80


def test_many_confirmed_entries_are_counted_and_not_listed():
    x = np.random.default_rng(0).uniform(0.5, 2.0, 2_000)
    report = looked_at(defects_jacobian, at=x)

    assert report.sparsity.confirmed == 9_994
    assert len(report.entries) <= 20


def test_the_outcome_is_the_same_in_every_run_and_the_verdict_with_every_seed():
    claim = changed(r10c11=2 * RIGHT[10, 11], r50c49=0)
    first, again = (json.loads(document(looked_at(claim))) for _ in range(2))
    first["seconds"] = again["seconds"] = 0

    assert first == again
    for seed in range(6):
        assert lists(looked_at(claim, seed=seed)) == NOTHING | {"wrong": [[10, 11]], "missing": [[50, 49]]}
        assert looked_at(RIGHT, seed=seed).verdict == "confirmed"


def test_names_of_variables_are_used():
    names = [f"speed {i}" for i in range(N)]

    assert "by speed 11" in str(looked_at(changed(r10c11=0), names=names))


def test_the_entries_of_a_tiny_sparse_claim_are_all_listed():
    report = looked_at(sparse.csr_array(np.diag([2.0, 4.0])), lambda x: x**2, [1.0, 2.0])

    assert len(report.entries) == 4
    assert report.verdict == "confirmed"


@pytest.mark.parametrize("columns", [1, 3])
def test_a_sparse_claim_of_few_columns_may_be_a_callable(columns):
    """It is checked entry by entry, and asked once more at the end: what it stores then is read like the first time."""

    def rows(x):
        return np.array([x[0] ** 2, np.sin(x[-1])])

    def rows_jacobian(x):
        claim = sparse.lil_array((2, columns))
        claim[0, 0], claim[1, columns - 1] = 2 * x[0], np.cos(x[-1])
        return claim.tocsr()

    report = looked_at(rows_jacobian, function=rows, at=X[:columns])
    assert report.verdict == "confirmed"


@pytest.mark.parametrize("scale", [1e-3, 1e-4, 1e-6])
@pytest.mark.parametrize("seed", range(3))
def test_a_narrow_model_at_zero_is_not_refuted_by_a_direction_that_had_one_look(scale, seed):
    """At 0 the typical size of the variable is not known: random directions reach far beyond what the model bends in.

    Each of them that disagrees gets a second look; one look alone refutes nothing.
    """
    report = looked_at(
        sparse.csr_array([[1 / scale]]),
        function=lambda x: np.tanh(x / scale),
        at=[0.0],
        pattern=np.ones((1, 1), bool),
        seed=seed,
    )
    assert report.verdict == "confirmed"
