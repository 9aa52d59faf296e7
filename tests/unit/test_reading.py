"""Points as people write them."""

import json
import math

import numpy as np
import pytest

from gradcheck.errors import UsageError
from gradcheck.problem.reading import bounds_from_text, point_from_text, points_from_file


@pytest.mark.parametrize(
    ("text", "point"),
    [
        ("0.3", 0.3),
        ("0.3, 1.2", [0.3, 1.2]),
        ("-1,2e-3", [-1.0, 0.002]),
        ("4,", [4.0]),
        ("[1.0, 2.0]", [1.0, 2.0]),
        ('{"a": 0.5, "b": [1.0, 2.0]}', {"a": 0.5, "b": [1.0, 2.0]}),
    ],
)
def test_a_point_is_numbers_separated_by_commas_or_json(text, point):
    assert point_from_text(text) == point


@pytest.mark.parametrize("text", ["", "a", "1,b", "1;2", "[1, 2", "{a: 1}", "1,,2"])
def test_anything_else_is_refused_with_the_text_and_the_option(text):
    with pytest.raises(UsageError) as caught:
        point_from_text(text)

    assert f"--at {text!r}" in str(caught.value)


def test_missing_bounds_are_none():
    assert bounds_from_text(None, None) is None


def test_one_side_leaves_the_other_open():
    bounds = bounds_from_text("0", None)

    assert (bounds.lb, bounds.ub) == ([0.0], [math.inf])


def test_single_bounds_may_be_left_open():
    assert bounds_from_text("0,none,2", "1,5,none").ub == [1.0, 5.0, math.inf]


def test_a_bound_that_is_no_number_is_refused():
    with pytest.raises(UsageError, match=r"--upper '1,high': 'high' is no number"):
        bounds_from_text(None, "1,high")


@pytest.mark.parametrize(
    ("name", "content"),
    [
        ("points.csv", "span,chord\n1,2\n3,4\n"),
        ("points.csv", "1;2\n\n3;4"),
        ("points.txt", "# iterates\n1 2\n3\t4  # last\n"),
        ("points.json", "[[1, 2], [3, 4]]"),
    ],
)
def test_points_are_read_row_by_row(tmp_path, name, content):
    path = tmp_path / name
    path.write_text(content, encoding="utf-8")

    assert points_from_file(path) == [[1.0, 2.0], [3.0, 4.0]]


def test_points_are_read_from_an_array_file(tmp_path):
    np.save(tmp_path / "points.npy", np.array([[1, 2], [3, 4]]))

    assert points_from_file(tmp_path / "points.npy") == [[1.0, 2.0], [3.0, 4.0]]


def test_a_single_point_needs_no_outer_list(tmp_path):
    (tmp_path / "point.json").write_text(json.dumps([1.0, 2.0]), encoding="utf-8")

    assert points_from_file(tmp_path / "point.json") == [[1.0, 2.0]]


@pytest.mark.parametrize(
    ("name", "content", "words"),
    [
        ("points.csv", "1,2\n3,x\n", "line 2: '3,x' is no row of numbers"),
        ("points.csv", "a,b\nc,d\n", "line 2: 'c,d' is no row of numbers"),
        ("points.csv", "1,2\n3\n", "point 2 has 1 numbers, but the first has 2"),
        ("points.csv", "", "holds no point"),
        ("points.json", '{"a": 1}', "must hold a list of points"),
        ("points.json", '[[1, "2"]]', "holds '2'; numbers are needed"),
        ("points.json", "[1, 2", "cannot be read"),
        ("points.npy", "no array", "cannot be read"),
        ("points.xlsx", "", "the ending must be one of .csv, .json, .npy, .txt"),
    ],
)
def test_a_file_that_holds_no_points_is_refused_with_the_place(tmp_path, name, content, words):
    path = tmp_path / name
    path.write_text(content, encoding="utf-8")

    with pytest.raises(UsageError) as caught:
        points_from_file(path)

    assert words in str(caught.value)
    assert str(path) in str(caught.value)


def test_a_missing_file_is_a_usage_error(tmp_path):
    with pytest.raises(UsageError, match="cannot be read: No such file"):
        points_from_file(tmp_path / "points.csv")
