"""A square Jacobian whose transpose is the derivative."""

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode


def transposed(case: Case) -> Diagnosis | None:
    """The transpose of the claim meets the witness in every entry."""
    m, n = case.claim.shape
    if m != n or m < 2:
        return None
    with np.errstate(invalid="ignore"):
        fits = np.abs(case.claim.T - case.value) <= case.slack
    if not fits.all():
        return None
    text = (
        f"the transpose of the claim is the derivative in all {m * n} entries; "
        "row i holds the derivatives of output i: return `claim.T`."
    )
    return Diagnosis(code=DiagnosisCode.TRANSPOSED, text=text, entries=case.names(case.refuted))
