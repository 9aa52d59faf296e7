"""What a report says beside the verdict, whichever way a claim was checked."""

import numpy as np

from gradcheck.claims.desk import BY_ROUNDING
from gradcheck.claims.entries import ALL_ZERO
from gradcheck.claims.policy import REL_TOL
from gradcheck.claims.rule import REFUTING_BOUNDS
from gradcheck.problem.subject import Subject
from gradcheck.records.finding import Finding
from gradcheck.records.report import Diagnosis, Entries
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import listed


def few_digits(precision: str, rel_tol: float | None) -> tuple[str, ...]:
    """That a claim was judged to few digits, because its numbers have no more."""
    if precision not in REL_TOL or rel_tol is not None:
        return ()
    return (
        f"values or claim come in single precision ({precision}), so the claim was judged to a relative "
        f"{REL_TOL[precision]:g} only; rel_tol=... asks for more",
    )


def raised(failure: Finding, entries: Entries) -> tuple[Diagnosis, ...]:
    """The story of a claim that raised: it is no wrong derivative, it is none."""
    return (Diagnosis(code=DiagnosisCode.UNKNOWN, text=failure.text, entries=tuple(entries.name)),)


def nothing_moves(entries: Entries) -> tuple[str, ...]:
    """That all derivatives are zero at the point, where every one is confirmed by rounding alone."""
    zero = (entries.claim == 0) | (np.abs(entries.witness) <= REFUTING_BOUNDS * entries.bound)
    by_rounding = all(reason == BY_ROUNDING for reason in entries.reason)
    confirmed = all(verdict == Verdict.CONFIRMED for verdict in entries.verdict)
    return (ALL_ZERO,) if len(entries) and by_rounding and confirmed and zero.all() else ()


def left_out(subject: Subject) -> tuple[str, ...]:
    """That variables of whole numbers were not judged."""
    whole = [subject.layout.name(int(i)) for i in np.flatnonzero(subject.domain.integer)]
    return (f"entries for {listed(whole)} were not judged: whole numbers have no derivative",) if whole else ()
