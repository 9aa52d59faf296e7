"""Several claims on one function in one report."""

from collections.abc import Sequence
from dataclasses import replace

from gradcheck.checks.identities import Contradiction
from gradcheck.checks.parts import with_contradictions
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import number


def combined(reports: Sequence[CheckReport]) -> CheckReport:
    """One report on several claims: the decisive one, with all of them as its parts.

    The first refuted one is on top, else the first undecided one, else the first. Evaluations and seconds are those of
    all.
    """
    if len(reports) == 1:
        return reports[0]
    top = next((r for v in (Verdict.REFUTED, Verdict.UNDECIDED) for r in reports if r.verdict == v), reports[0])
    return replace(
        top,
        verdict=Verdict.overall([report.verdict for report in reports]),
        parts=tuple(reports),
        evaluations=sum(report.evaluations for report in reports),
        seconds=sum(report.seconds for report in reports),
        text="",
    )


def with_broken_pair(report: CheckReport, found: Contradiction) -> CheckReport:
    """A report on a claimed vjp whose products do not fit to those of a claimed jvp."""
    entries = with_contradictions(report.entries, [found])
    diagnoses = report.diagnoses
    if report.verdict != Verdict.REFUTED:
        left, right = number(found.broken.left, 6), number(found.broken.right, 6)
        text = (
            f"jvp and vjp are no adjoint pair: {found.name} fails, {left} against {right}; at least one of the two is "
            "wrong, whatever the model."
        )
        diagnoses = (*diagnoses, Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=(found.name,)))
    return replace(report, verdict=Verdict.REFUTED, entries=entries, diagnoses=diagnoses, text="")
