"""Findings about the model as a whole: repeatability, dead and integer variables, failures, arithmetic."""

from collections.abc import Mapping

import numpy as np

from gradcheck.errors import ModelFailure
from gradcheck.evaluation.ledger import Ledger
from gradcheck.evaluation.protocol import Status
from gradcheck.health.repeatability import Repeatability
from gradcheck.health.sensitivity import FarMoves
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import IntArray
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.witnesses.testimony import Testimony
from gradcheck.wording import count, listed, number

_FAILURES = {
    Status.NONFINITE: (FindingCode.NON_FINITE, "gave a value that is not finite"),
    Status.CRASH: (FindingCode.CRASH, "raised"),
    Status.TIMEOUT: (FindingCode.TIMEOUT, "did not come back in time"),
}


def start_failure(subject: Subject, error: ModelFailure) -> Finding:
    """The model cannot be evaluated at its start point."""
    code = FindingCode.NON_FINITE if error.reason == "non-finite" else FindingCode.CRASH
    return Finding(
        code=code,
        severity=Severity.BLOCKER,
        function=subject.name,
        variable=None,
        where=Location(point=subject.start),
        evidence={"last_words": error.last_words},
        text=str(error),
        remedy="Nothing else can be looked at before the model works at its start point.",
    )


def unrepeatable(subject: Subject, function: str, seen: Repeatability) -> list[Finding]:
    """Values at one point that differ from call to call."""
    # NaN where the budget refused the repetition: nothing was learned, so nothing is said.
    at_once, later = (float(np.nan_to_num(part).max()) for part in (seen.at_once, seen.after_others))
    if at_once == 0 and later == 0:
        return []
    hidden = at_once == 0
    return [
        Finding(
            code=FindingCode.UNREPEATABLE,
            severity=Severity.BLOCKER,
            function=function,
            variable=None,
            where=Location(point=subject.start),
            evidence={"at_once": at_once, "after_others": later},
            text=(
                f"{function} gives another value at the same x "
                + ("after other points were evaluated" if hidden else "when it is called again")
                + f": a difference of {number(max(at_once, later), digits=2)}."
            ),
            remedy=(
                "Something survives between calls (a warm start, a cache, a global); reset it at the top of the model."
                if hidden
                else "Seed the random numbers or average them away; every other figure here waits for this."
            ),
        )
    ]


def dead_variables(subject: Subject, moves: Mapping[str, FarMoves], coordinates: IntArray) -> list[Finding]:
    """Variables that change no function: anywhere that was looked at, or at the start point only."""
    here = np.all([seen.here.all(axis=1) for seen in moves.values()], axis=0)
    elsewhere = np.all([seen.elsewhere.all(axis=1) for seen in moves.values()], axis=0)
    return [
        _dead(subject, subject.layout.name(int(coordinates[place])), bool(elsewhere[place]))
        for place in np.flatnonzero(here)
    ]


def _dead(subject: Subject, name: str, everywhere: bool) -> Finding:
    if everywhere:
        text = f"{name} changes nothing: no output moves when it goes across its whole range."
        remedy = "Take it out of the problem, or find out why the model ignores it (an unused or overwritten input)."
    else:
        text = f"{name} changes nothing at the start point, though it does elsewhere: its derivative is zero there."
        remedy = "Start from a point where it matters; a gradient method cannot tell which way to move it there."
    return Finding(
        code=FindingCode.DEAD_VARIABLE,
        severity=Severity.HAZARD if everywhere else Severity.REMARK,
        function="",
        variable=name,
        where=Location(point=subject.start),
        text=text,
        remedy=remedy,
    )


def integer_variables(subject: Subject) -> list[Finding]:
    """Whole-number variables: no derivative means anything for them."""
    return [
        Finding(
            code=FindingCode.INTEGER_VARIABLE,
            severity=Severity.HAZARD,
            function="",
            variable=subject.layout.name(int(i)),
            where=Location(point=subject.start),
            text=f"{subject.layout.name(int(i))} takes whole numbers only; no derivative with respect to it exists.",
            remedy="Fix it and solve once for each value, or branch and bound over it with a gradient method inside.",
        )
        for i in np.flatnonzero(subject.domain.integer)
    ]


def failures(subject: Subject, ledger: Ledger, told: set[tuple[str, FindingCode]]) -> list[Finding]:
    """Evaluations that failed inside the bounds and that no line has told of (`told`) yet."""
    findings = []
    for function in subject.targets:
        for status, (code, what) in _FAILURES.items():
            failed = [f for f in ledger.failures if f.function == function and f.status == status]
            if not failed or (function, code) in told:
                continue
            findings.append(
                Finding(
                    code=code,
                    severity=Severity.HAZARD,
                    function=function,
                    variable=None,
                    where=Location(point=failed[0].point),
                    evidence={"times": len(failed), "last_words": failed[0].message},
                    text=f"{function} {what} at {count(len(failed), 'point')} inside the bounds: {failed[0].message}",
                    remedy="Tighten the bounds, or make the model give finite values there.",
                )
            )
    return findings


def integer_arithmetic(subject: Subject, ledger: Ledger) -> list[Finding]:
    """Functions whose values come as whole numbers."""
    return [
        Finding(
            code=FindingCode.INTEGER_ARITHMETIC,
            severity=Severity.HAZARD,
            function=function,
            variable=None,
            where=Location(point=subject.start),
            text=f"{function} returns whole numbers ({kind}); fractions are cut off somewhere.",
            remedy="Look for integer arrays in the model (numpy.zeros_like of an integer array) and make them float.",
        )
        for function, kind in ledger.output_kinds.items()
        if kind.startswith(("int", "uint", "bool"))
    ]


def complex_unsafe(subject: Subject, function: str, testimony: Testimony) -> list[Finding]:
    """The complex step is silently wrong, or impossible, on this function."""
    lost = sorted({row for (row, _), _ in testimony.reasons.items()})
    if testimony.works and not lost:
        return []
    names = [subject.layout.name(row) for row in lost if row < subject.layout.size]
    why = testimony.reason or next(iter(testimony.reasons.values()), "")
    return [
        Finding(
            code=FindingCode.COMPLEX_UNSAFE,
            severity=Severity.REMARK,
            function=function,
            variable=names[0] if len(names) == 1 else None,
            where=Location(point=subject.start),
            text=(
                f"the complex step cannot be trusted on {function}"
                + (f" for {listed(names)}" if names and testimony.works else "")
                + f": {why}."
            ),
            remedy="Do not use it as a derivative source here; another witness was used.",
        )
    ]


def witness_conflict(
    subject: Subject, function: str, testimony: Testimony, differences: Testimony, columns: IntArray
) -> list[Finding]:
    """A derivative source that parts from the differences by more than the bounds of both allow.

    Three bounds of the differences are granted: a miss of theirs is believed never to be larger.
    """
    gap = np.abs(testimony.value - differences.value)
    allowed = testimony.bound + 3 * differences.bound
    with np.errstate(invalid="ignore"):
        parted = np.isfinite(allowed) & (gap > allowed) & np.isnan(differences.left)
    if not parted.any():
        return []
    rows, outputs = np.nonzero(parted)
    worst = int(np.argmax(gap[parted] / np.maximum(np.abs(differences.value[parted]), np.finfo(float).tiny)))
    row, output = int(rows[worst]), int(outputs[worst])
    names = [subject.layout.name(int(columns[r])) for r in np.unique(rows)]
    says, seen = float(testimony.value[row, output]), float(differences.value[row, output])
    return [
        Finding(
            code=FindingCode.WITNESS_CONFLICT,
            severity=Severity.BLOCKER if testimony.source in ("jax", "autograd") else Severity.HAZARD,
            function=function,
            variable=names[0] if len(names) == 1 else None,
            where=Location(point=subject.start),
            evidence={"source": testimony.source, "says": says, "differences": seen, "entries": len(rows)},
            text=(
                f"{testimony.source} and differences of the values contradict each other on {function} for "
                f"{listed(names)}: {number(says, digits=6)} against {number(seen, digits=6)} for "
                f"{subject.layout.name(int(columns[row]))}, and neither bound covers that."
            ),
            remedy=(
                f"Do not hand {testimony.source} derivatives of this function to a solver before this is settled: look "
                "for a custom rule, a stopped gradient or a cast; differences only know values."
            ),
        )
    ]
