"""What the gradcheck marks say."""

import inspect
from collections.abc import Mapping
from functools import cache
from typing import Any

import pytest

from gradcheck.problem.problem import SPEC_ATTRIBUTE, ModelSpec

MARK = "gradcheck"

#: What can be claimed; `check` need not take all of them.
CLAIMS = ("gradient", "jacobian", "hessian", "jvp", "vjp", "hvp", "value_and_gradient")


def options_of(item: pytest.Item) -> dict[str, Any]:
    """Arguments of `check` from every mark of the item, the closest mark winning (function, class, module)."""
    merged: dict[str, Any] = {}
    for mark in reversed(list(item.iter_markers(MARK))):
        merged |= mark.kwargs
    default = item.config.getini("gradcheck_rel_tol")
    if default and merged.get("rel_tol") is None:
        merged["rel_tol"] = float(default)
    return merged


def standing_on(source: Any) -> list[pytest.Mark]:
    """Marks on a function, the closest first; those of a static method may stand above or below that decorator."""
    inner = standing_on(source.__func__) if isinstance(source, staticmethod | classmethod) else []
    marks = _own_attributes(source).get("pytestmark")
    return inner + (marks if isinstance(marks, list) else [])


def description_of(source: Any) -> ModelSpec | None:
    """What `gradcheck.model` left on a function."""
    function = source.__func__ if isinstance(source, staticmethod | classmethod) else source
    spec = _own_attributes(function).get(SPEC_ATTRIBUTE)
    return spec if isinstance(spec, ModelSpec) else None


def marks_on_model(model: Any, *, everything: bool = False) -> list[pytest.Mark]:
    """Marks on a model, the closest first; its description counts as the farthest of them.

    A description without a claim serves `audit` alone and is no mark, unless `everything` is asked for.
    """
    marks = standing_on(model)
    spec = description_of(model)
    if spec is not None:
        options = {"at": spec.at} | _for_check(spec.options)
        marked = any(mark.name == MARK for mark in marks)
        claimed = any(options.get(claim) is not None for claim in CLAIMS)
        misspelt = any(name not in allowed_names() for name in options)  # to be told, however little else there is
        if everything or marked or claimed or misspelt:
            marks.append(getattr(pytest.mark, MARK).with_args(**options).mark)
    return marks


def is_described(obj: Any) -> bool:
    """Whether a gradcheck mark or a description stands on a callable."""
    if not callable(obj) or isinstance(obj, type):
        return False
    return description_of(obj) is not None or any(mark.name == MARK for mark in standing_on(obj))


@cache
def allowed_names() -> tuple[str, ...]:
    """What `gradcheck.check` takes besides the function."""
    from gradcheck.checking import check

    return tuple(inspect.signature(check).parameters)[1:]


def _for_check(options: Mapping[str, Any]) -> dict[str, Any]:
    """Without what only `audit` takes: a description serves both, so that is no fault here."""
    foreign = [name for name in options if name not in allowed_names()]
    if not foreign:
        return dict(options)
    from gradcheck.auditing import audit

    known = inspect.signature(audit).parameters
    return {name: value for name, value in options.items() if name not in foreign or name not in known}


def _own_attributes(obj: object) -> Mapping[str, Any]:
    """What stands in an object's own ``__dict__``, without asking the object (mocks and lazy proxies answer oddly)."""
    try:
        return object.__getattribute__(obj, "__dict__")  # type: ignore[no-any-return]
    except AttributeError:
        return {}
