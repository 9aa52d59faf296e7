"""What the examination of a claim shows about the model: findings with their sentences."""

import numpy as np

from gradcheck.claims.examination import Examined
from gradcheck.evaluation.ledger import Ledger
from gradcheck.problem.subject import Subject
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.wording import number

#: Kinks at the point that are told one by one; more are counted.
KINKS_SHOWN = 10


def kinks_at_point(subject: Subject, function: str, examined: Examined) -> list[Finding]:
    """Entries whose one-sided slopes part at the point itself."""
    findings = []
    for output, column in np.argwhere(np.isfinite(examined.left))[:KINKS_SHOWN]:
        left, right = float(examined.left[output, column]), float(examined.right[output, column])
        variable = subject.layout.name(int(column))
        part = f"output {output} of {function}" if examined.claim.shape[0] > 1 else function
        findings.append(
            Finding(
                code=FindingCode.KINK,
                severity=Severity.HAZARD,
                function=function,
                variable=variable,
                where=Location(point=subject.start),
                evidence={"left_slope": left, "right_slope": right, "output": int(output)},
                text=(
                    f"{part} has a kink in {variable} at the point itself: the slope is {number(left)} below it and "
                    f"{number(right)} above."
                ),
                remedy="Move the point off the kink, or smooth the model there; no derivative exists at a kink.",
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
