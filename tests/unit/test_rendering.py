"""The text of a report is made when somebody first reads it, and nobody can tell the difference."""

import copy
import json
import pickle
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

import gradcheck
from gradcheck.records.estimate import Estimate
from gradcheck.records.report import CheckReport
from gradcheck.report.check_text import check_text
from gradcheck.report.estimate_text import estimate_text


def product(x: Any) -> float:
    return float(x[0] * x[1] ** 2)


def product_gradient(x: Any) -> Any:
    return np.array([x[1] ** 2, 2 * x[0] * x[1]])


def checked() -> CheckReport:
    return gradcheck.check(product, at=[1.5, 2.0], gradient=product_gradient)


def estimated() -> Estimate:
    return gradcheck.estimate(product, at=[1.5, 2.0])


BOTH = pytest.mark.parametrize(("made", "rendered"), [(checked, check_text), (estimated, estimate_text)])


class Renderer:
    """Counts how often it is asked."""

    def __init__(self) -> None:
        self.asked = 0

    def __call__(self, record: Any) -> str:
        self.asked += 1
        return f"text number {self.asked}"


@BOTH
def test_the_text_is_what_the_renderer_makes_of_the_record(made, rendered):
    record = made()
    assert record.text == str(record) == rendered(record)
    assert record.text.splitlines()[0] in repr(record)


@BOTH
def test_a_text_is_made_once_and_only_when_it_is_read(made, rendered):
    renderer = Renderer()
    record = replace(made(), renderer=renderer, text="")
    assert renderer.asked == 0
    assert (record.text, str(record)) == ("text number 1", "text number 1")
    assert renderer.asked == 1


@BOTH
def test_a_silent_check_or_estimate_renders_nothing(made, rendered, monkeypatch):
    renderer = Renderer()
    monkeypatch.setattr(
        f"gradcheck.{'checks.told' if rendered is check_text else 'estimating'}.{rendered.__name__}", renderer
    )
    made()
    assert renderer.asked == 0


@BOTH
@pytest.mark.parametrize("travel", [lambda record: pickle.loads(pickle.dumps(record)), copy.copy, copy.deepcopy])
def test_copies_and_pickles_carry_the_text(made, rendered, travel):
    record = made()
    assert travel(record).text == record.text


@BOTH
def test_a_pickle_needs_no_renderer_to_be_read(made, rendered):
    record = replace(made(), renderer=None)
    assert pickle.loads(pickle.dumps(record)).text == rendered(record)


@BOTH
def test_a_changed_copy_keeps_the_text_unless_it_is_emptied(made, rendered):
    record = made()
    assert replace(record, evaluations=12_345).text == record.text
    assert "12,345" in replace(record, evaluations=12_345, text="").text
    assert replace(record, text="in other words").text == "in other words"


@BOTH
def test_neither_text_nor_renderer_is_data(made, rendered):
    record = made()
    before = record.to_dict()
    assert {"text", "renderer"}.isdisjoint(before)
    assert json.loads(json.dumps(before)) == before
    assert str(record)
    assert record.to_dict() == before


@BOTH
def test_without_a_renderer_there_is_no_text(made, rendered):
    record = replace(made(), renderer=None, text="")
    assert record.text == str(record) == ""
    assert "not rendered" in repr(record)


@BOTH
def test_a_record_stays_frozen_and_tells_of_no_other_attribute(made, rendered):
    record = made()
    with pytest.raises(AttributeError):
        record.text = "another"
    with pytest.raises(AttributeError, match="colour"):
        _ = record.colour


def test_a_report_on_several_points_tells_of_all_of_them():
    points = gradcheck.points([1.5, 2.0], [2.5, 3.0])
    report = gradcheck.check(product, at=points, gradient=product_gradient)
    assert "all 4" in report.text.splitlines()[0]
    assert report.text == check_text(report)


def test_an_error_for_a_refuted_claim_shows_the_report():
    with pytest.raises(gradcheck.DerivativeMismatch, match="refuted") as caught:
        gradcheck.check(product, at=[1.5, 2.0], gradient=lambda x: -product_gradient(x))
    assert caught.value.report.text in str(caught.value)
