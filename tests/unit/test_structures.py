"""Containers of every kind reach the model as they are, and claims with their structure are understood."""

import collections
import contextlib
import dataclasses
import functools
import re
import types
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import gradcheck
from gradcheck import DerivativeShapeError, UsageError
from gradcheck.problem.derivative_shape import claim_matrix
from gradcheck.problem.layout import args, layout_of
from gradcheck.problem.output_layout import output_layout


class Load(NamedTuple):
    force: Any
    arm: Any


@dataclass
class Layer:
    w: Any
    offset: Any
    steps: int = 3


@dataclass(frozen=True, slots=True)
class Frozen:
    w: Any
    offset: Any


@dataclass
class Plate:
    side: float
    area: float = field(init=False)

    def __post_init__(self):
        self.area = self.side**2

    @functools.cached_property
    def mass(self):
        return 3.0 * self.side


@dataclass(init=False)
class Odd:
    """Its constructor takes something else."""

    side: float

    def __init__(self, half):
        self.side = 2 * half

    @functools.cached_property
    def mass(self):
        return 3.0 * self.side


@dataclass
class Turned:
    """Its constructor changes what it is given: a second time, it would be changed twice."""

    angle: float

    def __post_init__(self):
        self.angle = np.radians(self.angle)


class Columns(list):
    pass


class Stubborn(list):
    def __init__(self, first, second):
        super().__init__([first, second])


def received(at, change=0.0):
    """What the model gets at a point beside `at`."""
    layout, vector = layout_of(at)
    return layout.restore(vector + change)[0][0]


@pytest.mark.parametrize(
    "at",
    [
        {"a": 0.5, 3: np.ones(2), (0, 1): 1.5},
        collections.OrderedDict(b=0.5, a=1.5),
        collections.defaultdict(list, a=0.5),
        types.MappingProxyType({"a": 0.5}),
        Load(0.5, 1.5),
        Load(np.ones(2), {"a": 0.5}),
        Layer(np.ones((3, 2)), 0.5),
        Frozen(np.ones((3, 2)), 0.5),
        types.SimpleNamespace(a=0.5, b=np.ones(2)),
        Columns([np.ones(2), 0.5]),
        [(0.5, np.ones(1)), [Load(1.0, 2.0)]],
    ],
    ids=lambda at: type(at).__name__,
)
def test_a_container_reaches_the_model_as_its_own_type_with_moved_numbers(at):
    again = received(at, change=1.0)

    assert type(again) is type(at)
    before, after = layout_of(at), layout_of(again)
    assert np.array_equal(after[1], before[1] + 1.0)
    assert [after[0].name(i) for i in range(after[0].size)] == [before[0].name(i) for i in range(before[0].size)]


def test_the_default_of_a_dict_is_kept():
    assert received(collections.defaultdict(list, a=0.5))["other"] == []


def test_the_order_of_keys_is_kept():
    assert list(received({"b": 0.5, "a": 1.5})) == ["b", "a"]


def test_a_list_that_cannot_be_made_again_reaches_the_model_as_a_plain_one():
    again = received(Stubborn(np.ones(2), 0.5))

    assert type(again) is list


def test_fields_that_are_no_numbers_are_kept():
    assert received(Layer(np.ones(2), 0.5, steps=7)).steps == 7


def test_what_a_class_derives_from_its_fields_follows_them():
    plate = Plate(2.0)
    assert plate.mass == 6.0
    again = received(plate, change=1.0)

    assert again.area == 9.0
    assert again.mass == 9.0


def test_a_field_set_by_hand_is_kept():
    plate = Plate(2.0)
    plate.area = 5.0

    assert received(plate, change=1.0).area == 5.0


def test_an_object_whose_constructor_takes_other_things_is_copied_without_what_it_remembers():
    odd = Odd(1.0)
    assert odd.mass == 6.0
    again = received(odd, change=1.0)

    assert again.side == 3.0
    assert again.mass == 9.0
    assert odd.side == 2.0


def test_an_object_whose_constructor_changes_its_fields_is_not_changed_twice():
    turned = Turned(90.0)

    assert received(turned).angle == turned.angle


def test_names_follow_the_structure():
    layout, _ = layout_of({"layer1": Layer(np.ones((4, 6)), 0.5), "load": [Load(0.1, np.ones(2))]}, root="params")

    assert layout.name(3 * 6 + 5) == 'params["layer1"].w[3, 5]'
    assert layout.name(24) == 'params["layer1"].offset'
    assert layout.name(26) == 'params["load"][0].arm[0]'


def test_empty_parts_take_no_room_and_need_no_claim():
    layout, vector = layout_of({"a": np.empty((0, 3)), "b": 0.5, "c": np.empty(0)})

    assert vector.tolist() == [0.5]
    assert layout.name(0) == 'x["b"]'
    assert layout.flatten({"b": 2.0}, "the claim").tolist() == [2.0]


# --- claims ----------------------------------------------------------------------------------------------------------

LAYER = Layer(np.ones((3, 2)), 0.5)


@pytest.mark.parametrize(
    ("at", "claim"),
    [
        (LAYER, Layer(2 * np.ones((3, 2)), 2.0)),
        (LAYER, {"w": 2 * np.ones((3, 2)), "offset": 2.0}),
        (LAYER, Layer(2 * np.ones((3, 2)), 2.0, steps=None)),
        (LAYER, np.full(7, 2.0)),
        (Load(0.5, 1.5), (2.0, 2.0)),
        (Load(0.5, 1.5), [2.0, 2.0]),
        (Load(0.5, 1.5), {"arm": 2.0, "force": 2.0}),
        ([np.ones(2), 3, 0.5], [np.full(2, 2.0), None, 2.0]),
        ([np.ones(2), 3, 0.5], [np.full(2, 2.0), 2.0]),
        ({"a": 0.5, "b": np.ones(2)}, [2.0, 2.0, 2.0]),
        ({"a": 0.5, "n": 3}, {"a": 2.0, "n": np.zeros((), [("float0", "V0")])}),
        (Plate(2.0), {"side": 2.0, "area": 0.0}),
        ([np.ones(2), np.ones(2)], np.full((2, 2), 2.0)),
    ],
)
def test_a_claim_is_understood_where_there_is_no_doubt(at, claim):
    layout, _ = layout_of(at)

    assert layout.flatten(claim, "the gradient claim").tolist() == [2.0] * layout.size


DICT = {"a": np.ones((3, 2)), "b": 0.5, "n": 3}


@pytest.mark.parametrize(
    ("claim", "words", "row"),
    [
        ({"a": np.ones((3, 2))}, r'\["b"\] is missing', r'> +\["b"\]: number +\["b"\]: -'),
        ({"a": np.ones((3, 2)), "c": 0.5}, r'\["b"\] is missing; \["c"\] stands there instead', r'> +\["b"\]'),
        ({"a": np.ones((3, 2)), "b": 1.0, "c": 2.0}, r'\["c"\] is one too many', r'> +\["c"\]: - +\["c"\]: number'),
        (
            {"a": np.ones((2, 3)), "b": 1.0},
            r'shape \(2, 3\) at x\["a"\], where shape \(3, 2\) is due; its transpose would fit: claim.T',
            r"> .*array \(3, 2\) .*array \(2, 3\)",
        ),
        ({"a": np.ones(6), "b": 1.0}, "right number of entries: reshape it", r"> .*array \(3, 2\) .*array \(6,\)"),
        ({"a": np.ones((3, 2)), "b": None}, r'None stands at x\["b"\].*claim zeros', r"> .*number .*None"),
        ({"a": {"w": 1.0}, "b": 1.0}, r'dict of 1 stands at x\["a"\], where array \(3, 2\) is due', r"> .*dict of 1"),
        ([1.0, 2.0], "list of 2 was found, where dict of 3 is due", r"> x: dict of 3 +x: list of 2"),
        ((np.ones((3, 2)), 1.0, 0), "tuple of 3 was found, where dict of 3 is due", r"> x: dict of 3 +x: tuple of 3"),
        (None, "returned None; does it lack a return statement", r"> x: dict of 3 +x: None"),
        (np.ones(4), r"array \(4,\) was found, where dict of 3 is due", r"> x: dict of 3 +x: array \(4,\)"),
    ],
)
def test_where_structures_differ_both_are_shown_and_the_first_difference_is_marked(claim, words, row):
    layout, _ = layout_of(DICT)
    with pytest.raises(DerivativeShapeError, match=words) as told:
        layout.flatten(claim, "the gradient claim")

    assert [line for line in str(told.value).splitlines() if line.lstrip().startswith(">")]
    assert re.search(row, str(told.value))
    assert len(str(told.value).splitlines()) <= 10


def test_a_sequence_of_another_length_is_told():
    layout, _ = layout_of([np.ones(2), 0.5, {"a": 1.0}])
    with pytest.raises(
        DerivativeShapeError, match=r"it has 2 parts, where 3 are due(.|\n)*> +\[2\]: dict of 1 +\[2\]: -"
    ):
        layout.flatten([np.ones(2), 0.5], "the claim")


def test_a_difference_deep_inside_is_shown_in_a_few_lines():
    at, claim = [np.ones(2)], [np.ones(3)]
    for i in range(40):
        at, claim = {f"k{i}": at, "z": 1.0}, {f"k{i}": claim, "z": 1.0}
    layout, _ = layout_of(at)
    with pytest.raises(DerivativeShapeError) as told:
        layout.flatten(claim, "the claim")

    lines = str(told.value).splitlines()
    assert len(lines) <= 10
    assert lines[-1].split() == [">", "[0]:", "array", "(2,)", "[0]:", "array", "(3,)"]


def test_a_text_in_a_claim_is_refused_with_its_place():
    layout, _ = layout_of({"a": np.ones(2), "b": 0.5})
    with pytest.raises(UsageError, match=r'the claim at x\["a"\] is text'):
        layout.flatten({"a": ["x", "y"], "b": 3.0}, "the claim")


def test_masked_entries_in_a_claim_are_refused():
    layout, _ = layout_of({"a": np.ones(2)})
    with pytest.raises(UsageError, match=r"masked entries.*filled"):
        layout.flatten({"a": np.ma.masked_array([1.0, 2.0], [True, False])}, "the claim")


def test_a_nesting_where_one_array_is_due_shows_both():
    layout, _ = layout_of([1.0, 2.0, 3.0])
    with pytest.raises(DerivativeShapeError, match=r"x is one array, and a dict was found(.|\n)*> x: array \(3,\)"):
        claim_matrix("gradient", {"x": np.ones(3)}, layout, ())


def test_a_tuple_of_one_array_is_the_array():
    layout, _ = layout_of([1.0, 2.0, 3.0])

    assert claim_matrix("gradient", (np.ones(3),), layout, ()).tolist() == [[1.0, 1.0, 1.0]]


@pytest.mark.parametrize("at", [[1.0, 2.0, 3.0], {"a": np.ones(2), "b": 0.5}])
def test_a_pair_of_value_and_gradient_is_told_what_to_do(at):
    layout, vector = layout_of(at)
    gradient = layout.restore(vector)[0][0]
    with pytest.raises(DerivativeShapeError, match=r"pair.*value_and_gradient=.*pick the second part"):
        claim_matrix("gradient", (3.0, gradient), layout, ())


def test_claims_for_several_arguments_must_be_as_many():
    layout, _ = layout_of(args(1.0, 2.0), function=lambda load, arm: load * arm)
    with pytest.raises(DerivativeShapeError, match=r"one part per differentiated argument is due \(load, arm\)"):
        layout.flatten((1.0, 2.0, 3.0), "the claim")


def test_a_difference_inside_an_argument_is_shown_beside_the_others():
    layout, _ = layout_of(args(1.0, {"c": 2.0}), function=lambda load, arm: load)
    with pytest.raises(DerivativeShapeError, match=r'\["c"\] is missing at arm; \["d"\] stands there instead') as told:
        layout.flatten((1.0, {"d": 2.0}), "the claim")

    assert "claim: tuple of 2" in str(told.value)


def test_tables_are_arrays_and_a_notice_says_so():
    pandas = pytest.importorskip("pandas")
    layout, vector = layout_of({"s": pandas.Series([1.0, 2.0]), "whole": pandas.DataFrame({"a": [1, 2]})})

    assert vector.tolist() == [1.0, 2.0]
    assert type(layout.restore(vector)[0][0]["s"]) is np.ndarray
    assert layout.notices[0] == 'x["s"] was given as Series; the model received a numpy array'
    assert 'x["whole"] (DataFrame)' in layout.notices[1]
    assert layout.flatten({"s": pandas.Series([3.0, 4.0])}, "the claim").tolist() == [3.0, 4.0]


# --- the whole check -------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Wing:
    chord: Any
    twist: Any
    sections: int = 2


def lift(wing):
    return float((wing.chord * np.sin(wing.twist)).sum() * wing.sections)


def lift_gradient(wing):
    return dataclasses.replace(
        wing, chord=np.sin(wing.twist) * wing.sections, twist=wing.chord * np.cos(wing.twist) * wing.sections
    )


WING = Wing(np.array([1.0, 0.7]), np.array([0.3, 0.4]))


def test_a_dataclass_is_checked_and_its_integers_are_told():
    report = gradcheck.check(lift, at=WING, gradient=lift_gradient)

    assert report.verdict == "confirmed"
    assert report.entries.name == ("wing.chord[0]", "wing.chord[1]", "wing.twist[0]", "wing.twist[1]")
    assert any("wing.sections (int)" in notice for notice in report.notices)


def test_a_wrong_field_is_named():
    def wrong(wing):
        return dataclasses.replace(lift_gradient(wing), twist=np.zeros(2))

    report = gradcheck.check(lift, at=WING, gradient=wrong, on_refuted="return")

    refuted = [
        name for name, verdict in zip(report.entries.name, report.entries.verdict, strict=True) if verdict == "refuted"
    ]
    assert refuted == ["wing.twist[0]", "wing.twist[1]"]


def test_nan_at_a_leaf_of_a_claim_is_named():
    report = gradcheck.check(
        lift,
        at=WING,
        gradient=lambda wing: dataclasses.replace(lift_gradient(wing), chord=np.array([np.nan, 1.0])),
        on_refuted="return",
    )

    assert report.entries.verdict[0] == "refuted"


def test_a_model_that_writes_into_a_part_is_found_out():
    def writes(wing):
        wing.twist[0] = 5.0
        return float(wing.chord.sum())

    report = gradcheck.check(
        writes, at=WING, gradient=Wing(np.ones(2), np.zeros(2)), on_refuted="return", on_undecided="pass"
    )
    assert any("mutates-input" in str(finding.code) for finding in report.findings)
    assert WING.twist.tolist() == [0.3, 0.4]


def test_a_fortran_array_reaches_the_model_as_such():
    seen = set()

    def model(x):
        seen.add(x.flags.f_contiguous)
        return float((x**2).sum())

    at = np.asfortranarray(np.arange(1.0, 7.0).reshape(2, 3))
    assert gradcheck.check(model, at=at, gradient=lambda x: 2 * x).verdict == "confirmed"
    assert seen == {True}


# --- round trips -----------------------------------------------------------------------------------------------------

numbers = st.floats(-1e6, 1e6)
arrays = st.builds(
    lambda shape, seed, order: np.asarray(np.random.default_rng(seed).normal(size=shape), order=order),
    st.lists(st.integers(0, 3), min_size=0, max_size=3).map(tuple),
    st.integers(0, 99),
    st.sampled_from("CF"),
)
keys = st.text("ab'\"[.é", max_size=3) | st.integers(0, 9) | st.tuples(st.integers(0, 2), st.booleans())
structures = st.recursive(
    numbers | arrays | st.sampled_from([None, "fast", 3, True]),
    lambda inner: (
        st.dictionaries(keys, inner, max_size=3)
        | st.lists(inner, max_size=3)
        | st.lists(inner, max_size=3).map(tuple)
        | st.builds(Load, inner, inner)
        | st.builds(Layer, inner, inner)
        | st.builds(Frozen, inner, inner)
        | st.builds(lambda a, b: types.SimpleNamespace(a=a, b=b), inner, inner)
    ),
    max_leaves=10,
)


@given(structures)
def test_any_structure_comes_back_from_its_vector(at):
    layout, vector = layout_of({"held": at, "one": 0.5})
    moved = vector + 1.0
    ((restored,), _) = layout.restore(moved)
    again, same = layout_of(restored)

    assert type(restored["held"]) is type(at) or not isinstance(at, dict | Load | Layer | Frozen)
    assert np.array_equal(same, moved)
    assert np.array_equal(layout.flatten(restored, "the claim"), moved)
    names = [layout.name(i) for i in range(layout.size)]
    assert names == [again.name(i) for i in range(again.size)]
    assert len(set(names)) == len(names)


@given(structures, structures)
def test_a_claim_is_understood_or_refused_and_never_breaks_down(at, claim):
    layout, _ = layout_of({"held": at, "one": 0.5})

    for wrapped in ({"held": claim, "one": 0.5}, claim):
        with contextlib.suppress(UsageError):
            assert layout.flatten(wrapped, "the claim").shape == (layout.size,)


@settings(max_examples=50)
@given(structures, structures)
def test_a_jacobian_has_the_structure_of_the_output_and_inside_that_of_the_input(at, result):
    layout, _ = layout_of({"held": at, "one": 0.5})
    outputs = output_layout({"held": result, "one": 1.5}, "model")

    def block(row):
        """The rows of one output, with the number of each row in each place."""
        numbers = np.arange(row.start, row.stop, dtype=float).reshape(row.shape)
        return layout.arguments(lambda leaf: numbers[(..., *([None] * len(leaf.shape)))] + np.zeros(leaf.shape))[0][0]

    claim = outputs.arguments(block)[0][0]
    matrix = claim_matrix("jacobian", claim, layout, (outputs.size,), outputs)
    assert np.array_equal(matrix, np.arange(outputs.size)[:, None] + np.zeros(layout.size))
