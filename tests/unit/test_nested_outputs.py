"""Models that return nestings: rows with names, Jacobians with both structures."""

import dataclasses
import re
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import pytest

import gradcheck
from gradcheck import DerivativeShapeError, ModelFailure, UsageError
from gradcheck.evaluation.pipeline import open_session
from gradcheck.problem.subject import subjects_of_function


class Stresses(NamedTuple):
    top: Any
    mid: Any


@dataclass
class Report:
    cost: Any
    drag: Any


AT = {"span": 0.5, "loads": np.array([1.0, 2.0])}


def stress(p):
    return {"tip": 2 * p["span"], "mid": [p["loads"] ** 2, p["loads"].sum() * p["span"]]}


def stress_jacobian(p):
    return {
        "tip": {"span": 2.0, "loads": np.zeros(2)},
        "mid": [
            {"span": np.zeros(2), "loads": np.diag(2 * p["loads"])},
            {"span": p["loads"].sum(), "loads": np.full(2, p["span"])},
        ],
    }


def matrix_of(p):
    return np.array([[2.0, 0, 0], [0, 2 * p["loads"][0], 0], [0, 0, 2 * p["loads"][1]], [3.0, 0.5, 0.5]])


def check(model=stress, at=AT, **claims):
    return gradcheck.check(model, at=at, on_refuted="return", on_undecided="pass", **claims)


def test_rows_of_a_nested_output_have_readable_names():
    report = check(jacobian=stress_jacobian)

    assert report.verdict == "confirmed"
    assert report.entries.name[:2] == ('stress["tip"] by p["span"]', 'stress["tip"] by p["loads"][0]')
    assert 'stress["mid"][0][1] by p["loads"][0]' in report.entries.name
    assert report.entries.name[-1] == 'stress["mid"][1] by p["loads"][1]'


def test_a_flat_matrix_is_a_claim_on_a_nested_output_too():
    assert check(jacobian=matrix_of).verdict == "confirmed"
    assert check(jacobian=lambda p: matrix_of(p).tolist()).verdict == "confirmed"


def test_a_wrong_block_is_named():
    def wrong(p):
        claim = stress_jacobian(p)
        claim["mid"][1]["span"] *= 2
        return claim

    report = check(jacobian=wrong)
    refuted = [n for n, v in zip(report.entries.name, report.entries.verdict, strict=True) if v == "refuted"]
    assert refuted == ['stress["mid"][1] by p["span"]']


@pytest.mark.parametrize(
    ("model", "claim"),
    [
        (lambda x: Stresses(x[0] * x[1], 3 * x), Stresses(np.array([2.0, 1.0]), 3 * np.eye(2))),
        (lambda x: Stresses(x[0] * x[1], x[0]), Stresses([2.0, 1.0], [1.0, 0.0])),
        (lambda x: Report(x[0] * x[1], 3 * x), Report(np.array([2.0, 1.0]), 3 * np.eye(2))),
        (lambda x: Report(x[0] * x[1], 3 * x), {"cost": [2.0, 1.0], "drag": 3 * np.eye(2)}),
        (lambda x: (x[0] * x[1], 3 * x), (np.array([2.0, 1.0]), 3 * np.eye(2))),
        (lambda x: (2 * x, 3 * x), (2 * np.eye(2), 3 * np.eye(2))),
        (lambda x: {"only": x[0] * x[1]}, {"only": np.array([2.0, 1.0])}),
        (lambda x: {"a": x, "none": np.empty(0)}, {"a": np.eye(2), "none": np.empty((0, 2))}),
        (lambda x: {"grid": np.outer(x, [1.0, 2.0, 3.0])}, {"grid": np.einsum("ik,j->ijk", np.eye(2), [1.0, 2, 3])}),
    ],
)
def test_outputs_of_every_kind_are_checked(model, claim):
    assert check(model, np.array([1.0, 2.0]), jacobian=claim).verdict == "confirmed"


def test_entries_of_a_named_output_are_named_by_its_fields():
    report = check(lambda x: Stresses(x[0], 3 * x), [1.0, 2.0], jacobian=Stresses([1.0, 0.0], 3 * np.eye(2)))

    assert report.entries.name[0] == "model.top by x[0]"
    assert report.entries.name[-1] == "model.mid[1] by x[1]"


def test_entries_of_a_matrix_output_are_named_by_both_indices():
    report = check(lambda x: np.outer(x, x), [1.0, 2.0], jacobian=np.zeros((2, 2, 2)))

    assert report.entries.name[-1] == "model[1, 1] by x[1]"


def test_output_picks_a_nesting_out_of_what_the_model_returns():
    report = check(lambda p: ("log", stress(p)), output=lambda r: r[1], jacobian=stress_jacobian)

    assert report.verdict == "confirmed"


def test_what_is_no_real_number_in_an_output_is_left_out_and_told():
    report = check(
        lambda x: {"cost": x[0] * x[1], "iterations": 17, "converged": True, "log": "done"},
        [1.0, 2.0],
        jacobian={"cost": [2.0, 1.0], "iterations": None},
    )

    assert report.verdict == "confirmed"
    assert any('model["iterations"] (int)' in notice and "left out" in notice for notice in report.notices)


def test_single_precision_in_one_part_governs_the_tolerance():
    report = check(
        lambda x: {"a": (3 * x).astype(np.float32), "b": x}, [1.1, 2.3], jacobian={"a": 3 * np.eye(2), "b": np.eye(2)}
    )

    assert report.verdict == "confirmed"
    assert any("float32" in notice for notice in report.notices)


def test_single_precision_inside_a_nested_claim_is_seen():
    report = check(
        lambda p: float((p["a"] ** 3).sum()),
        {"a": np.array([0.3, 0.7])},
        gradient=lambda p: {"a": (3 * p["a"] ** 2).astype(np.float32)},
    )

    assert report.verdict == "confirmed"
    assert any("single precision (float32)" in notice for notice in report.notices)


def test_complex_step_passes_through_nested_inputs_and_outputs():
    report = check(jacobian=stress_jacobian, witnesses="complex step")

    assert report.verdict == "confirmed"


# --- what is refused -------------------------------------------------------------------------------------------------


def test_a_jacobian_without_one_of_the_outputs_shows_both_structures():
    def wrong(p):
        claim = stress_jacobian(p)
        del claim["tip"]
        return claim

    with pytest.raises(DerivativeShapeError, match=r'structure of the output: \["tip"\] is missing') as told:
        check(jacobian=wrong)
    assert re.search(r'> +\["tip"\]: number +\["tip"\]: -', str(told.value))


def test_a_block_without_one_of_the_inputs_shows_both_structures():
    def wrong(p):
        claim = stress_jacobian(p)
        del claim["mid"][0]["loads"]
        return claim

    with pytest.raises(DerivativeShapeError, match=r'claim at stress\["mid"\]\[0\] must have') as told:
        check(jacobian=wrong)
    assert re.search(r'> +\["loads"\]: array \(2, 2\) +\["loads"\]: -', str(told.value))


def test_a_block_with_the_inputs_first_is_told():
    with pytest.raises(DerivativeShapeError, match="the axes of the output must come first"):
        check(lambda p: 2 * p["a"][:2], {"a": np.ones(3)}, jacobian={"a": np.ones((3, 2))})


@pytest.mark.parametrize(
    ("model", "mend"),
    [
        (lambda x: (x.sum(), {"steps": 3}), r"output=lambda r: r\[0\]"),
        (lambda x: (x.sum(), x), r"output=lambda r: r\[0\]"),
        (lambda x: {"log": "done", "cost": x.sum()}, r'output=lambda r: r\["cost"\]'),
        (lambda x: Report("done", x.sum()), r"output=lambda r: r\.drag"),
    ],
)
def test_a_value_with_something_beside_it_is_told_how_to_pick(model, mend):
    with pytest.raises(UsageError, match=mend):
        check(model, [1.0, 2.0], gradient=[1.0, 1.0])


def changing(first, later):
    calls = []

    def model(x):
        calls.append(1)
        return first(x) if len(calls) < 3 else later(x)

    return model


@pytest.mark.parametrize(
    ("later", "words"),
    [
        (lambda x: {"b": x}, r'\["a"\] is missing; \["b"\] stands there instead'),
        (lambda x: {"a": x[:1]}, r'shape \(2,\) and then \(1,\) at model\["a"\]'),
        (lambda x: x, r"array \(2,\) was found, where dict of 1 is due"),
    ],
)
def test_a_structure_that_changes_between_calls_is_told(later, words):
    with pytest.raises(UsageError, match=words):
        check(changing(lambda x: {"a": x}, later), [1.0, 2.0], jacobian={"a": np.eye(2)})


def test_a_nan_in_a_nested_output_is_named():
    with pytest.raises(ModelFailure, match=r'model\["b"\]\[0\] is nan'):
        check(lambda x: {"a": x, "b": [x[0] * np.nan]}, [1.0, 2.0], jacobian=np.ones((3, 2)))


def test_an_output_without_a_real_number_is_refused():
    with pytest.raises(UsageError, match="without a real number"):
        check(lambda x: {"n": 3}, [1.0, 2.0], jacobian={"n": [0.0, 0.0]})


def test_complex_numbers_in_a_nested_output_are_refused_with_their_place():
    with pytest.raises(UsageError, match=r'model\["a"\] is complex'):
        check(lambda x: {"a": x * 1j, "b": 1.0}, [1.0, 2.0], jacobian=np.ones((3, 2)))


def test_masked_entries_of_an_output_are_refused():
    with pytest.raises(UsageError, match="masked entries"):
        check(lambda x: np.ma.masked_array(x, [True, False]), [1.0, 2.0], jacobian=np.eye(2))


def test_none_in_one_place_at_one_point_is_a_bad_point_and_no_error():
    def model(x):
        return {"a": x, "b": None if x[0] > 1.0 else x[1]}

    report = check(model, [1.0, 2.0], jacobian={"a": np.eye(2), "b": [0.0, 1.0]}, bounds=[(0.0, 2.0), (0.0, 3.0)])
    assert report.verdict != "refuted"


def test_points_of_unequal_size_have_outputs_of_their_own():
    at = gradcheck.points([1.0, 2.0], [1.0, 2.0, 3.0])
    report = check(lambda x: {"a": x}, at, jacobian=lambda x: {"a": np.eye(x.size)})

    assert report.entries.name[-1] == 'model["a"][2] by x[2] @ point 1'


def test_what_another_session_saw_does_not_count():
    subject = subjects_of_function(lambda x: {"a": x.astype(np.float32)}, [1.0, 2.0], claims={"jacobian": 0})[0]
    for start in (subject.start, subject.start + 1.0):
        session = open_session(dataclasses.replace(subject, start=start))
        session.start_values()

        assert session.ledger.output_kinds == {"model": "float32"}


def test_an_audit_takes_nested_inputs_outputs_and_claims():
    report = gradcheck.audit(
        lambda p: {"only": p["a"]["b"] ** 2}, at={"a": {"b": 0.5}}, jacobian={"only": {"a": {"b": 1.0}}}, budget=400
    )

    assert [str(claim.verdict) for claim in report.claims] == ["confirmed"]
