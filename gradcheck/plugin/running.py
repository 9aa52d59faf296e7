"""Running the check of one item, and what its test report tells."""

import inspect
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from functools import partial, wraps
from typing import Any

import pytest

from gradcheck.errors import DerivativeMismatch, GradcheckError, UndecidedWarning, UsageError
from gradcheck.plugin.marks import options_of
from gradcheck.plugin.places import place_of, source_of
from gradcheck.problem.layout import Points
from gradcheck.records.report import CheckReport
from gradcheck.records.verdict import Verdict

#: The failure text of an item, in place of a traceback.
STORY = pytest.StashKey[str]()

#: Reports of an item, in builtin types: they cross between worker processes.
REPORTS = pytest.StashKey[list[dict[str, Any]]]()


def checking_what_it_returns(item: pytest.Function) -> Callable[..., None]:
    """The test function of an item, made to check the function that it returns."""
    test = item.obj

    @wraps(test)
    def call_and_check(*args: Any, **fixtures: Any) -> None:
        returned = test(*args, **fixtures)
        with _telling(item):
            if not callable(returned):
                raise UsageError(_not_callable(item, returned))
            run_check(item, returned, options_of(item))

    return call_and_check


def run_check(item: pytest.Item, function: Callable[..., Any], options: dict[str, Any]) -> None:
    """Check a function at each point of ``options["at"]``; see `run_each`."""
    from gradcheck.checking import check

    at = options.get("at")
    each = at.each if isinstance(at, Points) else (at,)
    run_each(item, function, [partial(check, function, **(options | {"at": point})) for point in each])


def run_each(item: pytest.Item, source: object, checks: Sequence[Callable[[], CheckReport]]) -> None:
    """Run all checks of an item, whatever the first one finds, and keep every report with the item.

    Raises
    ------
    GradcheckError
        The first that was raised; the failure text of the item tells all of them.
    UndecidedWarning
        Where warnings are errors.
    """
    # Undecided checks warn afterwards and from where the model stands. With `-W error`, a warning inside the check
    # would end it before it hands out its report.
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", UndecidedWarning)
        errors = [error for check in checks if (error := _run_one(item, check)) is not None]
    undecided = _held_back(caught)
    if errors:
        item.stash[STORY] = "\n\n".join(dict.fromkeys(str(told) for told in [*errors, *undecided]))
        raise errors[0]
    path, line, _ = source_of(source, item)
    with _telling(item):
        for warning in undecided:
            warnings.warn_explicit(warning, None, str(path), (line or 0) + 1)


def tell(item: pytest.Item, call: pytest.CallInfo[None], report: pytest.TestReport) -> None:
    """Put the story of a failed check in place of its traceback, and the reports where they survive the journey."""
    if report.when == "setup":  # an item may run again
        item.stash[REPORTS] = []
        if STORY in item.stash:
            del item.stash[STORY]
    if report.failed and report.when == "call" and call.excinfo and STORY in item.stash:
        report.longrepr = f"{item.stash[STORY]}\n\n{place_of(item)}: {call.excinfo.typename}"
    if report.when == "call" or not report.passed:
        report.gradcheck = {  # type: ignore[attr-defined]
            "message": item.stash.get(STORY, "") if report.failed else "",
            "reports": item.stash.get(REPORTS, []),
        }


def _run_one(item: pytest.Item, check: Callable[[], CheckReport]) -> GradcheckError | None:
    try:
        _keep(item, check())
    except DerivativeMismatch as mismatch:
        _keep(item, mismatch.report)
        return mismatch
    except GradcheckError as error:
        return error
    return None


def _keep(item: pytest.Item, report: CheckReport) -> None:
    reports = item.stash.setdefault(REPORTS, [])
    reports.append(report.to_dict())
    verdict = Verdict.overall([Verdict(known["verdict"]) for known in reports])
    kept = {
        "gradcheck_function": str(report.function),
        "gradcheck_verdict": str(verdict),
        "gradcheck_evaluations": sum(int(known["evaluations"]) for known in reports),
    }
    item.user_properties[:] = [pair for pair in item.user_properties if pair[0] not in kept] + list(kept.items())


@contextmanager
def _telling(item: pytest.Item) -> Iterator[None]:
    """Keep the text of what is raised, unless a longer story is kept already."""
    try:
        yield
    except (GradcheckError, UndecidedWarning) as error:
        item.stash.setdefault(STORY, str(error))
        raise


def _held_back(caught: list[warnings.WarningMessage]) -> list[UndecidedWarning]:
    """Let through what others warned about; returns our own warnings, held back."""
    undecided = []
    for warning in caught:
        if isinstance(warning.message, UndecidedWarning):
            undecided.append(warning.message)
        else:
            warnings.warn_explicit(
                warning.message, warning.category, warning.filename, warning.lineno, source=warning.source
            )
    return undecided


def _not_callable(item: pytest.Function, returned: object) -> str:
    if inspect.iscoroutine(returned):
        returned.close()
    what = "nothing" if returned is None else f"{returned!r} ({type(returned).__name__})"
    return (
        f"{item.originalname} carries a gradcheck mark, so it must return the function to check, but it returned "
        f"{what}; write `return model`, without calling it"
    )
