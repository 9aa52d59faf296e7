"""Entries with the wrong sign."""

from gradcheck.claims.mistakes.case import Case
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed


def sign_flipped(case: Case) -> Diagnosis | None:
    """The claim is minus the witness."""
    where = case.explains(-case.value)
    if not where.any():
        return None
    names = case.names(where)
    rest = "all refuted entries have" if where.sum() == case.refuted.sum() else f"{listed(names)}:"
    text = (
        f"{rest} the opposite sign of the derivative; look for a lost minus, or a maximum written as a minimum."
        if where.sum() == case.refuted.sum()
        else f"{rest} the claim has the opposite sign of the derivative; look for a lost minus in these terms."
    )
    return Diagnosis(code=DiagnosisCode.SIGN_FLIPPED, text=text, entries=names)
