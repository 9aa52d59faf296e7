"""From what stands in a module to items."""

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from gradcheck.plugin.faults import missing_point
from gradcheck.plugin.items import Fault, ModelItem
from gradcheck.plugin.marks import MARK, description_of, marks_on_model
from gradcheck.problem.layout import Points

#: Files whose models another collector gives, so that none is checked twice.
COLLECTED_ELSEWHERE = pytest.StashKey[frozenset[Path]]()


def items_of_described(collector: pytest.Module | pytest.Class, name: str, obj: Any) -> list[pytest.Item] | None:
    """Items for something in a test module that carries a mark or a description; None leaves it to pytest."""
    if isinstance(obj, type):
        return None if collector.istestclass(obj, name) else _stray_class(collector, name, obj)
    if description_of(obj) is None and collector.funcnamefilter(name):
        return None  # a marked test function, which returns what is to be checked
    if isinstance(collector, pytest.Class) and not isinstance(obj, staticmethod):
        text = "a method needs its object; mark a function of the module or a static method instead"
        return [Fault.from_parent(collector, name=name, source=obj, text=text)]
    if not any(mark.args or mark.kwargs for mark in marks_on_model(obj, everything=True) if mark.name == MARK):
        return [Fault.from_parent(collector, name=name, source=obj, text=missing_point(bare=True))]
    return list(model_items(collector, name, obj)) if _belongs_to(collector, obj) else []


def model_items(parent: pytest.Collector, name: str, model: Any) -> Iterator[pytest.Item]:
    """One item a point; none where the description claims no derivative and is there for an audit only."""
    marks = marks_on_model(model)
    if not any(mark.name == MARK for mark in marks):
        return
    only = ModelItem.labelled(parent, name, MARK, source=model, marks=marks)
    at = only.options.get("at")
    if not isinstance(at, Points) or len(at.each) == 1:
        yield only
        return
    for i, point in enumerate(at.each):
        yield ModelItem.labelled(parent, name, f"{MARK}-{i}", source=model, marks=marks, point=point)


def home_of(obj: Any, found_in: str) -> str:
    """Name of the module that defines something; where it was found, if it is an object that does not know."""
    # An object without a name of its own (a partial, a callable instance) answers with the module of its class.
    return getattr(obj, "__module__", found_in) if hasattr(obj, "__name__") else found_in


def _belongs_to(collector: pytest.Collector, obj: Any) -> bool:
    module = collector.getparent(pytest.Module)
    if module is None or home_of(obj, module.obj.__name__) != module.obj.__name__:
        return False
    return collector.path not in collector.config.stash.get(COLLECTED_ELSEWHERE, frozenset())


def _stray_class(collector: pytest.Collector, name: str, obj: type) -> list[pytest.Item] | None:
    if not _belongs_to(collector, obj):
        return None
    text = (
        "the class or a method of it carries a gradcheck mark, but it is no test class and would be passed over; "
        f"mark a function of the module, or return the method from a marked test: return {name}(...).method"
    )
    return [Fault.from_parent(collector, name=name, source=obj, text=text)]
