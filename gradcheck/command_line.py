"""The command ``gradcheck``: options and exit statuses; everything else is done by the verbs.

Nothing heavy is imported at the top: ``gradcheck --help`` must answer at once, without numpy.
"""

import os
import sys
import traceback
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from enum import IntEnum
from importlib.util import find_spec
from typing import Any, NoReturn, TypeAlias

import click

from gradcheck import __version__
from gradcheck.command_options import HOW, STATUSES, WHERE, options
from gradcheck.errors import MissingExtra, ModelFailure, UsageError
from gradcheck.evaluation.prints import abandon_stdout, prints_kept_apart
from gradcheck.problem.loading import importable, load, split_address
from gradcheck.problem.reading import bounds_from_text, point_from_text, points_from_file
from gradcheck.report.output import complain, print_report, refuse_unwritable, write_document

#: Names that stand for a derivative by automatic differentiation instead of an address.
_AUTOMATIC = ("jax", "autograd")

Options: TypeAlias = dict[str, Any]
Progress: TypeAlias = Callable[[str], None] | None


class Exit(IntEnum):
    """Exit statuses."""

    READY = 0
    REFUTED = 1
    USAGE = 2
    NOT_EVALUABLE = 3
    UNDECIDED = 4
    OWN_ERROR = 70
    INTERRUPTED = 130


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Answer:
    """What a command found: the record, what it says in full and in brief, and the exit status."""

    record: Any
    text: str
    brief: str
    status: int
    error: str = ""

    @staticmethod
    def of(found: Any, status: int, error: str = "") -> "Answer":
        """The answer that consists of one record, or of several."""
        texts = [str(record) for record in found] if isinstance(found, list | tuple) else [str(found)]
        brief = "\n".join(text.partition("\n")[0] for text in texts)
        return Answer(record=found, text="\n\n".join(texts), brief=brief, status=status, error=error)


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Entry point of the command: runs it and ends the process with its exit status."""
    status = run(sys.argv[1:] if arguments is None else arguments)
    abandon_stdout()
    sys.exit(status)


def run(arguments: Sequence[str]) -> int:
    """Carry out a command line and return its exit status; never raises."""
    arguments = list(arguments)
    try:
        status = commands.main(args=arguments, prog_name="gradcheck", standalone_mode=False)
    except click.ClickException as error:
        context = error.ctx.command_path if isinstance(error, click.UsageError) and error.ctx else "gradcheck"
        message = f"{error.format_message().rstrip('.')}; see {context} --help"
        return _fail(Exit.USAGE, message, _json_target(arguments))
    except (click.Abort, KeyboardInterrupt):
        return _fail(Exit.INTERRUPTED, "interrupted", _json_target(arguments))
    return status if isinstance(status, int) else Exit.READY


@click.group(
    invoke_without_command=True,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    epilog=STATUSES,
)
@click.version_option(__version__, prog_name="gradcheck", message="%(prog)s %(version)s")
@click.pass_context
def commands(context: click.Context) -> int:
    """Can the derivatives of a numerical model be trusted, before an optimizer runs on it?

    \b
    Examples:
      gradcheck demo
      gradcheck check wing.py:drag --at 0.3,1.2 --gradient drag_gradient
      gradcheck audit wing.py:problem --budget 500 --json report.json
      gradcheck scan package.module:drag --at 0.3,1.2 --along 1

    MODEL is package.module:attribute or path/to/file.py:attribute: a function
    (say where with --at), a function decorated by gradcheck.model, or a
    gradcheck.Problem.
    """
    if context.invoked_subcommand is None:
        click.echo(context.get_help(), err=True)
        return Exit.USAGE
    return Exit.READY


@commands.command("audit", epilog=STATUSES)
@options(*WHERE, "gradient", "jacobian", "samples", "points", *HOW, "allow_undecided")
def _audit_command(**given: Any) -> int:
    """Is the model fit for an optimizer?

    Looks at its claimed derivatives, smoothness, noise and scaling, and says
    what to do.

    \b
    Examples:
      gradcheck audit wing.py:problem
      gradcheck audit wing.py:problem --samples 5 --time-limit 10min
      gradcheck audit wing.py:drag --at 0.3,1.2 --lower 0 --json -
    """
    return _carry_out(_audit, given)


@commands.command("check", epilog=STATUSES)
@options(*WHERE, "gradient", "jacobian", "points", *HOW, "allow_undecided")
def _check_command(**given: Any) -> int:
    """Is the claimed derivative right, entry by entry?

    \b
    Examples:
      gradcheck check wing.py:drag --at 0.3,1.2 --gradient drag_gradient
      gradcheck check wing.py:loss --at '{"a": 0.3}' --gradient jax
      gradcheck check wing.py:problem
    """
    return _carry_out(_check, given)


@commands.command("scan", epilog=STATUSES)
@options(*WHERE, "along", *HOW, "svg")
def _scan_command(**given: Any) -> int:
    """How does the error of a difference depend on its step?

    \b
    Examples:
      gradcheck scan wing.py:problem --along span
      gradcheck scan wing.py:drag --at 0.3,1.2 --along 1
      gradcheck scan wing.py:problem --along span --svg span.svg
    """
    return _carry_out(_scan, given)


@commands.command("demo", epilog="Exits with 0 if exactly what is planted was found, otherwise with 1.")
@options("seed", "json", "quiet")
def _demo_command(**given: Any) -> int:
    """Audit a small built-in model with faults planted in it.

    \b
    Example:
      gradcheck demo
    """
    return _carry_out(_demo, {"model": "", **given})


def _audit(given: Options, progress: Progress) -> Answer:
    from gradcheck.auditing import audit

    model = load(given["model"])
    keywords = _keywords(given, model, "at", "bounds", "gradient", "jacobian")
    if given["points"]:
        keywords["points"] = points_from_file(given["points"])
        if "at" not in keywords and not _is_described(model):
            keywords["at"] = keywords["points"].pop(0)
    limits = {name: given[name] for name in ("samples", "budget", "time_limit", "seed")}
    return _answer_of_audit(audit(model, progress=progress, **keywords, **limits), given["allow_undecided"])


def _answer_of_audit(report: Any, allow_undecided: bool) -> Answer:
    from gradcheck.records.finding import Severity
    from gradcheck.records.verdict import Verdict

    verdicts = [claim.verdict for claim in report.claims]
    if not report.evaluable:
        words = "; ".join(finding.text for finding in report.findings if finding.severity == Severity.BLOCKER)
        error = words or "the model could not be evaluated at its start point"
        return Answer.of(report, Exit.NOT_EVALUABLE, error)
    if Verdict.REFUTED in verdicts or any(finding.severity == Severity.BLOCKER for finding in report.findings):
        status = Exit.REFUTED
    elif (Verdict.UNDECIDED in verdicts or not report.complete) and not allow_undecided:
        status = Exit.UNDECIDED
    else:
        status = Exit.READY
    return Answer.of(report, status)


def _check(given: Options, progress: Progress) -> Answer:
    from gradcheck.checking import check, check_described
    from gradcheck.problem.layout import points

    model = load(given["model"])
    keywords = _keywords(given, model, "at", "bounds", "gradient", "jacobian")
    if given["points"]:
        keywords["at"] = points(*points_from_file(given["points"]))
    limits = {name: given[name] for name in ("budget", "time_limit", "seed")}
    if not _is_described(model) and not any(kind in keywords for kind in ("gradient", "jacobian")):
        raise UsageError("nothing is claimed, so there is nothing to check; give --gradient or --jacobian")
    if _is_described(model):
        reports = check_described(model, **keywords, **limits)
    else:
        reports = [check(model, on_refuted="return", on_undecided="pass", **keywords, **limits)]
    return _answer_of_checks(reports, given["allow_undecided"])


def _answer_of_checks(reports: list[Any], allow_undecided: bool) -> Answer:
    from gradcheck.records.verdict import Verdict

    if not reports:
        raise UsageError("the model claims no derivative, so there is nothing to check; give one with --gradient")
    overall = Verdict.overall([report.verdict for report in reports])
    undecided = Exit.READY if allow_undecided else Exit.UNDECIDED
    statuses = {Verdict.CONFIRMED: Exit.READY, Verdict.REFUTED: Exit.REFUTED, Verdict.UNDECIDED: undecided}
    return Answer.of(reports, statuses[overall])


def _scan(given: Options, progress: Progress) -> Answer:
    from gradcheck.report.scan_text import brief_scan
    from gradcheck.scanning import scan

    model = load(given["model"])
    along = int(given["along"]) if given["along"].isdigit() else given["along"]
    limits = {name: given[name] for name in ("budget", "time_limit", "seed")}
    curve = scan(model, along=along, **_keywords(given, model, "at", "bounds"), **limits)
    return Answer(record=curve, text=str(curve), brief=brief_scan(curve), status=Exit.READY)


def _demo(given: Options, progress: Progress) -> Answer:
    from gradcheck.auditing import audit
    from gradcheck.demo.outcome import held_against, outcome_text
    from gradcheck.demo.scenario import CAUTION, PLANTED, branch_problem
    from gradcheck.report.paragraphs import paragraph

    report = audit(branch_problem(), seed=given["seed"], progress=progress)
    outcome = held_against(report, PLANTED)
    told = outcome_text(outcome)
    text = "\n\n".join([str(report), told, "\n".join(paragraph(CAUTION))])
    status = Exit.READY if outcome.exact else Exit.REFUTED
    return Answer(record=report, text=text, brief=told.splitlines()[-1], status=status)


def _is_described(model: Any) -> bool:
    from gradcheck.problem.problem import SPEC_ATTRIBUTE, Problem

    return isinstance(model, Problem) or hasattr(model, SPEC_ATTRIBUTE)


def _keywords(given: Options, model: Any, *wanted: str) -> Options:
    """Keyword arguments of a verb, of those that were given.

    Raises
    ------
    UsageError
        If the model is a plain function and nothing says where.
    """
    if not (callable(model) or _is_described(model)):
        raise UsageError(
            f"{given['model']} is {model!r:.60} ({type(model).__name__}); a function or a gradcheck.Problem is needed"
        )
    if given["at"] is None and not given.get("points") and not _is_described(model):
        raise UsageError(
            f"{given['model']} is a plain function, so say where with --at, such as --at 0.3,1.2 (or describe it "
            "once with @gradcheck.model(at=...) or as a gradcheck.Problem)"
        )
    offered = {
        "at": None if given["at"] is None else point_from_text(given["at"]),
        "bounds": bounds_from_text(given["lower"], given["upper"]),
        **{kind: _claim(given.get(kind), given["model"]) for kind in ("gradient", "jacobian")},
    }
    return {name: offered[name] for name in wanted if offered[name] is not None}


def _claim(address: str | None, model: str) -> Any:
    """A claimed derivative: an address, a name beside the model, or the name of an AD source."""
    if address is None or address in _AUTOMATIC:
        return address
    return load(address if ":" in address else f"{split_address(model)[0]}:{address}")


def _carry_out(work: Callable[[Options, Progress], Answer], given: Options) -> int:
    """Do the work with the model's prints kept apart, tell the answer, and turn every failure into its status."""
    target = given["json"]
    try:
        refuse_unwritable(target)
        _refuse_undrawable(given.get("svg"), target)
    except UsageError as error:
        return _fail(Exit.USAGE, str(error), None)
    try:
        answer = _watched(work, given)
        _tell(answer, given)
    except UsageError as error:
        return _fail(Exit.USAGE, str(error), target)
    except ModelFailure as error:
        return _fail(Exit.NOT_EVALUABLE, str(error), target)
    except KeyboardInterrupt as interrupt:
        return _tell_interrupted(interrupt, given)
    except Exception as error:
        hint = "set GRADCHECK_TRACEBACK=1 to see where, and please report it"
        return _fail(Exit.OWN_ERROR, f"an error of gradcheck itself: {type(error).__name__}: {error} ({hint})", target)
    return int(answer.status)


def _refuse_undrawable(picture: str | None, document: str | None) -> None:
    """Complain about a picture that cannot be made before the model runs, not after.

    Raises
    ------
    UsageError
        If it cannot be written or drawn, or if it and the JSON document would both go to standard output.
    """
    if picture is None:
        return
    refuse_unwritable(picture)
    if picture == document == "-":
        raise UsageError("--svg - and --json - would mix on standard output; give one of them a file")
    if find_spec("matplotlib") is None:
        raise MissingExtra("--svg", "matplotlib", "report")


def _watched(work: Callable[[Options, Progress], Answer], given: Options) -> Answer:
    from gradcheck.report.progress import progress_line

    with (
        importable(given["model"]),
        prints_kept_apart(),
        progress_line(wanted=not given["quiet"]) as progress,
    ):
        return work(given, progress)


def _tell(answer: Answer, given: Options) -> None:
    target = given["json"]
    if target is not None:
        from gradcheck.report.json_format import document

        more = {"status": int(answer.status), "error": answer.error} if answer.error else {}
        write_document(document(answer.record, **more), target)
    picture = given.get("svg")
    if picture is not None:
        write_document(answer.record.to_svg(), picture)
    if "-" not in (target, picture):
        print_report(answer.brief if given["quiet"] and answer.status == Exit.READY else answer.text)
    if answer.error:
        complain(answer.error)


def _tell_interrupted(interrupt: KeyboardInterrupt, given: Options) -> int:
    """Print what was found; a verb that is interrupted leaves its record or records on it, as ``found``."""
    found = getattr(interrupt, "found", None)
    if not found:
        return _fail(Exit.INTERRUPTED, "interrupted; nothing was found yet", given["json"])
    _tell(Answer.of(found, Exit.INTERRUPTED, "interrupted"), given)
    return Exit.INTERRUPTED


def _fail(status: Exit, message: str, target: str | None) -> int:
    """One line on the error output, and the document if one was asked for."""
    if os.environ.get("GRADCHECK_TRACEBACK") == "1":
        traceback.print_exc()
    complain(message)
    if target is not None:
        from gradcheck.report.json_format import error_document

        try:
            write_document(error_document(status, message), target)
        except UsageError as error:
            complain(str(error))
    return int(status)


def _json_target(arguments: Sequence[str]) -> str | None:
    """Where the JSON document goes, read from a command line that may be wrong elsewhere."""
    target = None
    for word, following in zip(arguments, [*arguments[1:], None], strict=True):
        if word == "--json":
            target = following
        elif word.startswith("--json="):
            target = word.partition("=")[2]
    return target
