"""Entries with the wrong sign."""

from collections.abc import Iterator

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.explanation import Explanation
from gradcheck.claims.mistakes.where import in_words
from gradcheck.records.arrays import BoolArray
from gradcheck.records.verdict import DiagnosisCode

COST = 2.0


def sign_flipped(case: Case) -> Iterator[Explanation]:
    """The claim is minus the witness."""
    where = case.refuted & case.met(-case.value, case.doubt)
    if not where.any():
        return

    def tell(left: BoolArray) -> str:
        if case.all_wrong and left.sum() > 1 and (left | case.silent).all():
            return (
                f"all {left.sum():,} entries have the opposite sign of the derivative; look for a lost minus in front "
                "of the whole, or a maximum written as a minimum."
            )
        verb = "has" if left.sum() == 1 else "have"
        return (
            f"{in_words(case, left)} {verb} the opposite sign of the derivative, to all digits; look for a lost minus "
            "in these terms."
        )

    yield Explanation(
        code=DiagnosisCode.SIGN_FLIPPED, where=where, bits=case.bits(-case.value, case.doubt), cost=COST, tell=tell
    )
