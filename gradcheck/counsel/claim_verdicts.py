"""Findings from the verdicts on claims."""

from gradcheck.claims.desk import SUSPECT
from gradcheck.problem.subject import Subject
from gradcheck.records.finding import Finding, FindingCode, Location, Severity
from gradcheck.records.report import CheckReport
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.wording import count, listed

#: Kinds of claims whose columns are variables.
BY_VARIABLE = ("gradient", "jacobian", "value_and_gradient")


def verdict_findings(subject: Subject, report: CheckReport) -> list[Finding]:
    """A refuted claim is a blocker; an undecided one a hazard, or a remark where only single entries stay open."""
    findings = []
    for verdict, code in (
        (Verdict.REFUTED, FindingCode.CLAIM_REFUTED),
        (Verdict.UNDECIDED, FindingCode.CLAIM_UNDECIDED),
    ):
        places = [k for k, v in enumerate(report.entries.verdict) if v == verdict]
        if places:
            findings.append(_finding(subject, report, code, places))
    if not findings and report.verdict != Verdict.CONFIRMED:
        findings.append(_along_directions(report))
    return findings


def _along_directions(report: CheckReport) -> Finding:
    """A claim that is refuted or undecided along random directions, without an entry that could be named."""
    refuted = report.verdict == Verdict.REFUTED
    what = f"the {report.kind} of {report.function}"
    directions = () if report.directions is None else report.directions.verdict
    seen = sum(verdict == report.verdict for verdict in directions)
    reasons = [] if report.directions is None else list(dict.fromkeys(filter(None, report.directions.reason)))
    if refuted:
        shows = "directions='all' shows which entries."
        likely = report.diagnoses[0].text if report.diagnoses else shows
        text = f"{what} is wrong: {seen} of {count(len(directions), 'random direction')} say so."
        remedy, severity = f"Mend the derivative before any run: {likely}", Severity.BLOCKER
    else:
        text = (
            f"{what} could not be judged along {seen} of {count(len(directions), 'random direction')}: "
            f"{'; '.join(reasons[:2])}."
        )
        remedy, severity = _mend(reasons)
    return Finding(
        code=FindingCode.CLAIM_REFUTED if refuted else FindingCode.CLAIM_UNDECIDED,
        severity=severity,
        function=report.function,
        variable=None,
        where=Location(point=report.point),
        evidence={"directions": seen, "of": len(directions)},
        text=text,
        remedy=remedy,
    )


def _finding(subject: Subject, report: CheckReport, code: FindingCode, places: list[int]) -> Finding:
    names = [report.entries.name[k] for k in places]
    total = len(report.entries)
    what = f"the {report.kind} of {report.function}"
    share = f"{count(len(places), 'entry', 'entries')} of {total}"
    variable = _only_variable(subject, report, places)
    if code == FindingCode.CLAIM_REFUTED:
        likely = report.diagnoses[0].text if report.diagnoses else ""
        text = f"{what} is wrong in {share}: {listed(names)}."
        remedy = f"Mend the derivative before any run: {likely}" if likely else "Mend the derivative before any run."
        severity = Severity.BLOCKER
    else:
        reasons = list(dict.fromkeys(r for k in places if (r := report.entries.reason[k])))
        text = f"{what} could not be judged in {share} ({listed(names)}): {'; '.join(reasons[:2])}."
        remedy, severity = _mend(reasons)
    return Finding(
        code=code,
        severity=severity,
        function=report.function,
        variable=variable,
        where=Location(point=report.point),
        evidence={"entries": len(places), "of": total},
        text=text,
        remedy=remedy,
    )


def _mend(reasons: list[str]) -> tuple[str, Severity]:
    """What to do about entries left open for these reasons, and how bad it is."""
    if SUSPECT in reasons:
        return (
            "Raise the budget or the time limit: a claim that is probably wrong waits for its second look.",
            Severity.BLOCKER,
        )
    if any(SPENT in reason for reason in reasons):
        return "Raise the budget or the time limit.", Severity.HAZARD
    remedy = "Give the model more digits there (a tighter inner tolerance, more printed digits) and check again."
    return remedy, Severity.HAZARD


def _only_variable(subject: Subject, report: CheckReport, places: list[int]) -> str | None:
    if report.kind not in BY_VARIABLE:
        return None
    index = report.entries.index
    columns = {int(index[k] if index.ndim == 1 else index[k, 1]) for k in places}
    column = columns.pop() if len(columns) == 1 else -1
    return subject.layout.name(column) if 0 <= column < subject.layout.size else None
