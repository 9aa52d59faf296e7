"""The check of a claim entry by entry: all entries, each with its verdict."""

import time
from dataclasses import replace

import numpy as np

from gradcheck.checks.asked_again import answered_again, second_answer
from gradcheck.checks.claimed import claimed_matrix
from gradcheck.checks.measure import measure_of
from gradcheck.checks.notices import nothing_moves
from gradcheck.checks.told import told
from gradcheck.claims.examination import examine
from gradcheck.claims.policy import Rules
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.report import CheckReport
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
    shape = session.shape_of(function)
    report = told(
        session, function, kind, repeated, columns, centre, measure, rules, failure, outputs=shape, more=nothing_moves
    )
    spent = session.ledger.evaluations - before
    return replace(report, evaluations=spent, seconds=time.perf_counter() - began, text="")


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
