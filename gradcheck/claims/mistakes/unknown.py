"""What no story explains: said with what is known about it."""

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.where import in_words
from gradcheck.records.arrays import BoolArray
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import count, listed, number

#: A claim this close to the derivative has all its main terms right.
CLOSE = 1e-3
#: So many ratios are told.
RATIOS = 4


def unexplained(case: Case, left: BoolArray) -> Diagnosis:
    """The diagnosis `unknown` about these entries."""
    with np.errstate(divide="ignore", invalid="ignore"):
        gap = np.abs(case.claim / case.value - 1)[left].max()
    shown = in_words(case, left)
    if gap < CLOSE:
        text = (
            f"{shown}: claim and derivative agree to {int(-np.log10(gap))} digits, so no term of any weight is wrong. "
            "If the model iterates to a tolerance, the derivative of the program differs from the exact one by about "
            "as much; tighten it and check again. Otherwise look for single precision (float32), a small term, or "
            "constants with few digits."
        )
    elif not np.isfinite(case.claim[left]).any():
        text = f"{shown}: the claim is not a finite number; look for 0/0, log(0) or an overflow in it."
    else:
        them = "it" if left.sum() == 1 else "them"
        text = (
            f"{shown}: no simple mistake explains the difference{_ratios(case, left)}{_right_part(case)}; derive "
            f"{them} afresh."
        )
    return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=case.names(left))


def _ratios(case: Case, left: BoolArray) -> str:
    ratios = case.ratios()[left]
    if not np.isfinite(ratios).all() or ratios.size > RATIOS:
        return ""
    told = listed([number(ratio, 4) for ratio in ratios])
    return f" (the claim is {told} times the derivative)"


def _right_part(case: Case) -> str:
    """Which part of the claim is right, where there is one: the mistake is not in what all entries share."""
    right = case.confirmed & ~case.silent
    many = int(right.sum())
    if not many:
        return ""
    verb = "is" if many == 1 else "are"
    return f"; the other {count(many, 'entry', 'entries')} {verb} right, so look at what enters these alone"
