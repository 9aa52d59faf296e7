"""Every exception crosses between processes whole: text, data and kind."""

import inspect
import pickle

import numpy as np
import pytest

from gradcheck import errors
from gradcheck.records.report import CheckReport, Entries
from gradcheck.records.verdict import Verdict

REPORT = CheckReport(
    verdict=Verdict.REFUTED,
    kind="gradient",
    function="drag",
    point=np.array([0.3]),
    entries=Entries(
        index=np.array([0]),
        name=("x[0]",),
        claim=np.array([np.nan]),
        witness=np.array([2.0]),
        bound=np.array([1e-9]),
        digits=np.array([0.0]),
        verdict=(Verdict.REFUTED,),
        source=("finite difference",),
        reason=("",),
    ),
    text="gradient of drag refuted\nthe rest of the story",
)

EXAMPLES = [
    errors.GradcheckError("it broke"),
    errors.UsageError("`at` is empty; give a point"),
    errors.DerivativeShapeError("shape (1, 3), expected (3,)", name="gradient", expected=(3,), found=(1, 3)),
    errors.UnknownArgument("check has no argument 'grad'"),
    errors.ModelNotFound("wing:drga leads nowhere"),
    errors.MissingExtra("a picture of the scan", "matplotlib", "report"),
    errors.ModelFailure("drag crashed at its start point", reason="timeout", last_words="no convergence"),
    errors.DerivativeMismatch(REPORT),
    errors.UndecidedWarning("gradient of drag undecided"),
]

BY_NAME = [pytest.param(example, id=type(example).__name__) for example in EXAMPLES]


def classes() -> set[type[Exception]]:
    return {found for _, found in inspect.getmembers(errors, inspect.isclass) if issubclass(found, Exception)}


def test_every_exception_of_the_package_has_an_example_here() -> None:
    assert {type(example) for example in EXAMPLES} == classes()


@pytest.mark.parametrize("protocol", range(2, pickle.HIGHEST_PROTOCOL + 1))
@pytest.mark.parametrize("error", BY_NAME)
def test_an_exception_survives_pickling_with_kind_and_text(error: Exception, protocol: int) -> None:
    copy = pickle.loads(pickle.dumps(error, protocol))

    assert type(copy) is type(error)
    assert str(copy) == str(error)


def test_a_shape_error_keeps_both_shapes_on_its_way() -> None:
    error = errors.DerivativeShapeError("wrong shape", name="jacobian", expected=(2, 3), found=(3, 2))
    copy = pickle.loads(pickle.dumps(error))

    assert (copy.name, copy.expected, copy.found) == ("jacobian", (2, 3), (3, 2))


def test_a_model_failure_keeps_reason_and_last_words_on_its_way() -> None:
    copy = pickle.loads(pickle.dumps(errors.ModelFailure("no start", reason="non-finite", last_words="log of -1")))

    assert (copy.reason, copy.last_words) == ("non-finite", "log of -1")


def test_a_mismatch_keeps_its_report_on_its_way() -> None:
    copy = pickle.loads(pickle.dumps(errors.DerivativeMismatch(REPORT)))

    assert copy.report.to_dict() == REPORT.to_dict()


def test_the_text_of_a_mismatch_is_the_report() -> None:
    assert str(errors.DerivativeMismatch(REPORT)) == str(REPORT)


def test_a_mismatch_is_an_assertion_error_and_a_usage_error_a_value_error() -> None:
    assert issubclass(errors.DerivativeMismatch, AssertionError)
    assert issubclass(errors.UsageError, ValueError)
    assert issubclass(errors.ModelFailure, RuntimeError)


def test_all_but_the_warning_can_be_caught_as_one_kind() -> None:
    assert {found for found in classes() if not issubclass(found, errors.GradcheckError)} == {errors.UndecidedWarning}
