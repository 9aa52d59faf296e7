"""The same refuted claim seen as columns, as rows, or one row at a time: things may be out of place in any of them."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from typing import TypeAlias

import numpy as np

from gradcheck.claims.mistakes.case import Block, Case
from gradcheck.claims.mistakes.explanation import Explanation, Family
from gradcheck.claims.mistakes.where import row_in_words
from gradcheck.records.arrays import Array, BoolArray, IntArray

#: So many rows are looked at one by one.
ROWS_MOST = 16
#: Matrices with more entries than this are not searched for entries out of place.
ENTRIES_MOST = 1_000_000


@dataclass(frozen=True, slots=True, eq=False)
class Columns:
    """A case whose columns may stand in each other's place, and how one of them is called."""

    case: Case
    noun: str

    def label(self, column: int) -> str:
        if self.noun == "row":
            return row_in_words(column, self.case.name(0, column))
        return self.case.name(0, column) if self.case.claim.shape[0] == 1 else f"the column of {self.noun}[{column}]"

    def refuted(self) -> IntArray:
        """Columns with refuted entries."""
        return np.flatnonzero(self.case.refuted.any(axis=0))

    def predicted(self, order: IntArray) -> tuple[Array, Array]:
        """Value and doubt if column j held the derivative of column ``order[j]``; zero where that is -1."""
        source = np.maximum(order, 0)
        empty = (order < 0)[None, :]
        return np.where(empty, 0.0, self.case.value[:, source]), np.where(empty, 0.0, self.case.doubt[:, source])

    def met(self, order: IntArray) -> BoolArray:
        """Columns (n,) that are wholly what such an order predicts, with a refuted entry among them."""
        return self.wholly_met(order) & np.asarray(self.case.refuted.any(axis=0))

    def wholly_met(self, order: IntArray) -> BoolArray:
        """Columns (n,) that are wholly what such an order predicts, refuted or not."""
        return np.asarray(self.case.met(*self.predicted(order)).all(axis=0))

    def marks(self, columns: BoolArray) -> BoolArray:
        """Refuted entries in these columns."""
        return self.case.refuted & columns[None, :]


ColumnFamily: TypeAlias = Callable[[Columns], Iterator[Explanation]]


def out_of_place(family: ColumnFamily) -> Family:
    """A family about columns, asked about columns, rows and single rows."""

    def asked(case: Case) -> Iterator[Explanation]:
        if case.claim.size > ENTRIES_MOST:
            return
        noun = case.variable(0).partition("[")[0]
        explained = np.zeros_like(case.refuted)
        for found in family(Columns(case, noun)):
            explained |= found.where
            yield found
        if case.claim.shape[0] == 1:
            return
        for turned in family(Columns(_turned(case), "row")):
            found = _back(turned, np.s_[:], turned=True, shape=case.claim.shape)
            explained |= found.where
            yield found
        rows = np.flatnonzero((case.refuted & ~explained).any(axis=1))
        for i in rows[:ROWS_MOST].tolist():
            for found in family(Columns(_row(case, i), noun)):
                yield _back(found, np.s_[i : i + 1], turned=False, shape=case.claim.shape)

    return asked


def _back(found: Explanation, rows: slice, *, turned: bool, shape: tuple[int, ...]) -> Explanation:
    """An explanation of a view, in the shape of the claim."""
    where, bits = np.zeros(shape, bool), np.zeros(shape)
    where[rows] = found.where.T if turned else found.where
    bits[rows] = found.bits.T if turned else found.bits

    def tell(left: BoolArray) -> str:
        return found.tell(left.T if turned else left[rows])

    # To say which row it is takes bits as well.
    cost = found.cost if turned or rows == np.s_[:] else found.cost + np.log2(shape[0])
    return replace(found, where=where, bits=bits, cost=float(cost), tell=tell)


def _turned(case: Case) -> Case:
    blocks = (Block("the output", 0, case.outputs),) if len(case.outputs) == 2 else ()
    return replace(
        case,
        **{name: getattr(case, name).T for name in ("claim", "value", "bound", "refuted", "confirmed", "floor")},
        name=lambda i, j: case.name(j, i),
        x=np.full(case.claim.shape[0], np.nan),
        blocks=blocks,
        outputs=(),
    )


def _row(case: Case, i: int) -> Case:
    part = np.s_[i : i + 1]
    return replace(
        case,
        **{name: getattr(case, name)[part] for name in ("claim", "value", "bound", "refuted", "confirmed", "floor")},
        name=lambda _, j: case.name(i, j),
        outputs=(),
    )
