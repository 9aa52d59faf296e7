"""What the examination of a claim shows about the model: findings with their sentences."""

import numpy as np

from gradcheck.evaluation.ledger import Ledger
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.wording import number

#: Kinks at the point that are told one by one; more are counted.
KINKS_SHOWN = 10


def kinks_at_point(subject: Subject, function: str, left: Array, right: Array, columns: IntArray) -> list[Finding]:
    """Entries whose one-sided slopes, each (m, d) for d columns, part at the point itself."""
    findings = []
    several = left.shape[0] > 1
    for output, place in zip(*(axis[:KINKS_SHOWN].tolist() for axis in np.isfinite(left).nonzero()), strict=True):
        below, above = float(left[output, place]), float(right[output, place])
        variable = subject.layout.name(int(columns[place]))
        part = f"output {output} of {function}" if several else function
        evidence: dict[str, float | int | str] = {"left_slope": below, "right_slope": above}
        if several:
            evidence["output"] = int(output)
        findings.append(
            Finding(
                code=FindingCode.KINK,
                severity=Severity.HAZARD,
                function=function,
                variable=variable,
                where=Location(point=subject.start),
                evidence=evidence,
                text=(
                    f"{part} has a kink in {variable} at the point itself: the slope is {number(below)} below it and "
                    f"{number(above)} above."
                ),
                remedy="Move the point off the kink, or smooth the model there; no derivative exists at a kink.",
            )
        )
    return findings


def levels_at_point(
    subject: Subject, function: str, jumps: BoolArray, stairs: BoolArray, columns: IntArray
) -> list[Finding]:
    """Entries, each mask (m, d) for d columns, whose values jump at the point itself, or are flat on one of several
    levels.
    """
    several = jumps.shape[0] > 1
    findings = []
    for output, place in zip(*(axis[:KINKS_SHOWN].tolist() for axis in (jumps | stairs).nonzero()), strict=True):
        variable = subject.layout.name(int(columns[place]))
        part = f"output {output} of {function}" if several else function
        jump = bool(jumps[output, place])
        what = "jumps at the point itself" if jump else "is flat at the point and on other levels farther away"
        findings.append(
            Finding(
                code=FindingCode.JUMP if jump else FindingCode.STAIRCASE,
                severity=Severity.HAZARD,
                function=function,
                variable=variable,
                where=Location(point=subject.start),
                evidence={"output": int(output)} if several else {},
                text=f"{part} {what} along {variable}.",
                remedy=(
                    "Move the point off the jump, or join the values there; no derivative exists at a jump."
                    if jump
                    else "Look for rounding, counts or integer casts inside the model; its derivative of zero leads "
                    "an optimizer nowhere."
                ),
            )
        )
    return findings


def mutation(subject: Subject, ledger: Ledger) -> list[Finding]:
    """Callables that wrote into their input."""
    return [
        Finding(
            code=FindingCode.MUTATES_INPUT,
            severity=Severity.HAZARD,
            function=name,
            variable=None,
            where=Location(point=subject.start),
            text=f"{name} writes into the x it is given; an optimizer that keeps x would go on from another point.",
            remedy="Copy x at the top of the function: x = numpy.array(x).",
        )
        for name in sorted(ledger.mutated)
    ]


def failing_claim(subject: Subject, function: str, kind: str, last_words: str) -> Finding:
    """The claimed derivative itself raised."""
    return Finding(
        code=FindingCode.CRASH,
        severity=Severity.BLOCKER,
        function=function,
        variable=None,
        where=Location(point=subject.start),
        text=f"the {kind} of {function} raised at the point: {last_words}",
        remedy=f"Call the {kind} by hand at this point to see the whole traceback.",
    )
