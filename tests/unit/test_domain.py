"""Where the model may be called: bounds and typical sizes."""

import numpy as np
import pytest
from scipy.optimize import Bounds

from gradcheck import UsageError
from gradcheck.problem.domain import domain_of

X = np.array([1.0, -2.0, 0.0])


def sides(x=X, **options):
    domain = domain_of(np.asarray(x), **options)
    return domain.lower.tolist(), domain.upper.tolist()


@pytest.mark.parametrize(
    "bounds",
    [
        [(0, 2), (-3, 5), (-1, 1)],
        ([0, -3, -1], [2, 5, 1]),
        (np.array([0, -3, -1]), np.array([2, 5, 1])),
        np.array([[0, 2], [-3, 5], [-1, 1]]),
        Bounds([0, -3, -1], [2, 5, 1]),
    ],
    ids=["pairs", "two lists", "two arrays", "array of pairs", "scipy"],
)
def test_bounds_may_be_written_in_every_usual_way(bounds):
    assert sides(bounds=bounds) == ([0, -3, -1], [2, 5, 1])


def test_without_bounds_everything_is_allowed():
    assert sides() == ([-np.inf] * 3, [np.inf] * 3)


def test_none_stands_for_no_bound():
    assert sides([1.0], bounds=[(None, 2.0)]) == ([-np.inf], [2.0])
    assert sides([1.0], bounds=[(0.0, None)]) == ([0.0], [np.inf])


def test_one_number_a_side_holds_for_all_variables():
    assert sides(bounds=(-10, 10)) == ([-10] * 3, [10] * 3)


def test_two_variables_with_pairs_in_a_list_are_read_as_pairs():
    assert sides([0.5, 2.5], bounds=[(0, 1), (2, 3)]) == ([0, 2], [1, 3])


def test_a_tuple_of_two_that_fits_only_one_way_is_read_that_way():
    assert sides([5.0, 2.0], bounds=((0.0, 10.0), (1.0, 30.0))) == ([0, 1], [10, 30])


def test_a_tuple_of_two_that_fits_both_ways_is_refused_with_the_mend():
    with pytest.raises(UsageError, match=r"two pairs or as \(lower, upper\); write the pairs as a list"):
        domain_of(np.array([0.5, 2.5]), bounds=((0, 1), (2, 3)))


def test_a_tuple_of_two_lists_may_hold_a_variable_fast():
    assert sides([1.0, 2.0], bounds=([1, 0], [1, 5])) == ([1, 0], [1, 5])


@pytest.mark.parametrize(
    ("bounds", "words"),
    [
        ([(0, 2)], "1 parts for 3 variables"),
        (([0, 0], [1, 1]), "2 entries but there are 3 variables"),
        ([(0, 2), (float("nan"), 5), (-1, 1)], r"a bound is NaN \(entry 1\); use None"),
        ([(0, 2), (5, -3), (-1, 1)], "the bounds of entry 1 are the wrong way round"),
        ([(0, 2), ("low", 5), (-1, 1)], "numbers or None are needed"),
        (7, r"give a list of \(lower, upper\) pairs"),
    ],
)
def test_bounds_that_make_no_sense_are_refused(bounds, words):
    with pytest.raises(UsageError, match=words):
        domain_of(X, bounds=bounds)


def test_a_point_outside_its_bounds_is_refused_by_entry():
    with pytest.raises(UsageError, match=r"entry 1 of the point is -2, outside its bounds \[0, 5\]; move the point"):
        domain_of(X, bounds=[(0, 2), (0, 5), (-1, 1)])


def test_a_point_on_a_bound_is_inside():
    assert sides([1.0], bounds=[(1.0, 2.0)]) == ([1.0], [2.0])


def test_a_variable_held_by_equal_bounds_is_allowed():
    assert sides([1.0, 2.0], bounds=[(1.0, 1.0), (0.0, 3.0)]) == ([1.0, 0.0], [1.0, 3.0])


def test_the_size_of_a_variable_is_its_own_else_the_width_of_its_bounds_else_one():
    domain = domain_of(np.array([-4.0, 0.0, 0.0]), bounds=[(None, None), (-3.0, 3.0), (None, 5.0)])

    assert domain.scale.tolist() == [4.0, 6.0, 1.0]


def test_a_typical_size_takes_the_place_of_the_own_size():
    assert domain_of(X, typical=[10.0, 20.0, 30.0]).scale.tolist() == [10.0, 20.0, 30.0]


def test_one_typical_size_holds_for_all_variables():
    assert domain_of(X, typical=0.5).scale.tolist() == [0.5, 0.5, 0.5]


def test_a_typical_size_of_nan_leaves_the_own_size():
    assert domain_of(X, typical=[np.nan, 20.0, np.nan]).scale.tolist() == [1.0, 20.0, 1.0]


@pytest.mark.parametrize("typical", [0.0, -1.0, np.inf, [1.0, 0.0, 1.0]])
def test_a_typical_size_must_be_finite_and_positive(typical):
    with pytest.raises(UsageError, match="a typical size must be finite and > 0"):
        domain_of(X, typical=typical)


def test_typical_sizes_must_be_as_many_as_the_variables():
    with pytest.raises(UsageError, match="typical has 2 entries but there are 3 variables"):
        domain_of(X, typical=[1.0, 2.0])


def test_a_domain_cannot_be_changed():
    with pytest.raises(ValueError, match="read-only"):
        domain_of(X).lower[0] = 0.0
