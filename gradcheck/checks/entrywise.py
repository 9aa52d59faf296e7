"""The check of a claim entry by entry: all entries, each with its verdict."""

import time

import numpy as np

from gradcheck.checks.asked_again import asking, second_answer
from gradcheck.checks.claimed import claimed_matrix
from gradcheck.claims.desk import Examined
from gradcheck.claims.entries import diagnoses_of, entries_of, entry_name, floor_of
from gradcheck.claims.examination import examine
from gradcheck.claims.policy import DEFAULT_REL_TOL, REL_TOL, Rules
from gradcheck.claims.repeated_answers import Repeated, compared
from gradcheck.counsel.claim_findings import kinks_at_point, levels_at_point, mutation
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.finding import Finding
from gradcheck.records.report import CheckReport, Diagnosis, Entries
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.report.check_text import check_text
from gradcheck.witnesses.steps import room_along
from gradcheck.wording import listed


def checked_entries(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int
) -> CheckReport:
    """The report on one claim of one function; `before` evaluations were spent on others."""
    began = time.perf_counter()
    subject = session.subject
    claim, failure = claimed_matrix(session, function, kind, centre)
    kinds = session.ledger.output_kinds.get(function, "float64"), session.ledger.claim_kinds.get((function, kind), "")
    precision = next((word for word in kinds if word in REL_TOL), "float64")
    unit = float(np.finfo(precision).eps / 2) if precision in REL_TOL else float(np.finfo(float).eps / 2)
    rel_tol = REL_TOL.get(precision, DEFAULT_REL_TOL) if rules.rel_tol is None else rules.rel_tol
    columns = _judgeable(subject)
    inquiry = examine(
        subject.start,
        columns,
        claim[:, columns],
        room_along(subject.start, columns, subject.domain),
        centre,
        subject.domain.scale[columns],
        rel_tol=rel_tol,
        abs_tol=rules.abs_tol,
        unit_roundoff=unit,
        witnesses=rules.witnesses,
    )
    examined = conduct_one(addressed(inquiry, function=function), session.gate)
    repeated = _asked_again(session, function, kind, examined, columns, rel_tol, rules.abs_tol)
    examined = repeated.examined
    findings: list[Finding] = [failure] if failure else []
    findings += kinks_at_point(subject, function, examined.left, examined.right, columns)
    findings += levels_at_point(subject, function, examined.jumps, examined.stairs, columns)
    findings += mutation(subject, session.ledger)
    entries = entries_of(subject, function, kind, examined, columns)
    return CheckReport(
        verdict=Verdict.overall(list(entries.verdict)),
        kind=kind,
        function=function,
        point=subject.start,
        entries=entries,
        diagnoses=_raised(failure, entries)
        if failure
        else (
            *repeated.diagnoses,
            *diagnoses_of(
                subject,
                function,
                kind,
                examined,
                columns,
                rel_tol,
                rules.abs_tol,
                outputs=session.shape_of(function),
                values=centre,
                told=repeated.changed,
                ask=asking(session, function, kind, columns),
            ),
        ),
        findings=tuple(findings),
        notices=(*session.ledger.notices, *_left_out(subject), *_few_digits(precision, rules.rel_tol)),
        evaluations=session.ledger.evaluations - before,
        seconds=time.perf_counter() - began,
        renderer=check_text,
    )


def _asked_again(
    session: Session,
    function: str,
    kind: str,
    examined: Examined,
    columns: IntArray,
    rel_tol: float,
    abs_tol: float,
) -> Repeated:
    """The entries once the claim has answered again, the model having been evaluated elsewhere in between."""
    subject, m = session.subject, examined.claim.shape[0]
    second = second_answer(session, function, kind)
    if second is None:
        return Repeated(examined=examined, changed=np.zeros(examined.claim.shape, bool))

    def third() -> Array | None:
        answer = second_answer(session, function, kind)
        return None if answer is None else answer[:, columns]

    return compared(
        examined,
        second[:, columns],
        third,
        rel_tol,
        floor_of(subject, examined, columns, abs_tol),
        lambda i, j: entry_name(subject, function, m, i, int(columns[j])),
    )


def _judgeable(subject: Subject) -> IntArray:
    """The variables whose entries are judged: a whole-number variable has no derivative.

    Raises
    ------
    UsageError
        If there is none.
    """
    columns = np.flatnonzero(~subject.domain.integer)
    if columns.size == 0:
        raise UsageError("every variable takes whole numbers only, so there is no derivative to check")
    return columns


def _few_digits(precision: str, rel_tol: float | None) -> tuple[str, ...]:
    if precision not in REL_TOL or rel_tol is not None:
        return ()
    return (
        f"values or claim come in single precision ({precision}), so the claim was judged to a relative "
        f"{REL_TOL[precision]:g} only; rel_tol=... asks for more",
    )


def _raised(failure: Finding, entries: Entries) -> tuple[Diagnosis, ...]:
    """The story of a claim that raised: it is no wrong derivative, it is none."""
    return (Diagnosis(code=DiagnosisCode.UNKNOWN, text=failure.text, entries=entries.name),)


def _left_out(subject: Subject) -> tuple[str, ...]:
    whole = [subject.layout.name(int(i)) for i in np.flatnonzero(subject.domain.integer)]
    return (f"entries for {listed(whole)} were not judged: whole numbers have no derivative",) if whole else ()
