"""Which likely mistakes explain a refuted claim: the families in the order in which they are asked."""

from dataclasses import replace

import numpy as np

from gradcheck.claims.mistakes.case import Case, Family
from gradcheck.claims.mistakes.factor import constant_factor
from gradcheck.claims.mistakes.sign import sign_flipped
from gradcheck.claims.mistakes.swapped import swapped_entries
from gradcheck.claims.mistakes.transpose import transposed
from gradcheck.claims.mistakes.zero import zero_entry
from gradcheck.records.arrays import BoolArray
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed, number

#: A claim this close to the derivative has all its main terms right.
CLOSE = 1e-3
#: A story about the whole claim comes before stories about single entries.
FAMILIES: tuple[Family, ...] = (transposed, zero_entry, sign_flipped, swapped_entries, constant_factor)


def likely_mistakes(case: Case) -> tuple[Diagnosis, ...]:
    """Diagnoses that explain the refuted entries; each entry is explained once, what no family explains is said."""
    diagnoses = []
    left = case.refuted.copy()
    for family in FAMILIES:
        # A family is asked again as long as it explains something: there may be two exchanges, or two factors.
        while left.any() and (diagnosis := family(replace(case, refuted=left))) is not None:
            diagnoses.append(diagnosis)
            named = set(diagnosis.entries)
            for i, j in np.argwhere(left):
                if case.name(int(i), int(j)) in named:
                    left[i, j] = False
    if left.any():
        diagnoses.append(_unexplained(case, left))
    return tuple(diagnoses)


def _only_ratio(case: Case, left: BoolArray) -> float:
    with np.errstate(divide="ignore", invalid="ignore"):
        return float((case.claim / case.value)[left][0])


def _unexplained(case: Case, left: BoolArray) -> Diagnosis:
    names = case.names(left)
    with np.errstate(divide="ignore", invalid="ignore"):
        gap = np.abs(case.claim / case.value - 1)[left].max()
    if gap < CLOSE:
        text = (
            f"{listed(names)}: claim and derivative agree to {int(-np.log10(gap))} digits, so no term of any weight is "
            "wrong. If the model iterates to a tolerance, the derivative of the program differs from the exact one by "
            "about as much; tighten it and check again. Otherwise look for a small term, or constants with few digits."
        )
    elif not np.isfinite(case.claim[left]).any():
        text = f"{listed(names)}: the claim is not a finite number; look for 0/0, log(0) or an overflow in it."
    else:
        ratio = (
            f" (the claim is {number(_only_ratio(case, left), digits=4)} times the derivative)"
            if left.sum() == 1
            else ""
        )
        them = "it" if len(names) == 1 else "them"
        text = f"{listed(names)}: no simple mistake explains the difference{ratio}; derive {them} afresh."
    return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=names)
