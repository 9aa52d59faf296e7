"""Nested inputs and the vector of all their real numbers."""

from collections import namedtuple

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gradcheck import UsageError
from gradcheck.problem.layout import args, layout_of, points

Pair = namedtuple("Pair", ["left", "right"])


def as_received(at, **options):
    """What a model gets for `at`: positional and keyword arguments."""
    layout, vector = layout_of(at, **options)
    return layout.restore(vector)


def names_of(at, **options):
    layout, _ = layout_of(at, **options)
    return [layout.name(i) for i in range(layout.size)]


# --- what reaches the model ------------------------------------------------------------------------------------------


def test_a_list_of_numbers_reaches_the_model_as_a_float_array():
    ((x,), keywords) = as_received([0.3, 1.2])

    assert isinstance(x, np.ndarray)
    assert x.dtype == float
    assert x.tolist() == [0.3, 1.2]
    assert keywords == {}


def test_a_rectangular_list_of_lists_is_one_array_of_that_shape():
    ((x,), _) = as_received([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])

    assert x.shape == (2, 3)


def test_a_tuple_of_numbers_is_an_array_too():
    ((x,), _) = as_received((0.3, 1.2))

    assert isinstance(x, np.ndarray)


def test_a_number_reaches_the_model_as_a_float_and_its_claim_has_no_axes():
    layout, vector = layout_of(0.3)
    ((x,), _) = layout.restore(vector)

    assert type(x) is float
    assert layout.shape == ()


def test_a_numpy_number_reaches_the_model_as_a_float():
    ((x,), _) = as_received(np.float64(0.3))

    assert type(x) is float


def test_an_array_without_axes_stays_an_array_without_axes():
    layout, vector = layout_of(np.array(0.3))
    ((x,), _) = layout.restore(vector)

    assert isinstance(x, np.ndarray)
    assert x.shape == layout.shape == ()


def test_a_matrix_is_one_argument_and_never_several_points():
    layout, vector = layout_of(np.ones((3, 2)))

    assert vector.size == layout.size == 6
    assert layout.restore(vector)[0][0].shape == (3, 2)


def test_a_dict_reaches_the_model_as_a_dict():
    ((x,), _) = as_received({"weights": np.ones((2, 2)), "offset": 0.5})

    assert set(x) == {"weights", "offset"}
    assert x["weights"].shape == (2, 2)
    assert type(x["offset"]) is float


def test_a_list_with_parts_of_unequal_shape_is_a_nesting():
    ((x,), _) = as_received([[1.0, 2.0], [3.0]])

    assert isinstance(x, list)
    assert [part.tolist() for part in x] == [[1.0, 2.0], [3.0]]


def test_a_list_that_holds_an_array_is_a_nesting():
    ((x,), _) = as_received([np.ones(2), 3.0])

    assert isinstance(x, list)
    assert type(x[1]) is float


def test_a_tuple_that_holds_an_array_stays_a_tuple():
    ((x,), _) = as_received((np.ones(2), 3.0))

    assert isinstance(x, tuple)


def test_a_named_tuple_of_arrays_reaches_the_model_as_one():
    ((x,), _) = as_received(Pair(np.ones(2), np.zeros(3)))

    assert isinstance(x, Pair)
    assert x.right.size == 3


def test_every_call_gets_copies_of_its_own():
    layout, vector = layout_of({"a": np.ones(2)})
    layout.restore(vector)[0][0]["a"][:] = 7.0

    assert layout.restore(vector)[0][0]["a"].tolist() == [1.0, 1.0]


def test_the_users_own_array_is_never_handed_out():
    mine = np.ones(2)
    ((x,), _) = as_received(mine)

    assert not np.shares_memory(x, mine)


# --- what is passed through, and what is changed with a notice -------------------------------------------------------


@pytest.mark.parametrize("at", [[1, 2], np.array([1, 2]), 3], ids=["list", "array", "number"])
def test_integers_at_the_top_reach_the_model_as_floats_and_a_notice_says_so(at):
    layout, vector = layout_of(at)
    ((x,), _) = layout.restore(vector)

    assert np.asarray(x).dtype == float
    assert any("integers" in notice and "float64" in notice for notice in layout.notices)


def test_single_precision_reaches_the_model_as_double_and_a_notice_says_so():
    layout, vector = layout_of(np.array([0.5, 1.5], dtype=np.float32))

    assert layout.restore(vector)[0][0].dtype == np.float64
    assert any("float32" in notice for notice in layout.notices)


def test_doubles_need_no_notice():
    assert layout_of([0.3, 1.2])[0].notices == ()


def test_an_integer_inside_a_nesting_is_passed_through_untouched_with_a_notice():
    layout, vector = layout_of({"x": 0.5, "count": 3})
    ((x,), _) = layout.restore(vector)

    assert vector.tolist() == [0.5]
    assert type(x["count"]) is int
    assert any('["count"]' in notice for notice in layout.notices)


@pytest.mark.parametrize("flag", [True, "fast", None, b"raw"])
def test_what_is_no_number_is_passed_through_inside_a_nesting(flag):
    ((x,), _) = as_received({"x": 0.5, "flag": flag})

    assert x["flag"] is flag


# --- what is refused -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("at", [[], {}, np.empty(0), (), [[]], {"count": 3}, {"mode": "fast"}])
def test_an_input_without_a_real_number_is_refused(at):
    with pytest.raises(UsageError, match="no real number"):
        layout_of(at)


@pytest.mark.parametrize("at", ["0.3, 1.2", None, True, object(), {1.0, 2.0}])
def test_what_is_no_number_at_all_is_refused_with_its_type(at):
    with pytest.raises(UsageError, match=type(at).__name__):
        layout_of(at)


@pytest.mark.parametrize("at", [1 + 2j, [1 + 2j], np.array([1j]), {"x": np.array([1j])}])
def test_complex_parameters_are_refused_with_the_mend(at):
    with pytest.raises(UsageError, match=r"complex.*real and imaginary parts as two"):
        layout_of(at)


@pytest.mark.parametrize(
    ("at", "name"),
    [([1.0, float("nan")], r"x\[1\]"), ({"a": np.array([0.5, np.inf])}, r'x\["a"\]\[1\]'), (float("nan"), "x")],
)
def test_an_entry_that_is_not_finite_is_refused_by_name(at, name):
    with pytest.raises(UsageError, match=f"at {name}; every entry must be finite"):
        layout_of(at)


def test_text_inside_an_array_is_refused():
    with pytest.raises(UsageError, match="numbers are needed"):
        layout_of(np.array(["a", "b"]))


def test_points_without_a_point_are_refused():
    with pytest.raises(UsageError, match="holds no point"):
        points()


# --- names -----------------------------------------------------------------------------------------------------------


def test_entries_are_named_by_their_place():
    assert names_of([0.3, 1.2]) == ["x[0]", "x[1]"]
    assert names_of(np.ones((2, 2))) == ["x[0, 0]", "x[0, 1]", "x[1, 0]", "x[1, 1]"]
    assert names_of(0.3) == ["x"]


def test_entries_of_a_nesting_are_named_by_their_path():
    assert names_of({"a": np.ones(2), "b": {"c": 0.5}}, root="p") == ['p["a"][0]', 'p["a"][1]', 'p["b"]["c"]']


def test_a_name_is_made_for_one_entry_without_making_all():
    layout, _ = layout_of(np.zeros(1_000_000))

    assert layout.name(999_999) == "x[999999]"


def test_there_is_no_name_beyond_the_last_entry():
    with pytest.raises(IndexError):
        layout_of([0.3])[0].name(1)


# --- several arguments -----------------------------------------------------------------------------------------------


def beam(load, length, *, mode="fast"):
    return load * length


def test_arguments_reach_the_model_in_their_places():
    positional, keywords = as_received(args(2.0, [3.0, 4.0], mode="slow"), function=beam)

    assert positional[0] == 2.0
    assert positional[1].tolist() == [3.0, 4.0]
    assert keywords == {"mode": "slow"}


def test_arguments_are_named_by_the_models_own_parameters():
    assert names_of(args(2.0, [3.0, 4.0]), function=beam) == ["load", "length[0]", "length[1]"]


@pytest.mark.parametrize("wrt", ["length", ["length"], 1, [1]])
def test_only_the_arguments_named_by_wrt_are_variables(wrt):
    layout, vector = layout_of(args(2.0, 3.0), function=beam, wrt=wrt)

    assert vector.tolist() == [3.0]
    assert layout.name(0) == "length"


def test_an_argument_outside_wrt_may_be_anything():
    positional, _ = as_received(args("steel", 3.0), function=beam, wrt="length")

    assert positional == ("steel", 3.0)


def test_a_wrt_that_names_no_argument_is_refused_with_the_arguments():
    with pytest.raises(UsageError, match="wrt names width, but the arguments are load, length"):
        layout_of(args(2.0, 3.0), function=beam, wrt="width")


# --- claims with the structure of the input --------------------------------------------------------------------------


def test_a_claim_with_the_structure_of_the_input_becomes_one_vector():
    layout, _ = layout_of({"a": np.ones(2), "b": 0.5})

    assert layout.flatten({"a": [1.0, 2.0], "b": 3.0}, "the claim").tolist() == [1.0, 2.0, 3.0]


def test_a_claim_need_not_hold_what_is_no_variable():
    layout, _ = layout_of({"a": np.ones(2), "mode": "fast", "b": 0.5})

    assert layout.flatten({"a": [1.0, 2.0], "b": 3.0}, "the claim").tolist() == [1.0, 2.0, 3.0]


@pytest.mark.parametrize("claim", [{"a": [1.0, 2.0]}, 4.0, {"a": [1.0], "b": 2.0}, {"a": [1.0, 2.0, 3.0], "b": 2.0}])
def test_a_claim_of_another_structure_is_refused(claim):
    layout, _ = layout_of({"a": np.ones(2), "b": 0.5})

    with pytest.raises(UsageError, match="the claim"):
        layout.flatten(claim, "the claim")


numbers = st.floats(-1e6, 1e6)
leaves = numbers | st.lists(numbers, min_size=1, max_size=4).map(np.array)
nestings = st.recursive(
    leaves,
    lambda inner: (
        st.dictionaries(st.text("abc", min_size=1), inner, min_size=1, max_size=3)
        | st.lists(inner, min_size=1, max_size=3)
    ),
    max_leaves=8,
)


@given(nestings)
def test_a_nesting_comes_back_from_its_vector_as_it_was(at):
    layout, vector = layout_of({"at": at})
    ((restored,), _) = layout.restore(vector)

    again, same = layout_of(restored)
    assert np.array_equal(vector, same)
    assert [again.name(i) for i in range(again.size)] == [layout.name(i) for i in range(layout.size)]
    assert np.array_equal(layout.flatten(restored, "the claim"), vector)
