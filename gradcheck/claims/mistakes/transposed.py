"""A square Jacobian whose transpose is the derivative, or a square block of one."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.explanation import Explanation, places, said
from gradcheck.records.verdict import DiagnosisCode

COST = 3.0


def transposed(case: Case) -> Iterator[Explanation]:
    """The transpose of the claim meets the witness in every entry of a square part that holds all that is refuted."""
    m, n = case.claim.shape
    if m < 2 or n < 2:
        return
    rows, columns = np.flatnonzero(case.refuted.any(axis=1)), np.flatnonzero(case.refuted.any(axis=0))
    if m == n and (found := _part(case, slice(0, m), slice(0, n))) is not None:
        yield found
    height, width = int(np.ptp(rows)) + 1, int(np.ptp(columns)) + 1
    if height == width >= 2 and not (m == n == height):
        part = slice(int(rows[0]), int(rows[-1]) + 1), slice(int(columns[0]), int(columns[-1]) + 1)
        if (found := _part(case, *part)) is not None:
            yield found


def _part(case: Case, rows: slice, columns: slice) -> Explanation | None:
    predicted, doubt = case.value.copy(), case.doubt.copy()
    predicted[rows, columns] = predicted[rows, columns].T.copy()
    doubt[rows, columns] = doubt[rows, columns].T.copy()
    if not case.met(predicted, doubt)[rows, columns].all():
        return None
    m, n = case.claim.shape
    size = rows.stop - rows.start
    where = np.zeros_like(case.refuted)
    where[rows, columns] = case.refuted[rows, columns]
    if size == m == n:
        text = (
            f"the transpose of the claim is the derivative in all {m * n} entries; "
            "row i holds the derivatives of output i: return `claim.T`."
        )
        cost = COST
    else:
        shown = f"[{rows.start}:{rows.stop}, {columns.start}:{columns.stop}]"
        text = (
            f"the block {shown} of the claim ({size} rows from {case.name(rows.start, columns.start)} on) is the "
            f"transpose of what it should be, in all {size * size} entries; row i holds the derivatives of output i."
        )
        cost = COST + 3 * places(max(m, n))
    return Explanation(
        code=DiagnosisCode.TRANSPOSED, where=where, bits=case.bits(predicted, doubt), cost=cost, tell=said(text)
    )
