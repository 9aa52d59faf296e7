"""What `audit` found, as plain text: the verdict, what to do now, and then the evidence in order of weight."""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from gradcheck import wording
from gradcheck.records.advice import Advice
from gradcheck.records.finding import Finding, FindingCode, Severity
from gradcheck.records.report import AuditReport, CheckReport, Scaling, Steps, WitnessRecord
from gradcheck.records.verdict import Verdict
from gradcheck.report.check_text import check_details, headline
from gradcheck.report.finding_text import Surroundings, finding_lines
from gradcheck.report.paragraphs import WIDTH, bullets, paragraph, table

#: What is told of a long list: actions, claims in full, entries of one claim, findings of one severity, rows.
_ACTIONS, _STORIES, _ENTRIES, _FINDINGS, _ROWS = 6, 6, 5, 12, 20

_WORST_FIRST = (Verdict.REFUTED, Verdict.UNDECIDED, Verdict.CONFIRMED)


def audit_text(report: AuditReport) -> str:
    """The report as text of at most 80 columns; the first line says whether the model is ready.

    Parameters
    ----------
    report : AuditReport
        Its own ``text`` is not looked at.

    Returns
    -------
    str
        Without a newline at the end. The snippet to paste stands as it is, however long its lines.

    Examples
    --------
    >>> import gradcheck
    >>> report = gradcheck.audit(lambda x: x[0] ** 2, at=[3.0], gradient=lambda x: [2 * x[0]])
    >>> audit_text(report).splitlines()[0][:5]
    'READY'
    """
    around = Surroundings(
        units={str(variable.get("name", "")): str(variable.get("unit") or "") for variable in report.variables},
        start=[variable.get("value", float("nan")) for variable in report.variables],
    )
    sections = [
        _verdict(report),
        _section("What to do now", _actions(report)),
        _section("Claims", _claims(report.claims)),
        *_findings(report.findings, around),
        _section("Silenced on request", bullets([_accepted(item) for item in report.accepted])),
        _section("Witnesses", _witnesses(report.witnesses)),
        *[_section(f"Best steps for {wording.shortened(steps.function, 40)}", _steps(steps)) for steps in report.steps],
        _section("Scaling", _scaling(report.scaling)),
        *_advice(report),
        _section("Not looked at", bullets(report.not_looked_at)),
        _section("Notes", bullets(report.notices)),
        _section("Environment", _environment(report.environment)),
    ]
    return "\n\n".join("\n".join(section) for section in sections if section)


def verdict_line(report: AuditReport) -> str:
    """One line: ready or not, and why."""
    name = wording.shortened(report.name, 30)
    if not report.evaluable:
        return f"NOT EVALUATED: {name} gives no value at its start point"
    against = _counts(report)
    if not report.ready and not against:
        return f"NO VERDICT: the audit of {name} was interrupted"
    if not report.ready:
        return wording.shortened(f"NOT READY: {name} has {wording.listed(against) if against else 'faults'}", WIDTH)
    doubts = [text for text in against if "undecided" in text] + ([] if report.complete else ["parts not looked at"])
    if doubts:
        return f"READY, WITH DOUBTS: {name} has {wording.listed(doubts)}"
    return f"READY: nothing that was looked at in {name} stands in an optimizer's way"


def _counts(report: AuditReport) -> list[str]:
    """What stands against the model, in words, worst first."""
    verdicts = [claim.verdict for claim in report.claims]
    blockers = [f for f in report.findings if f.severity == Severity.BLOCKER and f.code != FindingCode.CLAIM_REFUTED]
    counted = [
        (verdicts.count(Verdict.REFUTED), "refuted claim"),
        (len(blockers), "blocker"),
        (verdicts.count(Verdict.UNDECIDED), "undecided claim"),
    ]
    return [wording.count(amount, noun) for amount, noun in counted if amount]


def _verdict(report: AuditReport) -> list[str]:
    looked = [
        wording.cost(report.evaluations, report.seconds),
        wording.count(len(report.claims), "claim"),
        wording.count(len(report.findings), "finding"),
    ]
    lines = [verdict_line(report), *paragraph(", ".join(looked), 2)]
    if not report.complete and report.evaluable:
        lines += paragraph("Incomplete: budget or time ended first; what is missing stands at the end.", 2)
    return lines


def _section(title: str, body: Sequence[str]) -> list[str]:
    return [title, *body] if body else []


def _actions(report: AuditReport) -> list[str]:
    if report.evaluable:
        texts = _mends(report) or [*_doubts(report), *_cautions(report), *_start(report.advice)]
    else:
        texts = [finding.text for finding in report.findings]
    told = list(dict.fromkeys(texts))
    lines = [
        line for number, text in enumerate(told[:_ACTIONS], start=1) for line in paragraph(text, 2, first=f"{number}. ")
    ]
    if len(told) > _ACTIONS:
        lines += paragraph(f"and {len(told) - _ACTIONS:,} more, below", 2)
    return lines


def _mends(report: AuditReport) -> list[str]:
    """What must be done before anything else: wrong claims, then blockers."""
    wrong = [claim for claim in report.claims if claim.verdict == Verdict.REFUTED]
    mends = [f"Mend the {claim.kind} of {claim.function}: {_likely(claim)}" for claim in wrong]
    blockers = [finding for finding in report.findings if finding.severity == Severity.BLOCKER]
    return mends + [
        f"{wording.capitalised(finding.remedy)} [{_named(finding)}]"
        for finding in blockers
        if finding.code != FindingCode.CLAIM_REFUTED or not wrong
    ]


def _named(finding: Finding) -> str:
    return f"{finding.code} in {wording.shortened(finding.function, 30)}" if finding.function else str(finding.code)


def _likely(claim: CheckReport) -> str:
    if claim.diagnoses:
        return claim.diagnoses[0].text
    return "it is wrong as listed under Claims."


def _doubts(report: AuditReport) -> list[str]:
    open_claims = [claim for claim in report.claims if claim.verdict == Verdict.UNDECIDED]
    doubts = [f"Do not rely on the {claim.kind} of {claim.function} yet: it is undecided." for claim in open_claims]
    if not report.complete:
        doubts.append("Let the audit finish: raise the budget or the time limit.")
    return doubts


def _cautions(report: AuditReport) -> list[str]:
    """What to mind before the run: where the model fails, and the worst other hazards."""
    domain = (FindingCode.CRASH, FindingCode.NON_FINITE, FindingCode.TIMEOUT)
    hazards = [f for f in report.findings if f.severity == Severity.HAZARD and f.code != FindingCode.CLAIM_UNDECIDED]
    hazards.sort(key=lambda finding: finding.code not in domain)
    return [f"Mind before the run: {finding.text} [{finding.code}]" for finding in hazards[:2]]


def _start(advice: Advice) -> list[str]:
    solver = f": {advice.solvers[0]}" if advice.solvers else ""
    derivatives = f", with derivatives from {advice.derivatives[0]}" if advice.derivatives else ""
    return [f"Start {wording.FAMILY_WORDS[advice.family]}{solver}{derivatives}."]


def _claims(claims: Sequence[CheckReport]) -> list[str]:
    """Worst first; the story of a few, a line for some, a count of the rest."""
    ordered = sorted(claims, key=lambda claim: _WORST_FIRST.index(claim.verdict))
    lines: list[str] = []
    for position, claim in enumerate(ordered[:_ROWS]):
        lines += [f"  {line}" for line in headline(claim, WIDTH - 2)]
        if claim.verdict != Verdict.CONFIRMED and position < _STORIES:
            # The findings of a claim stand among the audit's own.
            lines += [*check_details(claim, indent=4, rows=_ENTRIES, findings=False), ""]
    rest = ordered[_ROWS:]
    if rest:
        lines += paragraph(f"and {len(rest):,} more: {wording.tally(str(claim.verdict) for claim in rest)}", 2)
    return lines[:-1] if lines and not lines[-1] else lines


def _findings(findings: Sequence[Finding], around: Surroundings) -> list[list[str]]:
    sections = []
    for severity in Severity:
        group = [finding for finding in findings if finding.severity == severity]
        if not group:
            continue
        body: list[str] = []
        told: list[str] = []
        for finding in group[:_FINDINGS]:
            body += ["", *finding_lines(finding, indent=2, around=around, told=told)]
            told.append(finding.remedy)
        if len(group) > _FINDINGS:
            body += ["", f"  and {wording.count(len(group) - _FINDINGS, f'more {severity}')}, in the JSON report"]
        sections.append(
            _section(f"{wording.count(len(group), str(severity))}: {wording.SEVERITY_WORDS[severity]}", body[1:])
        )
    return sections


def _accepted(item: Mapping[str, str]) -> str:
    what = ", ".join(f"{value}" for key, value in item.items() if key != "reason" and value)
    return f"{what}: {item.get('reason', 'no reason given')}"


def _witnesses(witnesses: Sequence[WitnessRecord]) -> list[str]:
    rows = [
        (
            witness.function,
            witness.source,
            "yes" if witness.works else "no",
            wording.number(witness.bound, 2) if witness.works else "-",
            f"{witness.evaluations:,}",
            wording.seconds(witness.seconds),
        )
        for witness in witnesses
    ]
    if not rows:
        return []
    header = ("function", "source", "works", "bound/value", "evaluations", "time")
    lines = table(header, rows[:_ROWS], right="---rrr", names=(0, 1))
    return [*lines, *_more(len(rows)), *bullets(_restrictions(witnesses), 4)]


def _restrictions(witnesses: Sequence[WitnessRecord]) -> list[str]:
    """Why witnesses do not work, or work in part; what several functions share is told once."""
    groups: dict[tuple[str, str], list[str]] = {}
    for witness in witnesses:
        if witness.reason:
            groups.setdefault((witness.source, witness.reason), []).append(witness.function)
    told = [f"{source} on {wording.listed(functions)}: {reason}" for (source, reason), functions in groups.items()]
    return told[:_ROWS]


def _more(amount: int) -> list[str]:
    return [f"  and {amount - _ROWS:,} more, in the JSON report"] if amount > _ROWS else []


def _steps(steps: Steps) -> list[str]:
    rows = [
        (
            name,
            *(
                wording.number(float(column[i]), 2)
                for column in (
                    steps.forward * steps.forward_side,
                    steps.forward_error,
                    steps.central,
                    steps.central_error,
                )
            ),
        )
        for i, name in enumerate(steps.names[:_ROWS])
    ]
    header = ("variable", "forward", "error left", "central", "error left")
    noise = wording.noise([steps.noise], [steps.noise_kind])
    return [
        *table(header, rows, right="-rrrr"),
        *_more(len(steps.names)),
        *paragraph(noise, 2),
        *[line for text in _restricted(steps) for line in paragraph(text, 2)],
    ]


def _restricted(steps: Steps) -> list[str]:
    """Where a bound or the model leaves no plain step."""
    named = np.array(steps.names, dtype=object)
    up, down = named[steps.central_side > 0], named[steps.central_side < 0]
    none = named[np.isnan(steps.forward) & np.isnan(steps.central)]
    told = [
        f"at a bound, the central step is for x, x {sign} h and x {sign} 2h: {wording.listed(list(names))}"
        for sign, names in (("+", up), ("-", down))
        if names.size
    ]
    return told + ([f"no step gives a derivative: {wording.listed(list(none))}"] if none.size else [])


def _scaling(scaling: Scaling | None) -> list[str]:
    if scaling is None:
        return []
    spread = wording.number(scaling.spread, 2)
    lines = paragraph(f"The variables' effects differ by a factor of {spread}. Divide each variable by:", 2)
    rows = [(name, wording.number(float(scaling.variables[i]))) for i, name in enumerate(scaling.names[:_ROWS])]
    return [*lines, *table(("variable", "divisor"), rows, right="-r"), *_more(len(scaling.names))]


def _advice(report: AuditReport) -> list[list[str]]:
    advice = report.advice
    if not report.evaluable:
        return []
    lines = paragraph(f"Use {wording.FAMILY_WORDS[advice.family]} ({advice.family}).", 2)
    for title, texts in (("solvers", advice.solvers), ("derivatives", advice.derivatives)):
        if texts:
            lines += [f"  {title}, best first:", *bullets(texts, 4)]
    if advice.tolerances:
        told = ", ".join(f"{name} {wording.number(value, 2)}" for name, value in advice.tolerances.items())
        lines += paragraph(told, 2, first="tolerances: ")
    if advice.reasons:
        lines += ["  because:", *bullets(advice.reasons, 4)]
    return [
        _section("Advice", lines),
        # Neither indented nor wrapped: it is there to be pasted.
        _section("To paste", advice.snippet.strip("\n").splitlines()),
        paragraph(advice.caution, first="Caution: ") if advice.caution else [],
    ]


def _environment(environment: Mapping[str, Any]) -> list[str]:
    return [line for name, value in environment.items() for line in paragraph(_told(value), 2, first=f"{name}: ")]


def _told(value: Any) -> str:
    if isinstance(value, Mapping):
        return ", ".join(f"{key} {_told(part)}" for key, part in value.items())
    if isinstance(value, list | tuple):
        return ", ".join(_told(part) for part in value)
    return wording.number(value) if isinstance(value, float) else str(value)
