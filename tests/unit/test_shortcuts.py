"""Shortcuts for small arrays give, to the last bit, what the numpy functions that they stand for give."""

import numpy as np
import pytest

from gradcheck.evaluation.protocol import Reply, Status
from gradcheck.witnesses import finite_difference, quick_look

AWKWARD = np.array([0.0, 5e-324, 1e-300, 1.0, np.pi, 1e300, np.finfo(float).max, np.inf, np.nan])


@pytest.mark.parametrize("d", [1, 2, 3, 10, 11, 1_000])
@pytest.mark.parametrize("m", [1, 4])
def test_the_median_is_that_of_numpy_without_what_is_not_finite(d, m):
    rng = np.random.default_rng([d, m])
    values = rng.lognormal(size=(d, m))
    values[rng.random((d, m)) < 0.3] = np.nan
    values[0] = 1.0
    assert finite_difference._median(values).tobytes() == np.nanmedian(values, axis=0).tobytes()


def test_the_median_of_nothing_is_unknown():
    assert np.isnan(finite_difference._median(np.array([[np.nan, np.inf]]))).all()


@pytest.mark.parametrize("d", [1, 5])
@pytest.mark.parametrize("m", [1, 3])
def test_the_centre_stands_where_padding_puts_it_and_memory_is_ordered_alike(d, m):
    nodes = np.random.default_rng(0).normal(size=(d, 6, m))
    for chosen in (np.ones(6, bool), np.arange(6) % 2 == 0):
        ours, theirs = (
            finite_difference._with_centre(nodes[:, chosen]),
            np.pad(nodes[:, chosen], ((0, 0), (0, 1), (0, 0))),
        )
        assert ours.strides == theirs.strides
        assert ours.tobytes() == theirs.tobytes()


def test_sizes_become_numbers_as_numpy_makes_them():
    assert quick_look._number(AWKWARD).tobytes() == np.nan_to_num(AWKWARD).tobytes()


@pytest.mark.parametrize("ratios", [[1.0, 0.25], [1.0, 0.25, 0.0625], [1.0, 0.3, 0.1]])
def test_weights_of_equal_ratios_are_those_solved_for_one_by_one(ratios):
    powers = np.arange(len(ratios))
    at = np.tile(ratios, (7, 1))
    assert quick_look._weights_at_zero(at, powers).tobytes() == quick_look._solved(at, powers).tobytes()


def test_weights_of_unequal_ratios_are_solved_for():
    at = np.array([[1.0, 0.25], [1.0, 0.26]])
    # the constant of a line through (a, 1) and (b, 1) is 1, through (a, a) and (b, b) it is 0
    weights = quick_look._weights_at_zero(at, np.arange(2))
    np.testing.assert_allclose(weights.sum(axis=1), 1.0)
    np.testing.assert_allclose((weights * at).sum(axis=1), 0.0, atol=1e-15)


def test_a_reply_tells_what_is_finite_and_what_was_refused():
    status = np.array([list(Status)], dtype=np.int8)
    reply = Reply(values=np.zeros((1, len(Status), 1)), status=status, spent=0)
    assert reply.finite.tolist() == [[one == Status.OK for one in Status]]
    assert reply.refused.tolist() == [[one == Status.REFUSED for one in Status]]
