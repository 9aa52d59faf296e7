"""The command: what it prints where, and its exit status; the verbs are stand-ins unless a test says otherwise."""

import json
import os
import subprocess
import sys
from types import ModuleType, SimpleNamespace

import pytest
from jsonschema import Draft202012Validator

from gradcheck import __version__
from gradcheck.command_line import run
from gradcheck.demo.scenario import PLANTED
from gradcheck.errors import ModelFailure, UsageError
from gradcheck.records.estimate import Scan
from gradcheck.records.finding import FindingCode, Location, Severity
from gradcheck.report.json_format import schema
from tests.records import BLOCKER, OPEN, REFUTED, WRONG, audit_report, check_report, finding, row

MODEL = """
import gradcheck

def drag(x):
    return x[0] ** 2 * x[1]

def drag_gradient(x):
    return [2 * x[0] * x[1], x[0] ** 2]

def wrong_gradient(x):
    return [x[0] * x[1], x[0] ** 2]

def fails(x):
    raise ValueError("no such wing")

def talks(x):
    print("residual 1e-3")
    return drag(x)

@gradcheck.model(at=[0.3, 1.2], gradient=drag_gradient, rel_tol=1e-6)
def described(x):
    return drag(x)

problem = gradcheck.Problem(
    variables=[gradcheck.Variable("span", 0.3, lower=0.0), gradcheck.Variable("chord", 1.2, upper=4.0)],
    objective=gradcheck.Function(drag, gradient=drag_gradient),
)

number = 3.0
"""


SCAN = Scan(
    steps=[1e-3], values=[1.0], errors=[1e-6], best_step=1e-3, noise=0.0, order=2.0, value=1.0, bound=1e-6, along="span"
)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    (tmp_path / "wing.py").write_text(MODEL, encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def verbs(folder, monkeypatch):
    """Stand-ins for the verbs: they keep what they were called with, and return or raise what they are told to."""
    stand_in = SimpleNamespace(called=[], result=audit_report(text="READY: everything\nand more"))

    def answer(*positional, **keywords):
        stand_in.called.append((positional, keywords))
        result = stand_in.result(*positional) if callable(stand_in.result) else stand_in.result
        if isinstance(result, BaseException):
            raise result
        return result

    for name, members in {
        "auditing": {"audit": answer},
        "checking": {"check": answer, "check_described": answer},
        "scanning": {"scan": answer},
    }.items():
        module = ModuleType(f"gradcheck.{name}")
        vars(module).update(members)
        monkeypatch.setitem(sys.modules, module.__name__, module)
    return stand_in


def complaints(name, document):
    """What the schema has against a document, one short line each."""
    return [error.message[:200] for error in Draft202012Validator(schema(name)).iter_errors(document)]


def keywords(verbs):
    return verbs.called[-1][1]


def gradcheck(*arguments, code=None, **environment):
    """The command in a process of its own, as a user starts it (or a driver's code in its place)."""
    start = ["-c", code] if code else ["-m", "gradcheck"]
    root = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
    path = os.pathsep.join(part for part in (root, os.environ.get("PYTHONPATH", "")) if part)
    return subprocess.run(
        [sys.executable, *start, *arguments],
        env=os.environ | {"PYTHONPATH": path} | environment,
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=120,
        check=False,
    )


# ---- exit statuses ----


@pytest.mark.parametrize(
    ("report", "status"),
    [
        ({}, 0),
        ({"claims": (check_report(row()),)}, 0),
        ({"findings": (finding(),)}, 0),
        ({"claims": (check_report(WRONG),)}, 1),
        ({"findings": (finding(**BLOCKER),)}, 1),
        ({"findings": (finding(**BLOCKER),), "complete": False}, 1),
        ({"claims": (check_report(WRONG), check_report(OPEN))}, 1),
        ({"evaluable": False, "findings": (finding(**BLOCKER),)}, 3),
        ({"claims": (check_report(OPEN),)}, 4),
        ({"complete": False}, 4),
    ],
)
def test_an_audit_ends_with_the_status_of_what_it_found(verbs, report, status):
    verbs.result = audit_report(**report)

    assert run(["audit", "wing.py:problem"]) == status


@pytest.mark.parametrize(
    ("reports", "status"),
    [([row()], 0), ([WRONG], 1), ([OPEN], 4), ([OPEN, WRONG], 1), ([row(), OPEN], 4)],
)
def test_a_check_ends_with_the_status_of_its_worst_claim(verbs, reports, status):
    verbs.result = [check_report(each) for each in reports]

    assert run(["check", "wing.py:problem"]) == status


@pytest.mark.parametrize("report", [{"claims": (check_report(OPEN),)}, {"complete": False}])
def test_undecided_and_incomplete_can_be_allowed(verbs, report):
    verbs.result = audit_report(**report)

    assert run(["audit", "wing.py:problem", "--allow-undecided"]) == 0


def test_allowing_undecided_never_allows_refuted(verbs):
    verbs.result = [check_report(WRONG)]

    assert run(["check", "wing.py:problem", "--allow-undecided"]) == 1


@pytest.mark.parametrize(
    ("error", "status", "words"),
    [
        (UsageError("budget is 0.5"), 2, "gradcheck: budget is 0.5"),
        (ModelFailure("drag could not be evaluated: it raised ValueError"), 3, "drag could not be evaluated"),
        (
            ZeroDivisionError("division by zero"),
            70,
            "an error of gradcheck itself: ZeroDivisionError: division by zero",
        ),
        (KeyboardInterrupt(), 130, "interrupted"),
    ],
)
@pytest.mark.parametrize("command", ["audit", "check", "scan"])
def test_a_failure_has_its_own_status_and_one_line_without_a_traceback(verbs, capfd, command, error, status, words):
    verbs.result = error

    assert run([command, "wing.py:problem"]) == status
    out, err = capfd.readouterr()
    assert out == ""
    assert len(err.splitlines()) == 1
    assert words in err


def test_the_traceback_of_an_own_error_is_shown_on_request(verbs, capfd, monkeypatch):
    monkeypatch.setenv("GRADCHECK_TRACEBACK", "1")
    verbs.result = ZeroDivisionError("division by zero")
    run(["audit", "wing.py:problem"])

    assert "Traceback (most recent call last)" in capfd.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["audit", "wing.py:prblem"], "did you mean problem?"),
        (["audit", "wings.py:problem"], "did you mean wing.py?"),
        (["audit", "wing.py"], "names no attribute"),
        (["audit", "wing.py:drag"], "is a plain function, so say where with --at"),
        (["check", "wing.py:drag"], "is a plain function, so say where with --at"),
        (["scan", "wing.py:drag"], "is a plain function, so say where with --at"),
        (["audit", "wing.py:number"], "is 3.0 (float); a function or a gradcheck.Problem is needed"),
        (["audit", "wing.py:drag", "--at", "0.3;1.2"], "--at '0.3;1.2': '0.3;1.2' is no number"),
        (["audit", "wing.py:drag", "--at", "1,2", "--gradient", "drag_gradint"], "did you mean drag_gradient"),
        (["audit", "wing.py:problem", "--budget", "0"], "see gradcheck audit --help"),
        (["audit", "wing.py:problem", "--seed", "-1"], "-1 is not in the range"),
        (["audit", "wing.py:problem", "--points", "missing.csv"], "'missing.csv' cannot be read"),
        (["audit", "wing.py:problem", "--json", "nowhere/report.json"], "there is no folder"),
        (["audit", "wing.py:problem", "--json", "."], "is a folder"),
        (["audit", "--frobnicate"], "see gradcheck audit --help"),
        (["audit"], "see gradcheck audit --help"),
        (["audt", "wing.py:problem"], "see gradcheck --help"),
    ],
)
def test_a_command_that_cannot_be_carried_out_says_so_in_one_line(verbs, capfd, arguments, words):
    assert run(arguments) == 2
    out, err = capfd.readouterr()
    assert out == ""
    assert len(err.splitlines()) == 1
    assert words in err
    assert verbs.called == []


def test_without_a_command_the_help_is_shown_and_nothing_was_done(capfd):
    assert run([]) == 2
    assert "Usage: gradcheck" in capfd.readouterr().err


def test_what_was_found_before_an_interrupt_is_printed(verbs, capfd):
    verbs.result = KeyboardInterrupt()
    verbs.result.found = audit_report(text="NOT READY: half of it")

    assert run(["audit", "wing.py:problem"]) == 130
    assert capfd.readouterr().out == "NOT READY: half of it\n"


# ---- what reaches the verbs ----


def test_options_reach_the_audit(verbs):
    arguments = (
        "audit wing.py:drag --at 0.3,1.2 --lower 0,none --upper 9 --samples 3 --budget 50 --time-limit 10min --seed 7"
    )
    run([*arguments.split(), "--gradient", "drag_gradient"])
    (model,), found = verbs.called[-1]

    assert model([2.0, 3.0]) == 12.0
    assert found["gradient"]([2.0, 3.0]) == [12.0, 4.0]
    assert (found["at"], found["samples"], found["budget"], found["time_limit"], found["seed"]) == (
        [0.3, 1.2],
        3,
        50,
        "10min",
        7,
    )
    assert (found["bounds"].lb, found["bounds"].ub) == ([0.0, float("-inf")], [9.0])


def test_a_gradient_may_be_the_name_of_an_automatic_source(verbs):
    run(["audit", "wing.py:drag", "--at", "1,2", "--gradient", "jax"])

    assert keywords(verbs)["gradient"] == "jax"


def test_a_gradient_may_have_an_address_of_its_own(verbs, folder):
    (folder / "adjoint.py").write_text("def gradient(x): return 'adjoint'", encoding="utf-8")
    run(["audit", "wing.py:drag", "--at", "1,2", "--gradient", "adjoint.py:gradient"])

    assert keywords(verbs)["gradient"](0) == "adjoint"


@pytest.mark.parametrize("name", ["described", "problem"])
@pytest.mark.parametrize("command", ["audit", "check", "scan"])
def test_a_described_model_needs_no_options(verbs, command, name):
    verbs.result = {"audit": audit_report(), "check": [check_report(row())], "scan": SCAN}[command]

    assert run([command, f"wing.py:{name}"]) == 0
    assert not {"at", "bounds", "gradient", "jacobian"} & set(keywords(verbs))


def test_the_command_line_overrules_a_description(verbs):
    run(["audit", "wing.py:described", "--at", "5,6"])

    assert keywords(verbs)["at"] == [5.0, 6.0]


def test_given_points_are_audited_too(verbs, folder):
    (folder / "iterates.csv").write_text("1,2\n3,4\n", encoding="utf-8")
    run(["audit", "wing.py:problem", "--points", "iterates.csv"])

    assert keywords(verbs)["points"] == [[1.0, 2.0], [3.0, 4.0]]


def test_a_plain_function_starts_at_the_first_of_the_given_points(verbs, folder):
    (folder / "iterates.csv").write_text("1,2\n3,4\n", encoding="utf-8")
    run(["audit", "wing.py:drag", "--points", "iterates.csv"])

    assert keywords(verbs)["at"] == [1.0, 2.0]
    assert keywords(verbs)["points"] == [[3.0, 4.0]]


def test_a_plain_function_is_checked_without_raising(verbs):
    verbs.result = check_report(row())
    run(["check", "wing.py:drag", "--at", "1,2", "--gradient", "drag_gradient"])

    assert (keywords(verbs)["on_refuted"], keywords(verbs)["on_undecided"]) == ("return", "pass")


@pytest.mark.parametrize(("given", "along"), [([], 0), (["--along", "1"], 1), (["--along", "chord"], "chord")])
def test_a_scan_goes_along_a_variable_by_name_or_index(verbs, given, along):
    verbs.result = SCAN

    assert run(["scan", "wing.py:problem", *given]) == 0
    assert keywords(verbs)["along"] == along


# ---- the demonstration ----


def planted_report():
    """An audit that found exactly what is planted, and cannot help it."""
    claims = [item for item in PLANTED if item.kind == FindingCode.CLAIM_REFUTED]
    places = [item for item in PLANTED if item.kind not in (FindingCode.CLAIM_REFUTED, FindingCode.CLAIM_UNDECIDED)]
    return audit_report(
        text="NOT READY: as planted",
        claims=tuple(check_report(row(item.variable, verdict=REFUTED), function=item.function) for item in claims),
        findings=tuple(
            finding(code=item.kind, function=item.function, variable=item.variable or None, where=Location(point=[0.0]))
            for item in places
        ),
    )


def test_the_demonstration_succeeds_if_exactly_what_is_planted_was_found(verbs, capfd):
    verbs.result = planted_report()

    assert run(["demo"]) == 0
    out = capfd.readouterr().out
    assert out.startswith("NOT READY: as planted\n\nPlanted in this demonstration\n  - found: ")
    assert "Exactly what is planted was found." in out


@pytest.mark.parametrize("report", [{}, {"findings": (finding(function="nowhere"),)}], ids=["missed", "surplus"])
def test_the_demonstration_fails_otherwise(verbs, report):
    verbs.result = audit_report(**({"claims": planted_report().claims} | report))

    assert run(["demo"]) == 1


def test_the_demonstration_audits_the_problem_with_the_mistake_in_it(verbs):
    run(["demo", "--seed", "3"])
    (problem,), found = verbs.called[-1]

    assert problem.name == "heating branch"
    assert found["seed"] == 3


# ---- what is printed where ----


def test_the_report_is_printed_and_nothing_else(verbs, capfd):
    run(["audit", "wing.py:problem"])

    assert capfd.readouterr() == ("READY: everything\nand more\n", "")


def test_quiet_leaves_one_line_where_all_is_well(verbs, capfd):
    run(["audit", "wing.py:problem", "--quiet"])

    assert capfd.readouterr() == ("READY: everything\n", "")


def test_quiet_hides_no_fault(verbs, capfd):
    verbs.result = audit_report(text="NOT READY: a jump\nand where", findings=(finding(**BLOCKER),))
    run(["audit", "wing.py:problem", "--quiet"])

    assert "and where" in capfd.readouterr().out


def test_quiet_tells_every_claim_of_a_check(verbs, capfd):
    verbs.result = [check_report(row(), text="gradient of a confirmed\n1"), check_report(row(), text="b\n2")]
    run(["check", "wing.py:problem", "--quiet"])

    assert capfd.readouterr().out == "gradient of a confirmed\nb\n"


def test_json_on_standard_output_is_exactly_one_document(verbs, capfd):
    run(["audit", "wing.py:problem", "--json", "-"])
    document = json.loads(capfd.readouterr().out)

    assert complaints("audit", document) == []
    assert document["format"] == "gradcheck-audit"


def test_json_goes_to_a_file_beside_the_printed_report(verbs, folder, capfd):
    run(["audit", "wing.py:problem", "--json", "report.json"])

    assert json.loads((folder / "report.json").read_text(encoding="utf-8"))["name"] == "wing"
    assert capfd.readouterr().out == "READY: everything\nand more\n"


@pytest.mark.parametrize(
    ("error", "status"),
    [(UsageError("a"), 2), (ModelFailure("b"), 3), (TypeError("c"), 70), (KeyboardInterrupt(), 130)],
)
def test_json_on_standard_output_is_one_document_also_on_failure(verbs, capfd, error, status):
    verbs.result = error
    run(["audit", "wing.py:problem", "--json", "-"])
    document = json.loads(capfd.readouterr().out)

    assert complaints("error", document) == []
    assert document["status"] == status


@pytest.mark.parametrize("arguments", [["--json", "-", "--frobnicate"], ["--frobnicate", "--json=-"]])
def test_json_is_one_document_although_the_command_line_itself_is_wrong(capfd, arguments):
    assert run(["audit", "wing.py:problem", *arguments]) == 2
    assert json.loads(capfd.readouterr().out)["status"] == 2


def test_json_of_a_model_without_a_value_has_the_report_and_the_reason(verbs, capfd):
    crash = finding(code=FindingCode.CRASH, severity=Severity.BLOCKER, text="drag raised ValueError: no such wing")
    verbs.result = audit_report(evaluable=False, ready=False, findings=(crash,))

    assert run(["audit", "wing.py:problem", "--json", "-"]) == 3
    out, err = capfd.readouterr()
    document = json.loads(out)
    assert complaints("audit", document) == []
    assert (document["status"], document["error"]) == (3, "drag raised ValueError: no such wing")
    assert "no such wing" in err


def test_an_older_json_file_is_not_taken_for_the_result_of_a_failed_command(verbs, folder):
    (folder / "report.json").write_text('{"ready": true}', encoding="utf-8")
    verbs.result = ModelFailure("drag could not be evaluated")
    run(["audit", "wing.py:problem", "--json", "report.json"])

    assert json.loads((folder / "report.json").read_text(encoding="utf-8"))["status"] == 3


def test_progress_is_not_shown_where_nobody_looks(verbs):
    run(["audit", "wing.py:problem"])

    assert keywords(verbs)["progress"] is None


def test_progress_is_shown_on_a_terminal_unless_quiet(verbs, monkeypatch):
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    monkeypatch.setenv("TERM", "xterm")
    run(["audit", "wing.py:problem"])
    shown = keywords(verbs)["progress"]
    run(["audit", "wing.py:problem", "--quiet"])

    assert callable(shown)
    assert keywords(verbs)["progress"] is None


@pytest.mark.parametrize(("environment", "bold"), [({}, True), ({"NO_COLOR": "1"}, False), ({"TERM": "dumb"}, False)])
def test_a_terminal_shows_the_verdict_in_bold_unless_told_not_to(monkeypatch, environment, bold):
    from gradcheck.report.output import print_report

    written = []
    monkeypatch.setattr(sys.stdout, "isatty", lambda: True)
    monkeypatch.setattr("gradcheck.report.output._to_stdout", written.append)
    monkeypatch.delenv("NO_COLOR", raising=False)
    for name, value in ({"TERM": "xterm"} | environment).items():
        monkeypatch.setenv(name, value)
    print_report("READY\nmore")

    assert ("\x1b[1m" in written[0]) == bold


# ---- in a process of its own ----

DRIVER = """
import atexit, ctypes, os, subprocess, sys
from types import ModuleType
from gradcheck.command_line import main
from tests.records import audit_report

def audit(thing, **keywords):
    print("printed by Python")
    sys.__stdout__.write("printed past a redirection\\n")
    os.write(1, b"written to the descriptor\\n")
    subprocess.run([sys.executable, "-c", "print('printed by a program')"])
    try:
        ctypes.CDLL(None).puts(b"printed by C")
    except (OSError, TypeError, AttributeError):
        pass
    atexit.register(print, "printed at exit")
    atexit.register(os.write, 1, b"written at exit\\n")
    return audit_report(text="READY")

sys.modules["gradcheck.auditing"] = module = ModuleType("gradcheck.auditing")
module.audit = audit
main()
"""


@pytest.mark.parametrize("arguments", [[], ["--json", "-"]])
def test_whatever_a_model_prints_and_however_it_stays_out_of_the_report(folder, arguments):
    done = gradcheck("audit", "wing.py:problem", *arguments, code=DRIVER)

    assert done.returncode == 0
    if arguments:
        assert json.loads(done.stdout)["format"] == "gradcheck-audit"
    else:
        assert done.stdout == "READY\n"
    for words in (
        "printed by Python",
        "printed past a redirection",
        "written to the descriptor",
        "printed by a program",
        "printed at exit",
        "written at exit",
    ):
        assert words in done.stderr


def test_what_a_module_prints_while_it_is_imported_stays_out_of_the_report(folder):
    (folder / "loud.py").write_text("print('loading tables')\n" + MODEL, encoding="utf-8")
    done = gradcheck("audit", "loud.py:problem", code=DRIVER)

    assert done.stdout == "READY\n"
    assert "loading tables" in done.stderr


def test_a_log_in_ascii_gets_the_report_too(folder):
    code = DRIVER.replace('"READY"', '"READY 2 ± 1"')
    done = gradcheck("audit", "wing.py:problem", code=code, PYTHONIOENCODING="ascii")

    assert (done.returncode, done.stdout) == (0, "READY 2 +/- 1\n")


def test_a_reader_that_has_seen_enough_does_not_change_the_status(folder):
    code = DRIVER.replace('text="READY"', 'text="READY\\n" * 1_000_000')
    lead = f"import sys, subprocess; sys.argv[0] = '-'; import os\n{code}"
    process = subprocess.Popen(
        [sys.executable, "-c", lead, "audit", "wing.py:problem"],
        env=os.environ | {"PYTHONPATH": os.pathsep.join(sys.path)},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    assert process.stdout.readline() == b"READY\n"
    process.stdout.close()
    complaint = process.stderr.read()
    process.stderr.close()

    assert process.wait(timeout=60) == 0
    assert b"Traceback" not in complaint
    assert b"Exception ignored" not in complaint


@pytest.mark.parametrize("arguments", [["--help"], ["audit", "--help"], ["demo", "--help"], ["--version"]])
def test_help_answers_without_loading_numpy(arguments):
    code = "import sys\nfrom gradcheck.command_line import run\nrun(sys.argv[1:])\nprint('numpy' in sys.modules)"
    done = gradcheck(*arguments, code=code)

    assert done.stdout.splitlines()[-1] == "False"


@pytest.mark.parametrize("command", [[], ["audit"], ["check"], ["scan"], ["demo"]])
def test_help_fits_a_terminal_and_begins_with_examples(command, capfd):
    assert run([*command, "--help"]) == 0
    text = capfd.readouterr().out

    assert max(len(line) for line in text.splitlines()) <= 80
    assert text.index("Example") < text.index("Options:")


@pytest.mark.parametrize("command", [[], ["audit"], ["check"], ["scan"]])
def test_help_tells_every_exit_status(command, capfd):
    run([*command, "--help"])
    lines = [line.split() for line in capfd.readouterr().out.partition("Exit status:")[2].splitlines()]

    assert [line[0] for line in lines if line and line[0].isdigit()] == ["0", "1", "2", "3", "4", "70", "130"]


def test_the_version_is_told(capfd):
    assert run(["--version"]) == 0
    assert capfd.readouterr().out == f"gradcheck {__version__}\n"


# ---- with the real verb ----


@pytest.mark.parametrize(
    ("arguments", "status", "words"),
    [
        (["wing.py:drag", "--at", "0.3,1.2", "--gradient", "drag_gradient"], 0, "gradient of drag confirmed"),
        (
            ["wing.py:drag", "--at", "0.3,1.2", "--gradient", "wrong_gradient"],
            1,
            "gradient of drag refuted: x[0] is claimed",
        ),
        (["wing.py:talks", "--at", "0.3,1.2", "--gradient", "drag_gradient"], 0, "gradient of talks confirmed"),
        (["wing.py:described"], 0, "gradient of described confirmed"),
        (["wing.py:problem"], 0, "gradient of objective confirmed"),
    ],
)
def test_a_model_in_a_file_is_checked_from_the_shell(folder, arguments, status, words):
    done = gradcheck("check", *arguments)

    assert done.returncode == status, done.stderr
    assert done.stdout.startswith(words)


def test_a_model_that_raises_at_its_start_point_is_told_with_its_last_words(folder):
    done = gradcheck("check", "wing.py:fails", "--at", "0.3,1.2", "--gradient", "drag_gradient")

    assert done.returncode == 3
    assert done.stdout == ""
    assert "ValueError: no such wing" in done.stderr
    assert "Traceback" not in done.stderr


def test_an_interrupt_in_the_middle_of_a_model_ends_the_command(folder):
    text = MODEL.replace("return x[0] ** 2 * x[1]", "raise KeyboardInterrupt")
    (folder / "interrupted.py").write_text(text, encoding="utf-8")
    done = gradcheck("check", "interrupted.py:problem")

    assert done.returncode == 130
    assert done.stderr == "gradcheck: interrupted; nothing was found yet\n"


def test_a_scan_from_the_shell_draws_its_curve(folder):
    done = gradcheck("scan", "wing.py:problem", "--along", "chord")

    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("objective along chord: 0.09 ± ")
    assert "step   (O: best)" in done.stdout


def test_a_scan_writes_its_picture_beside_the_report_and_the_document(folder):
    done = gradcheck("scan", "wing.py:problem", "--along", "chord", "--svg", "chord.svg", "--json", "chord.json")

    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("objective along chord: 0.09 ± ")
    assert "<title" in (folder / "chord.svg").read_text(encoding="utf-8")
    assert json.loads((folder / "chord.json").read_text(encoding="utf-8"))["format"] == "gradcheck-scan"


def test_a_picture_on_standard_output_stands_alone(folder):
    done = gradcheck("scan", "wing.py:problem", "--svg", "-", PYTHONIOENCODING="ascii")

    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("<?xml")
    assert done.stdout.endswith("</svg>\n")


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["--svg", "-", "--json", "-"], "would mix on standard output"),
        (["--svg", "nowhere/curve.svg"], "there is no folder"),
        (["--svg", "."], "is a folder"),
        (["--svg", ""], "the name of the file to write is empty"),
    ],
)
def test_a_picture_that_cannot_be_written_is_told_before_the_model_runs(verbs, capfd, options, words):
    assert run(["scan", "wing.py:problem", *options]) == 2
    assert words in capfd.readouterr().err
    assert verbs.called == []


def test_a_picture_without_matplotlib_is_told_before_the_model_runs(verbs, capfd, monkeypatch):
    monkeypatch.setattr("gradcheck.command_line.find_spec", lambda name: None)

    assert run(["scan", "wing.py:problem", "--svg", "curve.svg"]) == 2
    assert "--svg needs matplotlib, which is not installed" in capfd.readouterr().err
    assert verbs.called == []


def test_the_document_of_a_real_check_holds_to_its_schema(folder):
    done = gradcheck("check", "wing.py:drag", "--at", "0.3,1.2", "--gradient", "wrong_gradient", "--json", "-")

    assert complaints("check", json.loads(done.stdout)) == []


def test_a_check_without_a_claim_names_the_options_that_give_one(tmp_path):
    (tmp_path / "spring.py").write_text("def work(x):\n    return x[0] ** 2\n", encoding="utf-8")

    done = subprocess.run(
        [sys.executable, "-m", "gradcheck", "check", f"{tmp_path / 'spring.py'}:work", "--at", "1.0"],
        capture_output=True,
        text=True,
        check=False,
    )

    assert done.returncode == 2
    assert "give --gradient or --jacobian" in done.stderr
