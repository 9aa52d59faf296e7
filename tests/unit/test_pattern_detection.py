"""Which outputs depend on which variables is seen in fewer values than there are variables."""

import numpy as np
import pytest
from scipy import sparse

import gradcheck
from gradcheck.claims.pattern_detection import detect_pattern
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import conduct_one
from tests.gates import gate_of


def seen(pattern, *, columns=None, limit=None, seed=0):
    """The detection for a function with this pattern, and the gate."""
    matrix = sparse.csr_array(pattern)
    matrix.data = np.random.default_rng(1).uniform(0.5, 1.5, matrix.nnz)
    x = np.random.default_rng(2).uniform(0.5, 2.0, matrix.shape[1])

    def function(x):
        return np.sin(matrix @ x)

    gate = gate_of(function, limit=limit)
    every = np.ones(x.size, bool) if columns is None else columns
    found = conduct_one(detect_pattern(x, x, every, function(x), entries=3.0, seed=seed), gate)
    return found, gate


def places(found):
    return set(zip(found.rows.tolist(), found.columns.tolist(), strict=True))


def band(n, half):
    offsets = range(-half, half + 1)
    return sparse.diags_array([np.ones(n - abs(k)) for k in offsets], offsets=offsets).tocsr()


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("half", [0, 1, 2])
def test_a_band_is_seen_in_a_third_of_the_values_that_single_moves_take(half, seed):
    pattern = band(1_000, half).tocoo()

    found, gate = seen(pattern, seed=seed)

    assert found.complete
    assert set(zip(pattern.row.tolist(), pattern.col.tolist(), strict=True)) <= places(found)
    assert len(places(found)) <= 1.005 * pattern.nnz
    assert gate.evaluations == found.evaluations <= 350


def test_rows_and_columns_without_entries_are_seen_as_such():
    pattern = band(400, 1).tolil()
    pattern[7, :] = 0
    pattern[:, 9] = 0

    found, _ = seen(pattern.tocsr())

    assert 7 not in found.rows
    assert 9 not in found.columns


def test_columns_that_must_not_move_are_left_out():
    movable = np.arange(400) % 2 == 0

    found, _ = seen(band(400, 1), columns=movable)

    assert (found.columns % 2 == 0).all()


def test_a_full_function_is_given_up_before_single_moves_would_be_cheaper():
    found, gate = seen(np.ones((5, 100)))

    assert not found.complete
    assert gate.evaluations <= 100


def test_a_budget_that_ends_tells_nothing():
    found, _ = seen(band(400, 1), limit=30)

    assert not found.complete
    assert found.rows.size == 0


def test_check_detects_a_pattern_where_asked_to_and_says_what_it_cost():
    n = 300
    x = np.linspace(0.5, 1.5, n)
    report = gradcheck.check(lambda x: x**2, at=x, jacobian=lambda x: np.diag(2 * x), pattern="detect")

    assert report.sparsity.confirmed == n
    assert report.evaluations < n
    (notice,) = [notice for notice in report.notices if "seen from values" in notice]
    assert "may be nonzero elsewhere" in notice


def test_a_detected_place_that_the_claim_leaves_out_is_missing():
    x = np.linspace(0.5, 1.5, 300)
    report = gradcheck.check(
        lambda x: x**2 + np.roll(x, 1) ** 3,
        at=x,
        jacobian=lambda x: np.diag(2 * x),
        pattern="detect",
        on_refuted="return",
    )

    assert len(report.sparsity.missing) == 300
    assert report.sparsity.wrong.size == 0


def test_a_jacobian_too_large_to_detect_its_pattern_is_refused():
    with pytest.raises(UsageError, match="4,000,000 places"):
        gradcheck.check(
            lambda x: x**2, at=np.ones(3_000), jacobian=lambda x: sparse.diags_array(2 * x), pattern="detect"
        )


def test_another_word_for_a_pattern_is_refused():
    with pytest.raises(UsageError, match="'guess'"):
        gradcheck.check(lambda x: x**2, at=[1.0, 2.0], jacobian=np.eye(2), pattern="guess")
