"""The pytest plugin: the mark ``gradcheck``, model functions as test items, one file with every report.

This file is loaded in every pytest run of everybody who has the package installed. So it imports nothing but pytest
and the standard library; what a hook needs beyond that (`gradcheck.plugin`) it loads when something is marked or
configured.

PYTEST_DONT_REWRITE: there is no assertion in here, and a run inside a run would be warned that it came too late for it.
"""

import sys
from collections.abc import Generator
from pathlib import Path
from types import TracebackType

import pytest

#: The name of the mark.
MARK = "gradcheck"

#: Where `gradcheck.model` leaves its description: `gradcheck.problem.problem.SPEC_ATTRIBUTE`, not loaded for its name.
SPEC_ATTRIBUTE = "__gradcheck__"

_PACKAGE = Path(__file__).parent


def pytest_addoption(parser: pytest.Parser) -> None:
    group = parser.getgroup("gradcheck", "derivative checks")
    group.addoption(
        "--gradcheck-json",
        metavar="FILE",
        default=None,
        help="write every derivative report of this run to FILE as JSON",
    )
    parser.addini(
        "gradcheck_modules",
        type="args",
        default=[],
        help="importable modules whose marked or decorated models and Problems are collected as test items",
    )
    parser.addini(
        "gradcheck_rel_tol",
        default="",
        help="relative tolerance of derivative checks whose mark gives none",
    )


def pytest_configure(config: pytest.Config) -> None:
    config.addinivalue_line(
        "markers",
        "gradcheck(at=..., gradient=..., ...): check a derivative; takes the arguments of gradcheck.check, keywords "
        "only. On a model function, which becomes a test item itself (one a point), or on a test function that "
        "returns the function to check.",
    )
    _refuse_bad_tolerance(config.getini("gradcheck_rel_tol"))
    if config.getini("gradcheck_modules"):
        from gradcheck.plugin.modules import ModelModules

        config.pluginmanager.register(ModelModules(), "gradcheck-modules")
    if config.getoption("gradcheck_json") is not None and not hasattr(config, "workerinput"):
        from gradcheck.plugin.recording import JsonRecord

        config.pluginmanager.register(JsonRecord(config.getoption("gradcheck_json")), "gradcheck-json")


@pytest.hookimpl(tryfirst=True)
def pytest_pycollect_makeitem(
    collector: pytest.Module | pytest.Class, name: str, obj: object
) -> list[pytest.Item] | None:
    """Model functions become items of their own; everything else is left to pytest."""
    if not (_describes_check(obj) or _is_own_class(collector, obj)):
        return None
    from gradcheck.plugin.collecting import items_of_described

    return items_of_described(collector, name, obj)


@pytest.hookimpl(wrapper=True)
def pytest_make_collect_report(
    collector: pytest.Collector,
) -> Generator[None, pytest.CollectReport, pytest.CollectReport]:
    """Everything that is wrong with the marks of a module is told at once, before anything runs."""
    report = yield
    marked = [node for node in report.result or () if isinstance(node, pytest.Item) and _is_marked(node)]
    if marked:
        from gradcheck.plugin.faults import refuse_faulty

        refuse_faulty(report, marked)
    return report


@pytest.hookimpl(wrapper=True)
def pytest_pyfunc_call(pyfuncitem: pytest.Function) -> Generator[None, object, object]:
    """A marked test function is called by pytest as ever, but what it returns is checked instead of warned about."""
    if not _is_marked(pyfuncitem):
        return (yield)
    from gradcheck.plugin.running import checking_what_it_returns

    original = pyfuncitem.obj
    pyfuncitem.obj = checking_what_it_returns(pyfuncitem)
    try:
        return (yield)
    finally:
        pyfuncitem.obj = original


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(
    item: pytest.Item, call: pytest.CallInfo[None]
) -> Generator[None, pytest.TestReport, pytest.TestReport]:
    """The failure text of a check is its report; the reports themselves travel along in builtin types."""
    if call.excinfo is not None and not item.config.getoption("fulltrace", False):
        _leave_out_library_frames(call.excinfo)
    report = yield
    if "gradcheck.plugin.running" in sys.modules and _is_marked(item):  # else nothing was checked so far
        from gradcheck.plugin.running import tell

        tell(item, call, report)
    return report


def _describes_check(obj: object) -> bool:
    """Whether a gradcheck mark or model description stands on `obj` itself.

    Only the object's own ``__dict__`` is asked: a test module may hold anything (mocks, lazy proxies) whose
    attributes must not be touched.
    """
    if isinstance(obj, type) or not (callable(obj) or isinstance(obj, classmethod)):
        return False
    try:
        own = object.__getattribute__(obj, "__dict__")
    except AttributeError:
        return False
    if SPEC_ATTRIBUTE in own or _is_marked_list(own.get("pytestmark")):
        return True
    return isinstance(obj, staticmethod | classmethod) and _describes_check(obj.__func__)


def _is_own_class(collector: pytest.Module | pytest.Class, obj: object) -> bool:
    """Whether `obj` is a class of this module with a gradcheck mark on it or on a method."""
    if not isinstance(obj, type) or obj.__module__ != collector.module.__name__:
        return False
    return _is_marked_list(vars(obj).get("pytestmark")) or any(map(_describes_check, vars(obj).values()))


def _is_marked_list(marks: object) -> bool:
    return isinstance(marks, list) and any(getattr(mark, "name", "") == MARK for mark in marks)


def _is_marked(item: pytest.Item) -> bool:
    return item.get_closest_marker(MARK) is not None


def _refuse_bad_tolerance(text: str) -> None:
    if not text:
        return
    try:
        tolerance = float(text)
    except ValueError:
        tolerance = float("nan")
    if not 0 < tolerance < float("inf"):
        raise pytest.UsageError(f"gradcheck_rel_tol is {text!r}; give a finite number > 0, such as 1e-8")


def _leave_out_library_frames(excinfo: pytest.ExceptionInfo[BaseException]) -> None:
    """A test that calls `gradcheck.check` itself fails at that call, not somewhere inside the package."""
    errors = sys.modules.get("gradcheck.errors")
    if errors is None or not isinstance(excinfo.value, errors.GradcheckError | errors.UndecidedWarning):
        return
    entry: TracebackType | None = excinfo.tb
    last_outside = None
    while entry is not None:
        if _PACKAGE not in Path(entry.tb_frame.f_code.co_filename).parents:
            last_outside = entry
        entry = entry.tb_next
    if last_outside is not None:
        # The traceback itself, not pytest's view of it: that is made anew from the traceback when it is printed.
        last_outside.tb_next = None
