"""The pytest plugin, seen from the projects of its users: each test writes one and runs pytest in it."""

import json
import os
import sys
import tomllib
from collections.abc import Callable
from pathlib import Path
from textwrap import dedent
from types import SimpleNamespace
from typing import Any
from xml.etree import ElementTree

import pytest

import gradcheck
from gradcheck import pytest_plugin
from gradcheck.plugin import marks, problems
from gradcheck.problem import problem
from gradcheck.problem.subject import CLAIM_KINDS

pytest_plugins = ["pytester"]

#: Everything that a check loads is loaded now, because the runs inside this process forget what they load themselves.
gradcheck.check(lambda x: x[0] ** 2, at=[1.0], gradient=lambda x: [2 * x[0]])

#: Plugins are named here one by one, and none is loaded by itself: neither ours twice, where the package is installed,
#: nor those of others, which take their time.
PLUGIN = ["-p", "gradcheck.pytest_plugin"]
WORKERS = ["-p", "xdist.plugin", "-n", "2"]

ROOT = Path(gradcheck.__file__).parents[1]

MODELS = """
    import gradcheck
    import pytest

    def slope(x):
        return [2 * x[0], 3.0]

    def wrong_slope(x):
        return [x[0], 3.0]

    def area(x):
        return x[0] ** 2 + 3 * x[1]
"""

#: At 0, |x| has no derivative; any claim between its one-sided slopes -1 and 1 can be neither confirmed nor refuted.
KINK = """
    import gradcheck
    import pytest

    def folded(x):
        return abs(x[0]) + 3 * x[1]

    def claim(x):
        return [0.5, 3.0]
"""

Run = Callable[..., pytest.RunResult]


@pytest.fixture
def project(pytester: pytest.Pytester) -> Callable[..., None]:
    """Write modules, given by their path or as keywords by their name."""

    def write(paths: dict[str, str] | None = None, **modules: str) -> None:
        for path, text in ((paths or {}) | {f"{name}.py": text for name, text in modules.items()}).items():
            (pytester.path / path).parent.mkdir(exist_ok=True)
            (pytester.path / path).write_text(text, encoding="utf-8")

    return write


@pytest.fixture
def run(pytester: pytest.Pytester, monkeypatch: pytest.MonkeyPatch) -> Run:
    """Run pytest in the project, without leaving this process."""
    monkeypatch.setenv("PYTEST_DISABLE_PLUGIN_AUTOLOAD", "1")
    monkeypatch.syspath_prepend(str(pytester.path))

    def inside(*arguments: str) -> pytest.RunResult:
        # Warnings are errors where these tests run, and would be for the run inside.
        return pytester.runpytest_inprocess(*PLUGIN, "--strict-markers", "-W", "default", *arguments)

    return inside


@pytest.fixture
def run_outside(pytester: pytest.Pytester, monkeypatch: pytest.MonkeyPatch) -> Run:
    """Run pytest in the project as a process of its own."""
    monkeypatch.setenv("PYTEST_DISABLE_PLUGIN_AUTOLOAD", "1")
    monkeypatch.setenv("PYTHONPATH", str(ROOT), prepend=os.pathsep)
    return lambda *arguments: pytester.runpytest_subprocess(*PLUGIN, *arguments)


def source(*parts: str) -> str:
    """One module of several parts, each of which may be indented as a whole."""
    return "\n".join(dedent(part) for part in parts)


def ini(pytester: pytest.Pytester, text: str) -> None:
    pytester.makeini("[pytest]\n" + dedent(text))


def record(pytester: pytest.Pytester, name: str = "reports.json") -> dict[str, Any]:
    def refuse(constant: str) -> None:
        raise AssertionError(f"{constant} is not JSON")

    return json.loads((pytester.path / name).read_text(encoding="utf-8"), parse_constant=refuse)


def by_id(document: dict[str, Any]) -> dict[str, dict[str, Any]]:
    return {item["nodeid"]: item for item in document["items"]}


# Model functions as test items

CONFIRMED = '@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=slope)\ndef model(x):\n    "A model."\n    return area(x)\n'
REFUTED = CONFIRMED.replace("slope", "wrong_slope")


def test_a_marked_model_function_is_a_test_item_of_its_own(project, run) -> None:
    project(test_models=source(MODELS, CONFIRMED))
    result = run("-v")

    result.assert_outcomes(passed=1)
    result.stdout.fnmatch_lines(["*test_models.py::model?gradcheck? PASSED*"])


def test_a_refuted_claim_fails_its_item_and_prints_the_report_without_a_traceback(project, run) -> None:
    project(test_models=source(MODELS, REFUTED))
    result = run()

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(
        ["gradient of model refuted: x?0? is claimed 1*", "test_models.py:*: DerivativeMismatch"]
    )
    result.stdout.no_fnmatch_line("*checking.py*")
    result.stdout.no_fnmatch_line(">*")


@pytest.mark.skipif(pytest.version_tuple < (9, 0), reason="older versions leave failure texts out of their summary")
def test_the_summary_line_of_a_failed_item_starts_with_the_story(project, run) -> None:
    project(test_models=source(MODELS, REFUTED))

    run("-rf").stdout.fnmatch_lines(["FAILED test_models.py::model?gradcheck? - gradient of model refuted*"])


def test_each_of_several_points_is_an_item(project, run) -> None:
    project(test_models=source(MODELS, REFUTED.replace("[1.0, 2.0]", "gradcheck.points([0.0, 1.0], [1.0, 1.0])")))
    result = run("-v")

    result.assert_outcomes(passed=1, failed=1)
    result.stdout.fnmatch_lines(["*::model?gradcheck-0? PASSED*", "*::model?gradcheck-1? FAILED*"])


def test_the_x_of_a_model_is_never_taken_for_a_fixture(project, run) -> None:
    fixture = "@pytest.fixture(autouse=False)\ndef x():\n    raise RuntimeError('x was taken for a fixture')\n"
    project(test_models=source(MODELS, fixture, CONFIRMED))

    run().assert_outcomes(passed=1)


def test_a_model_is_collected_where_it_is_defined_and_not_where_it_is_imported(project, run) -> None:
    project(
        test_models=source(MODELS, CONFIRMED),
        test_importing="from test_models import model\nimport test_models\nalias = model\n",
    )
    result = run("-v")

    result.assert_outcomes(passed=1)
    result.stdout.fnmatch_lines(["*test_models.py::model*"])


@pytest.mark.parametrize("decorators", [("@staticmethod", "mark"), ("mark", "@staticmethod")])
def test_a_static_method_of_a_test_class_can_be_a_model(project, run, decorators) -> None:
    mark = "@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=slope)"
    lines = [mark if line == "mark" else line for line in decorators]
    body = "\n    ".join(["class TestWing:", *lines, "def model(x):", "    return area(x)"])
    project(test_models=source(MODELS, body))
    result = run("-v")

    result.assert_outcomes(passed=1)
    result.stdout.fnmatch_lines(["*::TestWing::model?gradcheck? PASSED*"])


def test_the_other_marks_of_a_model_hold_for_its_items(project, run) -> None:
    known = REFUTED.replace(
        "def model", "@pytest.mark.xfail(raises=gradcheck.DerivativeMismatch, strict=True)\ndef known"
    )
    later = REFUTED.replace("def model", "@pytest.mark.skip(reason='not yet')\ndef later")
    project(test_models=source(MODELS, known, later))

    run().assert_outcomes(xfailed=1, skipped=1)


def test_a_model_that_crashes_fails_with_its_own_last_words(project, run) -> None:
    crash = CONFIRMED.replace("return area(x)", "raise ArithmeticError('the solver gave up')")
    project(test_models=source(MODELS, crash))
    result = run()

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(["*the solver gave up*", "*: ModelFailure"])
    result.stdout.no_fnmatch_line("*checking.py*")


def test_a_model_decorated_without_pytest_is_collected_likewise(project, run) -> None:
    project(test_models=source(MODELS, CONFIRMED.replace("pytest.mark.gradcheck", "gradcheck.model")))
    result = run("-v", "-m", "gradcheck")

    result.assert_outcomes(passed=1)
    result.stdout.fnmatch_lines(["*::model?gradcheck? PASSED*"])


def test_a_mark_on_a_decorated_model_goes_before_its_description(project, run) -> None:
    described = "@gradcheck.model(at=[1.0, 2.0], gradient=slope)\n"
    project(test_models=source(MODELS, described, REFUTED.replace("at=[1.0, 2.0], ", "")))

    run().assert_outcomes(failed=1)


def test_a_decorated_model_that_is_named_like_a_test_is_a_model(project, run) -> None:
    described = CONFIRMED.replace("pytest.mark.gradcheck", "gradcheck.model").replace("def model", "def test_section")
    project(test_models=source(MODELS, described), test_importing="from test_models import test_section\n")
    result = run("-v")

    result.assert_outcomes(passed=1)
    result.stdout.fnmatch_lines(["*test_models.py::test_section?gradcheck? PASSED*"])


def test_a_description_without_a_claim_serves_audits_and_gives_no_item(project, run) -> None:
    project(test_models=source(MODELS, "gradcheck.model(at=[1.0, 2.0])(area)\ndef test_other(): pass\n"))

    run().assert_outcomes(passed=1)


def test_what_only_an_audit_takes_is_no_fault_in_a_description(project, run) -> None:
    project(test_models=source(MODELS, "gradcheck.model(at=[1.0, 2.0], gradient=slope, samples=3)(area)\n"))

    run().assert_outcomes(passed=1)


def test_objects_with_odd_attributes_in_a_test_module_are_left_alone(project, run) -> None:
    odd = """
        from unittest.mock import MagicMock, call
        anything, called = MagicMock(), call

        class Lazy:
            def __call__(self):
                pass
            def __getattr__(self, name):
                raise RuntimeError(f"{name} was touched")

        lazy = Lazy()
        def test_other(): pass
    """
    project(test_odd=dedent(odd))

    run().assert_outcomes(passed=1)


# Test functions that return the function to check


def test_a_marked_test_may_take_fixtures_and_parameters_and_returns_the_function_to_check(project, run) -> None:
    test = """
        @pytest.fixture
        def factor():
            return 2.0

        @pytest.mark.parametrize("power", [2, 3])
        @pytest.mark.gradcheck(at=[1.0, 2.0], gradient=lambda x: [4 * x[0], 6.0])
        def test_scaled(factor, power):
            return lambda x: factor * (x[0] ** power + 3 * x[1])
    """
    project(test_models=source(MODELS, test))
    result = run("-v")

    result.assert_outcomes(passed=1, failed=1)
    result.stdout.fnmatch_lines(["*::test_scaled?2? PASSED*", "*::test_scaled?3? FAILED*", "gradient of *refuted*"])
    result.stdout.no_fnmatch_line("*checking.py*")


def test_a_marked_test_is_not_warned_about_for_returning_something(project, run) -> None:
    project(
        test_models=source(MODELS, "@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=slope)\ndef test_it(): return area")
    )

    run("-W", "error").assert_outcomes(passed=1)


def test_a_marked_test_that_returns_no_function_fails_and_says_what_to_return(project, run) -> None:
    marked = "@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=slope)\n"
    project(
        test_models=source(MODELS, marked, "def test_none(): pass\n", marked, "def test_called(): return area([1, 2])")
    )
    result = run()

    result.assert_outcomes(failed=2)
    result.stdout.fnmatch_lines(
        ["test_none *must return the function to check, but it returned nothing*", "test_called *returned 7 (int)*"]
    )


def test_an_error_in_the_body_of_a_marked_test_keeps_its_own_traceback(project, run) -> None:
    marked = "@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=slope)\ndef test_it():\n    return absent\n"
    project(test_models=source(MODELS, marked))
    result = run()

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines([">       return absent", "E       NameError: *"])


def test_every_point_of_a_marked_test_is_checked_before_it_fails(project, run, pytester) -> None:
    points = "gradcheck.points([1.0, 1.0], [0.0, 1.0], [2.0, 1.0])"
    marked = f"@pytest.mark.gradcheck(at={points}, gradient=wrong_slope)\ndef test_it():\n    return area\n"
    project(test_models=source(MODELS, marked))
    result = run("--gradcheck-json", "reports.json")

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(["*x?0? is claimed 1*", "*x?0? is claimed 2*"])
    reports = record(pytester)["items"][0]["reports"]
    assert [report["verdict"] for report in reports] == ["refuted", "confirmed", "refuted"]


def test_the_mark_of_a_class_reaches_its_tests_and_the_closest_mark_wins(project, run) -> None:
    tests = """
        @pytest.mark.gradcheck(at=[1.0, 2.0], gradient=wrong_slope)
        class TestWing:
            def test_far(self):
                return area

            @pytest.mark.gradcheck(gradient=slope)
            def test_close(self):
                return area
    """
    project(test_models=source(MODELS, tests))
    result = run("-v")

    result.assert_outcomes(passed=1, failed=1)
    result.stdout.fnmatch_lines(["*::test_far FAILED*", "*::test_close PASSED*"])


def test_a_parameter_can_bring_its_own_point(project, run) -> None:
    tests = """
        @pytest.mark.gradcheck(gradient=wrong_slope)
        @pytest.mark.parametrize(
            "k",
            [
                pytest.param(1, marks=pytest.mark.gradcheck(at=[0.0, 1.0])),
                pytest.param(2, marks=pytest.mark.gradcheck(at=[1.0, 1.0])),
            ],
        )
        def test_it(k):
            return area
    """
    project(test_models=source(MODELS, tests))

    run().assert_outcomes(passed=1, failed=1)


def test_a_plain_test_that_calls_check_fails_at_that_call(project, run) -> None:
    project(
        test_models=source(MODELS, "def test_it():\n    gradcheck.check(area, at=[1.0, 2.0], gradient=wrong_slope)\n")
    )
    result = run()

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(
        [">       gradcheck.check(area, *", "E  *gradient of area refuted*", "test_models.py:*"]
    )
    result.stdout.no_fnmatch_line("*checking.py*")


# Undecided checks

UNDECIDED = "@pytest.mark.gradcheck(at=[0.0, 1.0], gradient=claim)\ndef model(x):\n    return folded(x)\n"


def test_an_undecided_check_passes_with_a_warning_where_the_model_stands(project, run) -> None:
    project(test_models=source(KINK, UNDECIDED))
    result = run()

    result.assert_outcomes(passed=1, warnings=1)
    result.stdout.fnmatch_lines(["*test_models.py:*: UndecidedWarning: gradient of model undecided*"])


def test_an_undecided_check_fails_where_warnings_are_errors_and_its_report_is_kept(project, run, pytester) -> None:
    project(test_models=source(KINK, UNDECIDED))
    result = run("-W", "error", "--gradcheck-json", "reports.json")

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(["gradient of model undecided*", "test_models.py:*: UndecidedWarning"])
    result.stdout.no_fnmatch_line("*checking.py*")
    assert by_id(record(pytester))["test_models.py::model[gradcheck]"]["verdict"] == "undecided"


def test_an_undecided_check_fails_where_its_mark_asks_for_it(project, run) -> None:
    project(test_models=source(KINK, UNDECIDED.replace("claim)", "claim, on_undecided='raise')")))
    result = run()

    result.assert_outcomes(failed=1)
    result.stdout.fnmatch_lines(["gradient of model undecided*"])


def test_an_undecided_check_is_silent_where_its_mark_asks_for_it(project, run) -> None:
    project(test_models=source(KINK, UNDECIDED.replace("claim)", "claim, on_undecided='pass')")))

    run("-W", "error").assert_outcomes(passed=1)


def test_warnings_of_others_during_a_check_still_reach_the_user(project, run_outside) -> None:
    old = """
        import functools
        import warnings
        import gradcheck.checking as checking

        def warning(check):
            @functools.wraps(check)
            def warn_and_check(*arguments, **options):
                warnings.warn("this engine is old", FutureWarning)
                return check(*arguments, **options)
            return warn_and_check

        checking.check = warning(checking.check)
    """
    project(conftest=dedent(old), test_models=source(MODELS, CONFIRMED))
    result = run_outside()

    result.assert_outcomes(passed=1, warnings=1)
    result.stdout.fnmatch_lines(["*FutureWarning: this engine is old*"])


# Faults, told at collection

MARK = "@pytest.mark.gradcheck"
GOOD = f"{MARK}(at=[1.0, 2.0], gradient=slope)"

FAULTS = {
    "unknown argument": (f"{MARK}(at=[1.0, 2.0], gradeint=slope)", "no argument 'gradeint'; did you mean gradient?"),
    "nothing close": (f"{MARK}(at=[1.0, 2.0], quux=slope)", "no argument 'quux'; it takes at, gradient, jacobian"),
    "positional": (
        f"{MARK}([1.0, 2.0], gradient=slope)",
        "keywords only, but [1.0, 2.0] was given without one; write gra",
    ),
    "no point": (f"{MARK}(gradient=slope)", "has no `at`; give the point"),
    "no claim": (f"{MARK}(at=[1.0, 2.0])", "claims no derivative; give gradient=... or jacobian=..."),
    "bare": (MARK, "decorates a single positional callable: give keywords only"),
    "twice": (f"{GOOD}\n{GOOD}", "both give at and gradient; give several points by at=gradcheck.points"),
}


@pytest.mark.parametrize("name", ["model", "test_model"])
@pytest.mark.parametrize(("mark", "told"), FAULTS.values(), ids=FAULTS.keys())
def test_a_wrong_mark_is_told_at_collection_with_file_and_line(project, run, mark, told, name) -> None:
    head = source(MODELS, "def test_other(): pass\n")
    project(test_models=f"{head}{mark}\ndef {name}(x=None):\n    return area\n")
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert f"test_models.py:{head.count(chr(10)) + 1}: {name}: " in result.stdout.str()
    assert told in result.stdout.str()


UNFIT = {
    "async test": (f"{GOOD}\nasync def test_it(): return area", "an async test cannot return the function"),
    "method": (f"class TestIt:\n    {GOOD}\n    def model(self, x): return area(x)", "a method needs its object"),
    "class method": (
        f"class TestIt:\n    @classmethod\n    {GOOD}\n    def model(cls, x): return area(x)",
        "a method needs its object",
    ),
    "class passed over": (
        f"class Wing:\n    {GOOD}\n    def drag(self, x): return area(x)",
        "no test class and would be passed over; mark a function of the module, or return the method from a marked "
        "test: return Wing(...).method",
    ),
    "test case": (
        f"import unittest\nclass TestIt(unittest.TestCase):\n    {GOOD}\n    def test_it(self): return area",
        "a method of a unittest.TestCase cannot return",
    ),
    "parametrized model": (
        f"@pytest.mark.parametrize('k', [1])\n{GOOD}\ndef model(x): return area(x)",
        "a model function cannot be parametrized; give several points by at=gradcheck.points(...)",
    ),
    "unknown in description": ("gradcheck.model(at=[1.0], gradeint=slope)(area)", "no argument 'gradeint'"),
}


@pytest.mark.parametrize(("code", "told"), UNFIT.values(), ids=UNFIT.keys())
def test_a_mark_where_nothing_would_be_checked_is_told_at_collection(project, run, code, told) -> None:
    project(test_models=source(MODELS, code + "\n"))
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert told in result.stdout.str()


def test_a_bare_mark_that_landed_on_an_imported_function_is_told_too(project, run) -> None:
    project(
        models="def far(x):\n    return x[0]\n",
        test_models="import pytest\nfrom models import far\npytest.mark.gradcheck(far)",
    )
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert "models.py:1: far: the gradcheck mark has no `at`" in result.stdout.str()


def test_all_faults_of_a_module_are_told_at_once_and_nothing_runs(project, run) -> None:
    bad = [
        "@pytest.mark.gradcheck(att=[1.0])\ndef one(x): pass\n",
        "@pytest.mark.gradcheck(2.0)\ndef test_two(): pass\n",
    ]
    project(test_models=source(MODELS, *bad), test_other="def test_other(): pass")
    result = run()

    result.assert_outcomes(errors=1)
    result.stdout.fnmatch_lines(["test_models.py:*: one: *'att'*", "test_models.py:*: test_two: *keywords only*"])


VALUES = {
    "tolerance": ("at=[1.0, 2.0], rel_tol=-1.0", "rel_tol is -1.0; give a finite number"),
    "witness": ("at=[1.0, 2.0], witnesses='oracle'", "witnesses is 'oracle'; choose among"),
    "bounds": ("at=[1.0, 2.0], bounds=[(0, 3)]", "bounds has 1 parts for 2 variables"),
    "outside": ("at=[1.0, 2.0], bounds=[(0, 3), (0, 1)]", "entry 1 of the point is 2, outside its bounds"),
    "names": ("at=[1.0, 2.0], names=['span']", "names has 1 entry but there are 2 variables"),
    "point": ("at=[1j, 2.0]", "is complex"),
    "second point": ("at=gradcheck.points([1.0, 2.0], 'start')", "`at` is 'start'"),
    "word": ("at=[1.0, 2.0], on_undecided='shout'", "on_undecided is 'shout'; choose 'warn' or 'raise' or 'pass'"),
    "other word": ("at=[1.0, 2.0], on_refuted='warn'", "on_refuted is 'warn'; choose 'raise' or 'return'"),
}


@pytest.mark.parametrize("name", ["model", "test_model"])
@pytest.mark.parametrize(("arguments", "told"), VALUES.values(), ids=VALUES.keys())
def test_a_wrong_value_is_told_at_collection_in_the_words_of_check(project, run, arguments, told, name) -> None:
    project(test_models=source(MODELS, f"{MARK}(gradient=slope, {arguments})\ndef {name}(x=None):\n    return area\n"))
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert told in result.stdout.str()


def test_a_model_that_does_not_take_its_point_is_told_at_collection(project, run) -> None:
    project(test_models=source(MODELS, f"{GOOD}\ndef model(a, b):\n    return a + b\n"))
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert "model(a, b) cannot be called with `at`" in result.stdout.str()


def test_the_claims_known_at_collection_are_those_of_check() -> None:
    assert set(CLAIM_KINDS) <= set(marks.CLAIMS)


# Settings


@pytest.mark.parametrize(
    ("given", "outcome"), [("", "failed"), (", rel_tol=1e-9", "failed"), (", rel_tol=0.1", "passed")]
)
def test_the_tolerance_of_the_mark_decides(project, run, given, outcome) -> None:
    loose = f"@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=[2.01, 3.0]{given})\ndef model(x): return area(x)\n"
    project(test_models=source(MODELS, loose))

    run().assert_outcomes(**{outcome: 1})


@pytest.mark.parametrize(("given", "outcome"), [("", "passed"), (", rel_tol=1e-9", "failed")])
def test_the_tolerance_of_the_settings_holds_where_the_mark_gives_none(project, run, pytester, given, outcome) -> None:
    loose = f"@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=[2.01, 3.0]{given})\ndef model(x): return area(x)\n"
    project(test_models=source(MODELS, loose))
    ini(pytester, "gradcheck_rel_tol = 0.1")

    run().assert_outcomes(**{outcome: 1})


@pytest.mark.parametrize("value", ["tight", "0", "-1e-8", "nan", "inf"])
def test_a_tolerance_in_the_settings_that_makes_no_sense_is_a_usage_error(project, run, pytester, value) -> None:
    ini(pytester, f"gradcheck_rel_tol = {value}")
    result = run()

    assert result.ret == pytest.ExitCode.USAGE_ERROR
    result.stderr.fnmatch_lines([f"ERROR: gradcheck_rel_tol is '{value}'; give a finite number > 0*"])


def test_the_mark_and_the_settings_explain_themselves(run) -> None:
    run("--markers").stdout.fnmatch_lines(["@pytest.mark.gradcheck(at=..., gradient=..., ...): check a derivative*"])
    run("--help").stdout.fnmatch_lines(["*--gradcheck-json=FILE*", "*gradcheck_modules (args)*", "*gradcheck_rel_tol*"])


def test_the_plugin_knows_mark_and_description_under_the_names_of_the_package() -> None:
    assert (pytest_plugin.MARK, pytest_plugin.SPEC_ATTRIBUTE) == (marks.MARK, problem.SPEC_ATTRIBUTE)


# Model modules

DESCRIBED = """
    import gradcheck

    def wrong_slope(x):
        return [x[0], 3.0]

    @gradcheck.model(at=[1.0, 2.0], gradient=lambda x: [2 * x[0], 3.0])
    def lift(x):
        return x[0] ** 2 + 3 * x[1]

    @gradcheck.model(at=[1.0, 2.0], gradient=wrong_slope)
    def drag(x):
        return x[0] ** 2 + 3 * x[1]

    def test_section_strength(x):
        raise RuntimeError("not a test but a part of the model")
"""

PROBLEM = """
    import gradcheck

    def cost(x):
        return x[0] * x[1]

    def stress(x):
        return [x[0] ** 2, x[1] ** 2]

    plate = gradcheck.Problem(
        variables=[gradcheck.Variable("width", 2.0, lower=0.5), gradcheck.Variable("height", 3.0)],
        objective=gradcheck.Function(cost, gradient=lambda x: [x[1], x[0]]),
        constraints={
            "stress": gradcheck.Function(stress, jacobian=lambda x: [[2 * x[0], 0.0], [1.0, 2 * x[1]]], upper=9.0),
            "unclaimed": cost,
        },
    )
"""


REPORTS = [SimpleNamespace(function=name, kind=kind) for name, kind in [("cost", "gradient"), ("stress", "jacobian")]]


@pytest.fixture
def wing(project, pytester) -> None:
    """A project with one package that describes two models (one claim is wrong), and a test of its own."""
    project({"wing/__init__.py": "", "wing/models.py": dedent(DESCRIBED)}, test_own="def test_own(): pass")
    ini(pytester, "gradcheck_modules = wing.models")


@pytest.mark.usefixtures("wing")
def test_the_models_of_a_listed_module_are_collected_and_nothing_else_of_it(run) -> None:
    result = run("-v")

    result.assert_outcomes(passed=2, failed=1)
    result.stdout.fnmatch_lines(["gradcheck: models of wing.models", "wing/models.py::lift?gradcheck? PASSED*"])


@pytest.mark.usefixtures("wing")
@pytest.mark.parametrize("arguments", [["."], ["wing"], [".", "wing/models.py"], ["wing", "--import-mode=importlib"]])
def test_models_of_listed_modules_are_collected_once_whatever_directories_are_given(run, arguments) -> None:
    result = run("--collect-only", "-q", *arguments)

    assert result.stdout.str().count("::lift[gradcheck]") == 1


@pytest.mark.usefixtures("wing")
@pytest.mark.parametrize("argument", ["wing/models.py::lift[gradcheck]", "wing/models.py", "test_own.py"])
def test_whoever_names_files_gets_the_models_of_these_files_only(run, argument) -> None:
    result = run("--collect-only", "-q", argument)
    listed = [line for line in result.outlines if "::" in line]

    assert result.ret == pytest.ExitCode.OK
    assert listed
    assert all(line.startswith(argument) for line in listed)


@pytest.mark.usefixtures("wing")
def test_the_header_says_when_models_are_left_out(run) -> None:
    run("test_own.py").stdout.fnmatch_lines(["gradcheck: models of wing.models left out, because *"])


@pytest.mark.usefixtures("wing")
def test_models_lie_where_pytest_does_not_search(run, pytester) -> None:
    ini(pytester, "gradcheck_modules = wing.models\nnorecursedirs = wing\ntestpaths = test_own.py")

    run().assert_outcomes(passed=2, failed=1)


@pytest.mark.usefixtures("wing")
def test_an_ignored_model_module_stays_ignored(run) -> None:
    run("--ignore=wing/models.py").assert_outcomes(passed=1)


@pytest.mark.usefixtures("wing")
def test_failed_models_run_again_with_last_failed(run) -> None:
    run()

    run("--last-failed").assert_outcomes(failed=1)


@pytest.mark.usefixtures("wing")
def test_the_plain_command_finds_model_modules_in_the_root_directory(pytester, monkeypatch) -> None:
    # `pytest`, unlike `python -m pytest` and runs in tests, does not put the current directory on the search path.
    monkeypatch.setenv("PYTEST_DISABLE_PLUGIN_AUTOLOAD", "1")
    monkeypatch.setenv("PYTHONPATH", str(ROOT))
    command = (
        "import os, sys; sys.path[:] = [path for path in sys.path if path not in ('', os.getcwd())]; "
        "import pytest; sys.exit(pytest.main(sys.argv[1:]))"
    )
    result = pytester.run(sys.executable, "-c", command, *PLUGIN)

    result.assert_outcomes(passed=2, failed=1)


def test_models_that_are_objects_without_a_name_are_collected_where_they_stand(project, run, pytester) -> None:
    described = "from functools import partial\nmodel = gradcheck.model(at=[1.0, 2.0], gradient=slope)(partial(area))\n"
    project(plain=source(MODELS, described), test_models=source(MODELS, described))
    ini(pytester, "gradcheck_modules = plain")

    run().assert_outcomes(passed=2)


def test_each_claim_of_a_problem_in_a_listed_module_is_an_item(project, run, pytester) -> None:
    project(plates=dedent(PROBLEM), more="from plates import plate\nagain = plate\n")
    ini(pytester, "gradcheck_modules = plates more")
    result = run("-v")

    result.assert_outcomes(passed=1, failed=1)
    result.stdout.fnmatch_lines(
        [
            "plates.py::plate?gradcheck-objective-gradient? PASSED*",
            "plates.py::plate?gradcheck-stress-jacobian? FAILED*",
            "jacobian of stress refuted*",
        ]
    )


def test_the_claims_of_a_problem_share_one_run(monkeypatch) -> None:
    asked = []
    monkeypatch.setattr("gradcheck.checking.check_described", lambda *given: asked.append(given) or REPORTS)
    claims = problems.Claims(problem=None, overrides={})

    assert [claims.report(report.function, report.kind) for report in REPORTS] == REPORTS
    assert len(asked) == 1


def test_a_problem_that_cannot_be_called_is_told_at_collection(project, run, pytester) -> None:
    project(plates=dedent(PROBLEM).replace("def cost(x)", "def cost(width, height)"))
    ini(pytester, "gradcheck_modules = plates")
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert "plate: cost(width, height) cannot be called" in result.stdout.str()


def test_a_problem_whose_model_crashes_fails_every_claim_with_its_last_words(project, run, pytester) -> None:
    project(plates=dedent(PROBLEM).replace("return x[0] * x[1]", "raise ArithmeticError('the mesh is torn')"))
    ini(pytester, "gradcheck_modules = plates")
    result = run()

    result.assert_outcomes(failed=2)
    assert result.stdout.str().count("the mesh is torn") >= 2
    result.stdout.no_fnmatch_line("*checking.py*")


@pytest.mark.parametrize(("options", "outcome"), [([], {"passed": 2}), (["-W", "error"], {"passed": 1, "failed": 1})])
def test_an_undecided_claim_of_a_problem_warns(project, run, pytester, options, outcome) -> None:
    kinked = (
        dedent(PROBLEM).replace("return x[0] * x[1]", "return abs(x[0] - 2) + x[1]").replace("[x[1], x[0]]", "[0, 1]")
    )
    project(plates=kinked.replace("[1.0, 2 * x[1]]", "[0.0, 2 * x[1]]"))
    ini(pytester, "gradcheck_modules = plates")

    run(*options).assert_outcomes(**outcome, warnings=outcome["passed"] - 1)


def test_the_tolerance_of_the_settings_holds_for_problems(project, run, pytester) -> None:
    project(plates=dedent(PROBLEM).replace("[1.0, 2 * x[1]]", "[0.0, 2.01 * x[1]]"))
    ini(pytester, "gradcheck_modules = plates\ngradcheck_rel_tol = 0.1")

    run().assert_outcomes(passed=2)


def test_a_package_can_be_a_model_module(project, run, pytester) -> None:
    project({"wing/__init__.py": dedent(DESCRIBED)})
    ini(pytester, "gradcheck_modules = wing")

    run().assert_outcomes(passed=1, failed=1)
    run("wing/__init__.py").assert_outcomes(passed=1, failed=1)


def test_a_listed_test_file_keeps_its_tests_and_gives_each_model_once(project, run, pytester) -> None:
    project(test_models=source(MODELS, CONFIRMED, "def test_area(): assert area([1, 2]) == 7\n"))
    ini(pytester, "gradcheck_modules = test_models")

    run().assert_outcomes(passed=2)
    run("test_models.py").assert_outcomes(passed=2)


MODULE_FAULTS = {
    "not there": ("wing.modles", "names 'wing.modles', but there is no such module"),
    "package not there": ("wnig.models", "names 'wnig.models', but there is no such module"),
    "package broken": ("broken.models", "importing its package failed: ZeroDivisionError"),
    "package without its needs": (
        "needy.models",
        "importing its package failed: ModuleNotFoundError: No module named 'absent'",
    ),
}


@pytest.mark.usefixtures("wing")
@pytest.mark.parametrize(("name", "told"), MODULE_FAULTS.values(), ids=MODULE_FAULTS.keys())
def test_a_listed_module_that_is_not_there_is_a_usage_error(project, run, pytester, name, told) -> None:
    project({"broken/__init__.py": "1 / 0", "needy/__init__.py": "import absent"})
    ini(pytester, f"gradcheck_modules = {name}")
    result = run()

    assert result.ret == pytest.ExitCode.USAGE_ERROR
    assert told in result.stderr.str()


EMPTY = {
    "nothing": ("x = 1", "nothing in it can be checked: decorate a model"),
    "only imported": ("from wing.models import lift", "its models are only imported; name wing.models instead"),
    "broken": ("1 / 0", "model module 'other' cannot be imported"),
}


@pytest.mark.usefixtures("wing")
@pytest.mark.parametrize(("text", "told"), EMPTY.values(), ids=EMPTY.keys())
def test_a_listed_module_without_anything_to_check_is_an_error(project, run, pytester, text, told) -> None:
    project(other=text)
    ini(pytester, "gradcheck_modules = other")
    result = run()

    assert result.ret == pytest.ExitCode.INTERRUPTED
    assert told in result.stdout.str()


# The record of all reports


@pytest.fixture
def mixed(project) -> None:
    """Items of every kind of outcome."""
    project(
        test_models=source(
            MODELS,
            CONFIRMED,
            REFUTED.replace("def model", "def wrong"),
            REFUTED.replace("def model", "@pytest.mark.xfail\ndef known"),
            REFUTED.replace("def model", "@pytest.mark.skip\ndef skipped"),
            CONFIRMED.replace("slope", "lambda x: [float('nan'), 3.0]").replace("def model", "def strange"),
            CONFIRMED.replace("return area(x)", "raise ArithmeticError('gave up')").replace(
                "def model", "def crashing"
            ),
            "@pytest.mark.gradcheck(at=[1.0, 2.0], gradient=slope)\ndef test_broken(absent): return area\n",
            "def test_unmarked(): pass\n",
        )
    )


EXPECTED = {
    "crashing[gradcheck]": ("failed", None),
    "known[gradcheck]": ("xfailed", "refuted"),
    "model[gradcheck]": ("passed", "confirmed"),
    "skipped[gradcheck]": ("skipped", None),
    "strange[gradcheck]": ("failed", "refuted"),
    "test_broken": ("error", None),
    "wrong[gradcheck]": ("failed", "refuted"),
}


@pytest.mark.usefixtures("mixed")
def test_the_record_holds_every_item_with_outcome_and_verdict(run, pytester) -> None:
    run("--gradcheck-json", "reports.json")
    found = {
        nodeid.split("::")[1]: (item["outcome"], item["verdict"]) for nodeid, item in by_id(record(pytester)).items()
    }

    assert found == EXPECTED


@pytest.mark.usefixtures("mixed")
def test_the_record_holds_whole_reports_in_strict_json(run, pytester) -> None:
    run("--gradcheck-json", "reports.json")
    strange = by_id(record(pytester))["test_models.py::strange[gradcheck]"]["reports"][0]

    assert (strange["format"], strange["function"]) == ("gradcheck-check", "strange")
    assert strange["entries"]["claim"] == ["nan", 3.0]


@pytest.mark.usefixtures("mixed")
def test_the_record_of_a_failed_item_tells_what_was_printed(run, pytester) -> None:
    result = run("--gradcheck-json", "deep/reports.json")
    message = by_id(record(pytester, "deep/reports.json"))["test_models.py::wrong[gradcheck]"]["message"]

    assert message
    assert message in result.stdout.str()


@pytest.mark.usefixtures("mixed")
def test_workers_give_the_same_record_and_the_same_outcomes(run_outside, pytester) -> None:
    alone = run_outside("--gradcheck-json", "alone.json")
    shared = run_outside("--gradcheck-json", "shared.json", *WORKERS)

    assert shared.parseoutcomes() == alone.parseoutcomes()
    assert without_seconds(record(pytester, "shared.json")) == without_seconds(record(pytester, "alone.json"))


def without_seconds(document: Any) -> Any:
    """The record without what differs from run to run."""
    if isinstance(document, dict):
        return {key: without_seconds(value) for key, value in document.items() if key not in ("seconds", "message")}
    return [without_seconds(value) for value in document] if isinstance(document, list) else document


def test_the_record_of_a_run_without_checks_is_empty_but_there(project, run, pytester) -> None:
    project(test_other="def test_other(): pass")
    run("--gradcheck-json", "reports.json")

    assert record(pytester) == {"format": "gradcheck-pytest", "version": 1, "exit_status": 0, "items": []}


def test_the_record_of_a_run_that_ended_early_says_so(project, run, pytester) -> None:
    project(test_models=source(MODELS, "@pytest.mark.gradcheck(att=[1.0])\ndef one(x): pass\n"))
    run("--gradcheck-json", "reports.json")

    assert record(pytester)["exit_status"] == pytest.ExitCode.INTERRUPTED


@pytest.mark.parametrize(("file", "told"), [("-", "name a file"), (".", "is a directory")])
def test_a_record_that_cannot_be_written_is_a_usage_error_before_anything_runs(run, file, told) -> None:
    result = run("--gradcheck-json", file)

    assert result.ret == pytest.ExitCode.USAGE_ERROR
    assert told in result.stderr.str()


@pytest.mark.usefixtures("mixed")
def test_a_junit_file_holds_the_verdict_as_a_property(run, pytester) -> None:
    run("--junitxml", "junit.xml")
    cases = {case.get("name"): case for case in ElementTree.parse(pytester.path / "junit.xml").iter("testcase")}
    properties = {each.get("name"): each.get("value") for each in cases["wrong[gradcheck]"].iter("property")}

    assert properties["gradcheck_verdict"] == "refuted"
    assert "refuted" in str(cases["wrong[gradcheck]"].find("failure").get("message"))


# Beside other settings of pytest


@pytest.mark.usefixtures("wing")
def test_model_modules_work_under_workers(run_outside) -> None:
    run_outside(*WORKERS).assert_outcomes(passed=2, failed=1)


@pytest.mark.usefixtures("mixed")
def test_a_fault_is_told_under_workers_too(project, run_outside) -> None:
    project(test_models=source(MODELS, "@pytest.mark.gradcheck(att=[1.0])\ndef one(x): pass\n"))
    result = run_outside(*WORKERS)

    result.stdout.fnmatch_lines(["test_models.py:*: one: the gradcheck mark has no argument 'att'; did you mean at?*"])


def test_an_undecided_check_warns_under_workers_too(project, run_outside) -> None:
    project(test_models=source(KINK, UNDECIDED))

    run_outside(*WORKERS).assert_outcomes(passed=1, warnings=1)


@pytest.fixture
def installed(pytester, monkeypatch) -> Run:
    """Run pytest as where the package is installed: with nothing but the entry point that the project declares."""
    declared = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    (name, module), *_ = declared["entry-points"]["pytest11"].items()
    description = pytester.mkdir("site") / "gradcheck-0.dist-info"
    description.mkdir()
    (description / "METADATA").write_text("Metadata-Version: 2.1\nName: gradcheck\nVersion: 0\n", encoding="utf-8")
    (description / "entry_points.txt").write_text(f"[pytest11]\n{name} = {module}\n", encoding="utf-8")
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([str(description.parent), str(ROOT)]))
    monkeypatch.delenv("PYTEST_DISABLE_PLUGIN_AUTOLOAD", raising=False)
    return pytester.runpytest_subprocess


def test_where_the_package_is_installed_the_plugin_is_there(project, installed) -> None:
    project(test_models=source(MODELS, CONFIRMED))

    installed("--strict-markers").assert_outcomes(passed=1)


def test_where_it_is_switched_off_nothing_is_checked_and_nothing_breaks(project, installed) -> None:
    project(test_models=source(MODELS, REFUTED, "def test_other(): pass\n"))
    result = installed("-p", "no:gradcheck")

    result.assert_outcomes(passed=1, warnings=1)
    result.stdout.fnmatch_lines(["*Unknown pytest.mark.gradcheck*"])


@pytest.mark.usefixtures("mixed")
def test_collecting_only_lists_the_items_and_checks_nothing(run) -> None:
    result = run("--collect-only", "-q")

    result.stdout.fnmatch_lines(["test_models.py::model?gradcheck?", "test_models.py::wrong?gradcheck?"])
    assert result.ret == pytest.ExitCode.OK


@pytest.mark.usefixtures("mixed")
def test_all_checks_can_be_deselected_by_their_mark(run) -> None:
    run("-m", "not gradcheck").assert_outcomes(passed=1, deselected=7)


@pytest.mark.usefixtures("wing")
@pytest.mark.parametrize(
    "options", [["--import-mode=importlib"], ["-W", "error"], ["--strict-config"], ["--full-trace"], ["--tb=line"]]
)
def test_outcomes_do_not_depend_on_other_settings(run, options) -> None:
    run(*options).assert_outcomes(passed=2, failed=1)


@pytest.mark.usefixtures("wing")
def test_checks_run_without_a_terminal(run_outside, pytester) -> None:
    result = run_outside("-p", "no:terminal", "--gradcheck-json", "reports.json")

    assert result.ret == pytest.ExitCode.TESTS_FAILED
    assert len(record(pytester)["items"]) == 2
