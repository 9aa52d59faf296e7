"""Sparse claims and declared patterns: what may come in."""

import numpy as np
import pytest
from scipy import sparse

from gradcheck.errors import DerivativeShapeError, UsageError
from gradcheck.problem.sparse_claim import declared_pattern, dense_of, is_sparse, matrix_of, stored_entries

FULL = np.array([[1.0, 0.0, 2.0], [0.0, -3.0, 0.0]])


def stored(raw):
    return stored_entries("jacobian", raw, 3, (2,), (3,))


@pytest.mark.parametrize("format", ["bsr", "coo", "csc", "csr", "dia", "dok", "lil"])
@pytest.mark.parametrize("kind", [sparse.coo_array, sparse.coo_matrix])
def test_every_format_gives_the_same_entries(format: str, kind: type) -> None:
    entries, _ = stored(kind(FULL).asformat(format))

    nonzero = entries[entries["value"] != 0]
    assert [tuple(entry) for entry in nonzero.tolist()] == [(0, 0, 1.0), (0, 2, 2.0), (1, 1, -3.0)]


def test_entries_in_one_place_are_summed_and_that_is_said() -> None:
    raw = sparse.coo_array(([1.0, 2.0, 5.0], ([1, 1, 0], [1, 1, 0])), shape=(2, 3))

    entries, notices = stored(raw)

    assert entries.tolist() == [(0, 0, 5.0), (1, 1, 3.0)]
    assert "1 entry more than once" in notices[0]


def test_explicit_zeros_stay_in_the_pattern_and_that_is_said() -> None:
    raw = sparse.csr_array(([0.0, 4.0], ([0, 1], [1, 2])), shape=(2, 3))

    entries, notices = stored(raw)

    assert entries.tolist() == [(0, 1, 0.0), (1, 2, 4.0)]
    assert "1 explicit zero" in notices[0]


def test_unsorted_indices_are_put_in_order() -> None:
    raw = sparse.csr_array((np.array([2.0, 1.0, -3.0]), np.array([2, 0, 1]), np.array([0, 2, 3])), shape=(2, 3))

    entries, notices = stored(raw)

    assert entries["column"].tolist() == [0, 2, 1]
    assert notices == ()


@pytest.mark.parametrize("dtype", [np.int64, np.int8, np.float32, bool])
def test_integers_and_short_numbers_become_floats(dtype: type) -> None:
    entries, _ = stored(sparse.csr_array(np.array([[1, 0, 1], [0, 1, 0]], dtype=dtype)))

    assert entries["value"].dtype == float
    assert entries["value"].tolist() == [1.0, 1.0, 1.0]


def test_nan_stays_to_be_refuted() -> None:
    entries, _ = stored(sparse.csr_array(([np.nan], ([0], [0])), shape=(2, 3)))

    assert np.isnan(entries["value"]).tolist() == [True]


def test_a_claim_without_entries_is_one() -> None:
    entries, _ = stored(sparse.csr_array((2, 3)))

    assert entries.size == 0


def test_a_complex_claim_is_refused() -> None:
    with pytest.raises(UsageError, match="complex"):
        stored(sparse.csr_array(FULL * 1j))


def test_a_claim_of_objects_is_refused() -> None:
    raw = sparse.csr_matrix(FULL)
    raw.data = raw.data.astype(object)
    with pytest.raises(UsageError, match="real numbers"):
        stored(raw)


def test_a_wrong_shape_is_told_with_both_shapes_and_the_transpose_that_fits() -> None:
    with pytest.raises(DerivativeShapeError, match=r"\(3, 2\).*\(2, 3\).*transpose would fit"):
        stored(sparse.csr_array(FULL.T))
    with pytest.raises(DerivativeShapeError, match=r"\(2, 4\).*\(2, 3\)") as failure:
        stored(sparse.csr_array((2, 4)))
    assert "transpose" not in str(failure.value)


def test_the_claim_is_not_changed() -> None:
    raw = sparse.coo_array(([1.0, 2.0], ([1, 1], [1, 1])), shape=(2, 3))
    stored(raw)
    assert raw.nnz == 2


def test_the_stored_entries_are_the_claim() -> None:
    entries, _ = stored(sparse.csr_array(FULL))

    assert (dense_of(entries, 2, 3) == FULL).all()
    assert (matrix_of(entries, 2, 3).toarray() == FULL).all()


def test_only_sparse_matrices_are_sparse() -> None:
    assert is_sparse(sparse.coo_matrix(FULL))
    assert not is_sparse(FULL)
    assert not is_sparse("jax")
    assert not is_sparse(None)


@pytest.mark.parametrize("pattern", [FULL != 0, sparse.csc_array(FULL), sparse.coo_matrix(FULL), (FULL != 0).tolist()])
def test_a_pattern_may_be_sparse_or_boolean(pattern) -> None:
    found = declared_pattern(pattern, 2, 3)

    assert (found.toarray() == (FULL != 0)).all()


def test_a_stored_zero_is_part_of_a_sparse_pattern() -> None:
    pattern = sparse.csr_array(([0.0, 0.0], ([0, 0], [1, 1])), shape=(2, 3))

    assert declared_pattern(pattern, 2, 3).nnz == 1


@pytest.mark.parametrize("pattern", [sparse.csr_array((3, 2)), np.ones((3, 2), bool)])
def test_a_pattern_of_the_wrong_shape_is_told_with_both_shapes(pattern) -> None:
    with pytest.raises(UsageError, match=r"\(3, 2\).*\(2, 3\).*transpose would fit"):
        declared_pattern(pattern, 2, 3)


@pytest.mark.parametrize("pattern", ["banded", [1, 2], [[1], [1, 2]], object(), np.ones(3)])
def test_what_is_no_pattern_is_told(pattern) -> None:
    with pytest.raises(UsageError, match="give a scipy"):
        declared_pattern(pattern, 2, 3)
