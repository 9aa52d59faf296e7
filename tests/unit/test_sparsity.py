"""Columns without a common row share a direction; rows that are too full are set apart."""

import numpy as np
import pytest
from scipy import sparse

from gradcheck.claims.sparsity import coloured, dense_rows


def every(n: int) -> np.ndarray:
    return np.ones(n, bool)


def band(n: int, width: int) -> sparse.csr_array:
    half = width // 2
    return sparse.diags_array(
        [np.ones(n - abs(k)) for k in range(-half, half + 1)], offsets=range(-half, half + 1), shape=(n, n)
    ).tocsr()


def scattered(m: int, n: int, entries: int, seed: int) -> sparse.csr_array:
    rng = np.random.default_rng(seed)
    pattern = sparse.coo_array((np.ones(entries), (rng.integers(0, m, entries), rng.integers(0, n, entries))), (m, n))
    return pattern.tocsr()


def shares_a_row(pattern: sparse.csr_array, colour: np.ndarray) -> bool:
    """Whether some row meets a group twice: seen on the full matrix, one group after the other."""
    full = pattern.toarray() != 0
    return any((full[:, colour == group].sum(axis=1) > 1).any() for group in range(colour.max() + 1))


@pytest.mark.parametrize("seed", range(8))
def test_no_row_meets_a_group_twice(seed: int) -> None:
    pattern = scattered(40, 60, 200, seed)

    found = coloured(pattern, every(60))

    assert not shares_a_row(pattern, found.colour)
    assert found.colour.min() == 0
    assert found.count == found.colour.max() + 1


@pytest.mark.parametrize("seed", range(4))
def test_another_order_of_the_columns_gives_other_groups_that_are_as_good(seed: int) -> None:
    pattern = scattered(40, 60, 200, seed)

    found = coloured(pattern, every(60), order=np.random.default_rng(seed).permutation(60))

    assert not shares_a_row(pattern, found.colour)


def test_columns_that_are_not_to_be_moved_belong_to_no_group() -> None:
    some = np.arange(12) % 2 == 0

    found = coloured(band(12, 3), some)

    assert (found.colour[~some] == -1).all()
    assert (found.colour[some] >= 0).all()


def test_a_diagonal_needs_one_group_and_a_full_row_as_many_as_columns() -> None:
    assert coloured(sparse.eye_array(9).tocsr(), every(9)).count == 1
    assert coloured(sparse.csr_array(np.ones((1, 9))), every(9)).count == 9


def test_columns_without_entries_share_the_first_group() -> None:
    assert coloured(sparse.csr_array((3, 5)), every(5)).count == 1


def test_more_groups_than_asked_for_are_none() -> None:
    assert coloured(band(30, 5), every(30), most=4) is None
    assert coloured(band(30, 5), every(30), most=5).count == 5


def test_a_large_band_needs_no_more_groups_than_a_small_one() -> None:
    assert coloured(band(20_000, 5), every(20_000)).count == 5


def test_a_row_that_depends_on_everything_is_set_apart() -> None:
    pattern = band(100, 3).tolil()
    pattern[40, :] = 1

    assert np.flatnonzero(dense_rows(pattern.tocsr())).tolist() == [40]


def test_rows_that_are_all_alike_are_not_set_apart() -> None:
    assert not dense_rows(sparse.csr_array(np.ones((5, 200)))).any()
    assert not dense_rows(band(50, 7)).any()
    assert dense_rows(sparse.csr_array((0, 5))).size == 0
