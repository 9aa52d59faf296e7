"""Two entries of a row that stand in each other's place."""

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode

#: Rows with more refuted entries than this are no simple exchange.
MOST = 12


def swapped_entries(case: Case) -> Diagnosis | None:
    """A pair of refuted entries of one row is explained by exchanging them."""
    for row in range(case.claim.shape[0]):
        columns = np.flatnonzero(case.refuted[row])
        if not 2 <= columns.size <= MOST:
            continue
        for a, i in enumerate(columns):
            for j in columns[a + 1 :]:
                if _exchanged(case, row, int(i), int(j)):
                    names = (case.name(row, int(i)), case.name(row, int(j)))
                    text = (
                        f"the claims for {names[0]} and {names[1]} stand in each other's place; "
                        "check the order of the variables."
                    )
                    return Diagnosis(code=DiagnosisCode.SWAPPED_ENTRIES, text=text, entries=names)
    return None


def _exchanged(case: Case, row: int, i: int, j: int) -> bool:
    slack = case.slack[row]
    claim, value = case.claim[row], case.value[row]
    return bool(abs(claim[i] - value[j]) <= slack[j] and abs(claim[j] - value[i]) <= slack[i])
