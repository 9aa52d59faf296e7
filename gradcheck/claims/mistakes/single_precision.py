"""A claim that was computed or stored in single precision on its way."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.mistakes.case import MOST_BITS, Case
from gradcheck.claims.mistakes.explanation import Explanation, said
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import number

#: Spacing of numbers in single precision, and how many of them an honest computation may lose.
SPACING = float(np.finfo(np.float32).eps)
LOST = 64.0
#: Numbers that fit into so few bits come out the same in any precision.
SHORT = 2.0**-18
COST = 6.0


def single_precision(case: Case) -> Iterator[Explanation]:
    """Every entry agrees to about seven digits, and every claim is a number of single precision.

    Agreement to seven digits alone is no evidence: a model that iterates to a tolerance leaves the same.
    """
    size = np.fmax(np.abs(case.claim), np.abs(case.value))
    # Sums of terms that cancel are off by the spacing of their terms, not of the result.
    room = LOST * SPACING * np.fmax(size, 1e-3 * np.fmax.reduce(size, axis=1, keepdims=True)) + case.doubt
    near = np.abs(case.claim - case.value) <= room
    stored, long = _stored(case.claim)
    judged = case.refuted | case.confirmed
    if not (near | ~judged).all() or not stored.all() or not long.any():
        return
    gap = float(np.fmax.reduce((np.abs(case.claim - case.value) / size)[case.refuted]))
    part = "" if case.whole else " that was looked at"
    text = (
        f"claim and derivative agree to about {number(gap, 1)} everywhere{part}, and every claimed number is one of "
        "single precision (float32); look for float32 in the derivative or its data, or ask for less with rel_tol=1e-6."
    )
    yield Explanation(
        code=DiagnosisCode.SINGLE_PRECISION,
        where=case.refuted,
        bits=np.full(case.claim.shape, MOST_BITS),
        cost=COST,
        tell=said(text),
    )


def _stored(claim: Array) -> tuple[BoolArray, BoolArray]:
    """Which claims are numbers of single precision, and which of these have too many bits for an accident."""
    with np.errstate(over="ignore", under="ignore", invalid="ignore"):
        stored: BoolArray = claim.astype(np.float32).astype(float) == claim
    mantissa, _ = np.frexp(np.where(np.isfinite(claim), claim, 0.0))
    long: BoolArray = stored & (mantissa % SHORT != 0)
    return stored, long
