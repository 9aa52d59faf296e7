"""Faults that repeat in a regular way are told as one."""

import numpy as np

from gradcheck.claims.fault_lists import ratio_in_common, repetitions


def ordered(rows: np.ndarray, columns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    order = np.lexsort((columns, rows))
    return rows[order], columns[order]


def test_the_same_fault_in_every_time_step_is_one_repetition() -> None:
    steps = np.arange(200)

    (found,), explained = repetitions("wrong", 2 + 6 * steps, 3 + 8 * steps)

    assert (found.row, found.column, found.row_step, found.column_step, found.count) == (2, 3, 6, 8, 200)
    assert explained.all()


def test_two_interleaved_repetitions_are_told_apart() -> None:
    steps = np.arange(50)
    rows, columns = ordered(np.tile(6 * steps, 2), np.concatenate([8 * steps, 8 * steps + 5]))

    found, explained = repetitions("missing", rows, columns)

    assert [(one.column, one.count) for one in found] == [(0, 50), (5, 50)]
    assert explained.all()


def test_single_faults_beside_a_repetition_stay_single() -> None:
    rows, columns = ordered(np.append(np.arange(10), [3, 77]), np.append(np.arange(10), [91, 5]))

    (found,), explained = repetitions("wrong", rows, columns)

    assert (found.row_step, found.column_step, found.count) == (1, 1, 10)
    assert np.flatnonzero(~explained).size == 2


def test_a_column_may_go_back_while_rows_go_on() -> None:
    (found,), _ = repetitions("wrong", np.arange(9), 100 - 2 * np.arange(9))

    assert (found.row_step, found.column_step) == (1, -2)


def test_faults_of_one_row_repeat_along_columns() -> None:
    (found,), _ = repetitions("wrong", np.full(8, 4), np.arange(0, 24, 3))

    assert (found.row_step, found.column_step, found.count) == (0, 3, 8)


def test_few_or_irregular_faults_are_no_repetition() -> None:
    nothing = np.empty(0, np.intp)
    assert repetitions("wrong", nothing, nothing)[0] == []
    assert repetitions("wrong", np.array([1, 2, 3]), np.array([1, 2, 3]))[0] == []
    rng = np.random.default_rng(0)
    rows, columns = ordered(rng.integers(0, 10_000, 30), rng.integers(0, 10_000, 30))
    assert repetitions("wrong", rows, columns)[0] == []


def test_a_factor_in_common_is_one_only_if_all_agree() -> None:
    value = np.array([1.0, -2.0, 3e-5])
    assert ratio_in_common(2 * value, value) == 2.0
    assert np.isnan(ratio_in_common(np.array([2.0, -2.0, 3e-5]), value))
    assert np.isnan(ratio_in_common(value, np.zeros(3)))
    assert np.isnan(ratio_in_common(np.empty(0), np.empty(0)))
