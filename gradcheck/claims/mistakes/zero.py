"""Entries that are claimed to be zero although the function depends on the variable."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.mistakes.case import MOST_BITS, Case
from gradcheck.claims.mistakes.explanation import Explanation
from gradcheck.claims.mistakes.where import in_words
from gradcheck.records.arrays import BoolArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import number

COST = 6.0


def zero_entry(case: Case) -> Iterator[Explanation]:
    """The claim is exactly zero, the witness is not."""
    where = case.refuted & (case.claim == 0)
    if not where.any():
        return

    def tell(left: BoolArray) -> str:
        found = case.value[left]
        size = f" (by {number(found[0], 4)})" if found.size == 1 else ""
        return (
            f"{in_words(case, left)}: claimed as exactly zero, but the function does change with it{size}; "
            "look for a term that was never filled in."
        )

    bits = np.full(case.claim.shape, MOST_BITS)
    yield Explanation(code=DiagnosisCode.ZERO_ENTRY, where=where, bits=bits, cost=COST, tell=tell)
