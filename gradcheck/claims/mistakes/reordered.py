"""A matrix-shaped parameter or output that is laid out the other way: by columns (Fortran) where rows are due (C)."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.mistakes.case import Block
from gradcheck.claims.mistakes.explanation import Explanation, places, said
from gradcheck.claims.mistakes.views import Columns, out_of_place
from gradcheck.records.arrays import IntArray
from gradcheck.records.verdict import DiagnosisCode

COST = 4.0
#: Longer vectors are not tried as matrices of every shape that they could hold.
GUESSED_MOST = 10_000
#: A matrix that nobody spoke of is believed only where so many columns moved.
LEAST_GUESSED = 4


def _laid_out(columns: Columns) -> Iterator[Explanation]:
    blocks = [block for block in columns.case.blocks if len(block.shape) > 1]
    for block in blocks:
        yield from _of_block(columns, block, COST + (0.0 if len(columns.case.blocks) == 1 else 2.0))
    n = columns.case.claim.shape[1]
    if not blocks and n <= GUESSED_MOST and columns.refuted().size >= LEAST_GUESSED:
        shapes = [(r, n // r) for r in range(2, n // 2 + 1) if n % r == 0]
        for shape in shapes:
            yield from _of_block(columns, Block("", 0, shape), COST + 4.0 + places(len(shapes)))


def _of_block(columns: Columns, block: Block, cost: float) -> Iterator[Explanation]:
    size = block.columns.size
    there = np.arange(size).reshape(block.shape).ravel(order="F")
    back = np.argsort(there)
    for inner, flat_as in ((there, "F"), (back, "C")):
        order: IntArray = np.arange(columns.case.claim.shape[1])
        order[block.columns] = block.start + inner
        moved = order != np.arange(order.size)
        met = columns.wholly_met(order)
        if met[moved].all() and columns.marks(moved).any():
            text = _sentence(columns, block, order, flat_as)
            yield Explanation(
                code=DiagnosisCode.REORDERED,
                where=columns.marks(moved),
                bits=columns.case.bits(*columns.predicted(order)),
                cost=cost + (0.0 if flat_as == "F" else 0.5),
                tell=said(text),
            )


def _sentence(columns: Columns, block: Block, order: IntArray, flat_as: str) -> str:
    moved = np.flatnonzero(columns.marks(order != np.arange(order.size)).any(axis=0))
    j = int(moved[0])
    shape = " × ".join(map(str, block.shape))
    what = f"{block.path} ({shape})" if block.path else f"what looks like a {shape} matrix"
    how = "by columns (order='F') where rows are due" if flat_as == "F" else "as if it came by columns (order='F')"
    return (
        f"the claim holds {what} laid out {how}: its entry for {columns.label(j)} is the derivative of "
        f"{columns.label(int(order[j]))}, and all {moved.size} that moved fit; ravel and reshape in the same order."
    )


reordered = out_of_place(_laid_out)
