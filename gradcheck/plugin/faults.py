"""What is wrong with the marks of collected items, told before anything runs."""

import inspect
import sys
from collections.abc import Iterator, Sequence
from difflib import get_close_matches
from typing import Any

import pytest

from gradcheck.errors import UsageError
from gradcheck.plugin.items import Fault, ModelItem
from gradcheck.plugin.marks import CLAIMS, MARK, allowed_names, options_of, standing_on
from gradcheck.plugin.places import place_of


def refuse_faulty(report: pytest.CollectReport, marked: Sequence[pytest.Item]) -> None:
    """Turn a collector's report into an error that lists every fault of its marked items; else leave it alone."""
    told = dict.fromkeys(f"{_called(item)}: {fault}" for item in marked for fault in _faults(item))
    if told:
        report.outcome = "failed"
        report.result = []
        report.longrepr = "\n".join(told)


def missing_point(*, bare: bool) -> str:
    """Why a mark without `at` cannot be checked, and what a mark without any argument may have been meant as."""
    text = "the gradcheck mark has no `at`; give the point at which to check, such as at=[0.3, 1.2]"
    if bare:
        text += (
            ". (Written as gradcheck(function), a mark lands on that function and the test below it is lost, because "
            "pytest decorates a single positional callable: give keywords only, and return the function from the test.)"
        )
    return text


def _called(item: pytest.Item) -> str:
    return f"{place_of(item)}: {item.name.partition('[')[0]}"


def _faults(item: pytest.Item) -> Iterator[str]:
    if isinstance(item, Fault):
        yield item.text
    elif isinstance(item, ModelItem):
        unfit = [*_wrong_names(item, item.source), *_unfit_model(item)]
        yield from unfit or _wrong_values(item.source, item.options)
    elif isinstance(item, pytest.Function):
        unfit = [*_wrong_names(item, item.function), *_unfit_test(item)]
        # The function to check is not known yet, so its arguments cannot be named.
        yield from unfit or _wrong_values(_any_function, options_of(item) | {"wrt": None})


def _wrong_names(item: pytest.Item, source: Any) -> list[str]:
    """Arguments that `check` does not take, or that it misses."""
    marks = list(item.iter_markers(MARK))
    wrong = [_positional(mark) for mark in marks if mark.args]
    wrong += [_unknown(name) for mark in marks for name in mark.kwargs if name not in allowed_names()]
    return wrong or [*_given_twice(source), *_missing(options_of(item))]


def _positional(mark: pytest.Mark) -> str:
    values = ", ".join(_short(value) for value in mark.args)
    at = "..." if callable(mark.args[0]) or len(mark.args) > 1 else _short(mark.args[0])
    return (
        f"the gradcheck mark takes keywords only, but {values} was given without one; "
        f"write gradcheck(at={at}, gradient=...)"
    )


def _unknown(name: str) -> str:
    close = get_close_matches(name, allowed_names(), n=3, cutoff=0.6)
    hint = f"did you mean {' or '.join(close)}?" if close else f"it takes {', '.join(allowed_names())}"
    return f"the gradcheck mark has no argument {name!r}; {hint}"


def _missing(options: dict[str, Any]) -> Iterator[str]:
    claims = [claim for claim in CLAIMS if options.get(claim) is not None]
    if "at" not in options:
        yield missing_point(bare=not options)
    elif not claims:
        known = " or ".join(f"{claim}=..." for claim in CLAIMS if claim in allowed_names())
        yield f"the gradcheck mark claims no derivative; give {known}"


def _given_twice(source: Any) -> Iterator[str]:
    """Two marks on one function that give the same argument: one of them would vanish unseen."""
    names = [name for mark in standing_on(source) if mark.name == MARK for name in mark.kwargs]
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        yield (
            f"two gradcheck marks on one function both give {' and '.join(twice)}; "
            "give several points by at=gradcheck.points(...)"
        )


def _wrong_values(function: Any, options: dict[str, Any]) -> Iterator[str]:
    """What `check` would refuse without having called the model."""
    from gradcheck.claims.policy import Policy, Rules
    from gradcheck.problem.subject import subjects_of_function

    about_model = ("wrt", "output", "bounds", "names", "typical", "batched")
    try:
        Policy.of(**{name: options[name] for name in ("on_refuted", "on_undecided") if name in options})
        Rules.of(options.get("rel_tol"), options.get("abs_tol", 0.0), options.get("witnesses"))
        subjects_of_function(function, options["at"], claims={}, **{name: options.get(name) for name in about_model})
    except UsageError as error:
        yield str(error)
    except Exception:
        # Whatever else happens on that way will happen again when the item runs, and is told there with its traceback.
        return


def _any_function(*args: Any, **keywords: Any) -> float:
    return float("nan")


def _unfit_test(item: pytest.Function) -> Iterator[str]:
    """Kinds of test functions whose returned value never comes back."""
    if inspect.iscoroutinefunction(item.obj):
        yield "an async test cannot return the function to check; write it with a plain `def`"
    unittest = sys.modules.get("unittest")
    if unittest is not None and item.cls is not None and issubclass(item.cls, unittest.TestCase):
        yield "a method of a unittest.TestCase cannot return the function to check; use a plain test function"


def _unfit_model(item: ModelItem) -> Iterator[str]:
    if any(mark.name == "parametrize" for mark in item.own_markers):
        yield "a model function cannot be parametrized; give several points by at=gradcheck.points(...)"


def _short(value: object) -> str:
    text = getattr(value, "__name__", None) or repr(value)
    return text if len(text) <= 40 else text[:37] + "..."
