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
LOST = 16.0
#: Numbers that fit into so few bits come out the same in any precision.
SHORT = 2.0**-18
#: Without numbers that stand exactly in single precision, so many entries must be off by that much.
LEAST = 3
COST = 6.0


def single_precision(case: Case) -> Iterator[Explanation]:
    """Every entry agrees to about seven digits; the claims are single precision numbers, or off by different shares."""
    size = np.fmax(np.abs(case.claim), np.abs(case.value))
    # Sums of terms that cancel are off by the spacing of their terms, not of the result.
    room = LOST * SPACING * np.fmax(size, 1e-3 * np.fmax.reduce(size, axis=1, keepdims=True)) + case.doubt
    with np.errstate(invalid="ignore"):
        near = np.abs(case.claim - case.value) <= room
    if not (near | ~(case.refuted | case.confirmed)).all():
        return
    stored, long = _stored(case.claim)
    exactly = bool(stored.all()) and bool(long.any())
    if not exactly and not _scattered(case):
        return
    with np.errstate(all="ignore"):
        gap = float(np.fmax.reduce((np.abs(case.claim - case.value) / size)[case.refuted]))
    part = "" if case.whole else " that was looked at"
    evidence = (
        "every claimed number is one of single precision (float32)"
        if exactly
        else "the errors are those of single precision (float32), another one in each entry"
    )
    text = (
        f"claim and derivative agree to about {number(gap, 1)} everywhere{part}, and {evidence}; look for float32 in "
        "the derivative or its data, or ask for less with rel_tol=1e-6."
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


def _scattered(case: Case) -> bool:
    """Whether most entries are off, each by another share of itself."""
    off = case.ratios()[case.refuted] - 1.0
    judged = int((case.refuted | (case.confirmed & ~case.silent)).sum())
    if off.size < LEAST or 2 * off.size < judged:
        return False
    return bool(np.unique(np.round(off / (0.05 * SPACING))).size >= max(LEAST, off.size // 2))
