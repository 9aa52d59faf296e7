"""Nested inputs and the vector of all their real numbers."""

import math
import warnings
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


def test_a_deep_nesting_comes_back_too():
    at = 1.5
    for _ in range(3000):
        at = {"a": at}
    layout, vector = layout_of(at)

    assert vector.tolist() == [1.5]
    assert layout.flatten(layout.restore(vector)[0][0], "the claim").tolist() == [1.5]


def test_names_of_many_leaves_are_found_without_looking_at_all():
    layout, _ = layout_of({f"k{i}": np.ones(2) for i in range(20_000)})

    assert layout.name(39_999) == 'x["k19999"][1]'
    assert layout.name(20_000) == 'x["k10000"][0]'


# --- memory ----------------------------------------------------------------------------------------------------------


def turned_about(shape, order):
    """An array whose axes stand in memory in this order."""
    array = np.linspace(0.5, 1.5, math.prod(shape)).reshape([shape[axis] for axis in order])
    return array.transpose(np.argsort(order))


@pytest.mark.parametrize("order", [(0, 1, 2), (2, 1, 0), (1, 0, 2), (2, 0, 1), (0, 2, 1), (1, 2, 0)])
def test_an_array_keeps_its_order_of_memory(order):
    array = turned_about((2, 3, 4), order)
    layout, vector = layout_of({"a": np.ones(2), "b": array})
    ((copied,), _) = layout.restore(vector)
    ((viewed,), _) = layout.received(layout.in_memory_order(vector))

    assert vector[2:].tolist() == array.ravel(order="C").tolist()
    for received in (copied["b"], viewed["b"]):
        assert received.strides == array.strides
        assert np.array_equal(received, array)
        assert received.flags.writeable


@pytest.mark.parametrize("order", [(1, 0, 2), (2, 0, 1)])
def test_a_moved_entry_is_found_in_memory(order):
    array = turned_about((2, 3, 4), order)
    layout, vector = layout_of([np.ones(2), array])
    for entry in range(layout.size):
        memory = layout.in_memory_order(vector)
        memory[layout.memory_positions(np.array([entry]))[0]] = 7.0
        ((received,), _) = layout.received(memory)

        assert np.flatnonzero(layout.flatten(received, "the claim") == 7.0).tolist() == [entry]


@pytest.mark.parametrize("step", [2, -1])
def test_an_array_with_gaps_or_backwards_reaches_the_model_whole(step):
    array = np.arange(1.0, 9.0)[::step]
    ((x,), _) = as_received(array)

    assert np.array_equal(x, array)


@pytest.mark.parametrize("dtype", [">f8", np.longdouble, np.float16, np.float32])
def test_any_floating_type_reaches_the_model_as_doubles_of_the_machine(dtype):
    layout, vector = layout_of({"a": np.array([0.5, 1.5], dtype=dtype)})
    ((x,), _) = layout.restore(vector)

    assert x["a"].dtype == np.dtype("=f8")
    assert x["a"].tolist() == [0.5, 1.5]
    assert bool(layout.notices) == (dtype != ">f8")


def test_a_read_only_array_reaches_the_model_as_one_that_can_be_written():
    mine = np.ones(2)
    mine.setflags(write=False)

    assert as_received({"a": mine})[0][0]["a"].flags.writeable


def test_an_array_on_disk_reaches_the_model_as_an_ordinary_one(tmp_path):
    mapped = np.memmap(tmp_path / "numbers", dtype=float, mode="w+", shape=(3,))
    mapped[:] = 1.5
    layout, vector = layout_of(mapped)

    assert type(layout.restore(vector)[0][0]) is np.ndarray
    assert layout.notices == ()


@pytest.mark.parametrize("make", [np.matrix, lambda a: np.ma.masked_array(a, [[False, False]])])
def test_arrays_of_another_class_become_plain_ones_and_a_notice_says_so(make):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", PendingDeprecationWarning)
        layout, vector = layout_of(make([[1.0, 2.0]]))

    assert type(layout.restore(vector)[0][0]) is np.ndarray
    assert "numpy array" in layout.notices[0]


# --- notices ---------------------------------------------------------------------------------------------------------


def test_a_thousand_parts_that_are_no_variables_make_one_notice():
    layout, _ = layout_of({"x": 0.5} | {f"n{i}": i for i in range(1000)})

    assert len(layout.notices) == 1
    assert 'x["n0"] (int)' in layout.notices[0]
    assert "and 995 more" in layout.notices[0]


def test_the_same_array_twice_is_varied_one_by_one_and_told():
    weights = np.ones(2)
    layout, vector = layout_of({"a": weights, "b": weights})

    assert vector.size == 4
    assert layout.notices == ('x["b"] is the same array as x["a"]; they are varied one by one',)


def test_what_holds_no_variable_is_passed_on_as_the_same_object():
    settings = {"mode": "fast", "sizes": {"n": 3}}
    ((x,), _) = as_received({"x": 0.5, "settings": settings})

    assert x["settings"] is settings


# --- more that is refused --------------------------------------------------------------------------------------------


def test_a_list_that_holds_itself_is_refused_by_name():
    at = [1.0, np.ones(2)]
    at.append({"again": at})

    with pytest.raises(UsageError, match=r'x\[2\]\["again"\] is a list that holds itself'):
        layout_of(at)


@pytest.mark.parametrize(
    ("at", "words"),
    [
        (np.ma.masked_array([1.0, 2.0], [False, True]), "1 masked entry, which cannot be moved.*compressed"),
        ({"a": np.ma.masked_array([1.0, 2.0], [True, True])}, r'x\["a"\] is an array with 2 masked entries'),
        (np.array([1.0, 2.0], dtype=object), r"array of objects.*array.astype\(float\)"),
        ({"a": np.array([1.0, 2.0], dtype=object)}, r'x\["a"\] is an array of objects'),
        (np.array([np.ones(2), np.ones(3)], dtype=object), "pass its parts as a list of arrays"),
        (np.array(["2026-01-01"], dtype="datetime64[D]"), "array of dates"),
        (np.array([3], dtype="timedelta64[s]"), "array of time spans"),
    ],
)
def test_arrays_that_only_look_like_numbers_are_refused_with_the_mend(at, words):
    with pytest.raises(UsageError, match=words):
        layout_of(at)


# --- arguments in every form -----------------------------------------------------------------------------------------


def truss(load, /, length, *sections, depth=2.0, **more):
    return load * length


def test_arguments_of_every_kind_are_named():
    at = args(1.0, 2.0, 3.0, 4.0, depth=5.0, width=6.0)

    assert names_of(at, function=truss) == ["load", "length", "sections[0]", "sections[1]", "depth", "width"]


@pytest.mark.parametrize(
    ("wrt", "names"),
    [
        ("sections", ["sections[0]", "sections[1]"]),
        ("sections[1]", ["sections[1]"]),
        ("depth", ["depth"]),
        (["width", 0], ["width", "load"]),
        (("depth", "length"), ["depth", "length"]),
    ],
)
def test_variables_stand_in_the_order_of_wrt(wrt, names):
    at = args(1.0, 2.0, 3.0, 4.0, depth=5.0, width=6.0)
    layout, _ = layout_of(at, function=truss, wrt=wrt)

    assert [layout.name(i) for i in range(layout.size)] == names
    assert layout.flatten(tuple(float(i) for i in range(len(names))), "the claim").tolist() == list(range(len(names)))


def test_a_claim_may_name_its_arguments():
    layout, _ = layout_of(args(1.0, length=np.ones(2)), function=beam)

    assert layout.flatten({"length": [2.0, 3.0], "load": 1.0}, "the claim").tolist() == [1.0, 2.0, 3.0]


@pytest.mark.parametrize(
    ("wrt", "words"),
    [
        ("mode", r"mode was left to its default: give it, at=gradcheck.args\(..., mode=...\)"),
        (2, "wrt names 2, but the arguments are load, length"),
        (-1, "wrt names -1"),
        (True, "wrt names True"),
        ([], "names no argument"),
        (1.5, "wrt names 1.5"),
    ],
)
def test_a_wrt_that_fits_nothing_is_refused(wrt, words):
    with pytest.raises(UsageError, match=words):
        layout_of(args(2.0, 3.0), function=beam, wrt=wrt)


def test_a_wrt_may_name_the_only_argument():
    assert layout_of([0.3], root="load", wrt="load")[1].tolist() == [0.3]


@given(nestings)
def test_every_entry_has_a_name_of_its_own(at):
    layout, _ = layout_of({"at": at})
    names = [layout.name(i) for i in range(layout.size)]

    assert len(set(names)) == layout.size
