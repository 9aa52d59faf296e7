"""Entries that are claimed to be zero although the function depends on the variable."""

from gradcheck.claims.mistakes.case import Case
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed


def zero_entry(case: Case) -> Diagnosis | None:
    """The claim is exactly zero, the witness is not."""
    where = case.refuted & (case.claim == 0)
    if not where.any():
        return None
    names = case.names(where)
    text = (
        f"{listed(names)}: claimed as exactly zero, but the function does change with it; "
        "look for a term that was never filled in."
    )
    return Diagnosis(code=DiagnosisCode.ZERO_ENTRY, text=text, entries=names)
