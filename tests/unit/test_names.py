"""Names of many entries behave as the tuple of them would, and are made when they are read."""

import pickle

import pytest

from gradcheck.records.names import Names
from gradcheck.records.plain import plain


def names(size=5):
    return Names(size, "x[{}]".format)


def test_none_is_made_before_it_is_read():
    made = []
    many = Names(10**6, lambda i: made.append(i) or f"x[{i}]")

    assert len(many) == 10**6
    assert many[-1] == "x[999999]"
    assert made == [999_999]


def test_they_are_equal_to_the_tuple_of_them():
    assert names(2) == ("x[0]", "x[1]")
    assert names(2) != ("x[0]", "x[2]")
    assert hash(names(2)) == hash(("x[0]", "x[1]"))
    assert names(2) != ["x[0]", "x[1]"]


def test_a_slice_is_a_tuple():
    assert names()[1:3] == ("x[1]", "x[2]")
    assert names()[::-2] == ("x[4]", "x[2]", "x[0]")


@pytest.mark.parametrize("place", [5, -6])
def test_a_place_outside_is_an_error_that_says_how_many_there_are(place):
    with pytest.raises(IndexError, match="there are 5 names"):
        names()[place]


def test_they_are_added_to_tuples():
    assert names(1).__add__(("y",)) == ("x[0]", "y")
    assert names(1).__radd__(("y",)) == ("y", "x[0]")


def test_they_travel_as_a_tuple():
    assert pickle.loads(pickle.dumps(names(2))) == ("x[0]", "x[1]")
    assert plain(names(2)) == ["x[0]", "x[1]"]


def test_many_are_shown_by_the_first_and_the_last():
    assert repr(names(1)) == "('x[0]',)"
    assert repr(names(9)) == "<9 names: 'x[0]' to 'x[8]'>"
