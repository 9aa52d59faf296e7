"""The check of a claim entry by entry: all entries, each with its verdict."""

import time

import numpy as np

from gradcheck.checks.asked_again import answered_again, asking, second_answer
from gradcheck.checks.claimed import claimed_matrix
from gradcheck.checks.measure import measure_of
from gradcheck.checks.notices import few_digits, left_out, nothing_moves, raised
from gradcheck.claims.entries import diagnoses_of, entries_of
from gradcheck.claims.examination import examine
from gradcheck.claims.policy import Rules
from gradcheck.counsel.claim_findings import kinks_at_point, levels_at_point, mutation
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.finding import Finding
from gradcheck.records.report import CheckReport
from gradcheck.records.verdict import Verdict
from gradcheck.report.check_text import check_text
from gradcheck.witnesses.steps import room_along


def checked_entries(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int
) -> CheckReport:
    """The report on one claim of one function; `before` evaluations were spent on others."""
    began = time.perf_counter()
    subject = session.subject
    claim, failure = claimed_matrix(session, function, kind, centre)
    measure = measure_of(session, function, kind, rules)
    columns = _judgeable(subject)
    inquiry = examine(
        subject.start,
        columns,
        claim[:, columns],
        room_along(subject.start, columns, subject.domain),
        centre,
        subject.domain.scale[columns],
        rel_tol=measure.rel_tol,
        abs_tol=measure.abs_tol,
        unit_roundoff=measure.unit_roundoff,
        witnesses=rules.witnesses,
    )
    examined = conduct_one(addressed(inquiry, function=function), session.gate)
    second = second_answer(session, function, kind)
    repeated = answered_again(session, function, kind, examined, columns, measure, second)
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
        diagnoses=raised(failure, entries)
        if failure
        else (
            *repeated.diagnoses,
            *diagnoses_of(
                subject,
                function,
                kind,
                examined,
                columns,
                measure.rel_tol,
                measure.abs_tol,
                outputs=session.shape_of(function),
                values=centre,
                told=repeated.changed,
                ask=asking(session, function, kind, columns),
            ),
        ),
        findings=tuple(findings),
        notices=(
            *session.ledger.notices,
            *left_out(subject),
            *few_digits(measure.precision, rules.rel_tol),
            *nothing_moves(entries),
        ),
        evaluations=session.ledger.evaluations - before,
        seconds=time.perf_counter() - began,
        renderer=check_text,
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
