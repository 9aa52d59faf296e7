"""The examination of a sparse Jacobian, or one of many columns: every entry by as few directions as its pattern allows.

1. Random directions over all columns see every row as a whole, also what the pattern leaves out.
2. Where a row disagrees, one more direction, weighted by position, tells the column of a single fault. Places outside
   the pattern that are found so are taken up: directions of orthogonal columns would otherwise put their value on
   innocent entries.
3. Directions of structurally orthogonal columns give every entry, value ± bound.
4. What was seen must explain the random directions. Rows where it does not are searched for more places outside the
   pattern, with the columns in smaller and smaller groups.
5. What is refuted gets a second look: only the accused columns move, at other steps.

Rows that are too full for step 3 are judged as wholes, and searched for their faults where they disagree.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.claims.entry_table import CONFIRMED, REFUTED, UNDECIDED, EntryTable
from gradcheck.claims.joint_looks import (
    Accuracy,
    of_outputs,
)
from gradcheck.claims.joint_moves import Way, room_of
from gradcheck.claims.pattern_detection import PLACES_MOST, Detected
from gradcheck.claims.row_search import HALVINGS_MOST, SEARCHES_MOST
from gradcheck.claims.slot_looks import SlotLooks
from gradcheck.claims.sparsity import coloured
from gradcheck.claims.unused_entries import Influence, influence_along
from gradcheck.claims.whole_rows import GROUPS_MOST, RandomDirection
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.difference_reasons import NO_ROOM, SPENT

#: Fewer variables than this are searched as cheaply one by one.
DETECTED_LEAST = 600
#: So many rows, and such a share of all, are many.
MANY_ROWS, MANY_ROWS_SHARE = 30, 0.1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SparseExamined:
    """What the examination came to.

    Attributes
    ----------
    table : EntryTable
        Every entry that is known of.
    by_entry : ndarray of bool, shape (m,)
        Rows whose entries were looked at one by one; the others were judged as wholes.
    row_verdict : ndarray of int8, shape (m,)
        Of the rows as wholes along the random directions.
    unexplained : ndarray of bool, shape (m,)
        Rows that disagree although no entry could be found that is wrong.
    groups : int
        Directions of orthogonal columns.
    random : list of RandomDirection
    tolerance : list of ndarray, shape (m,)
        Of each random direction.
    factor : ndarray, shape (m,)
        By which the claim of a row differs from all random directions; NaN where there is none.
    influence : Influence
        What becomes of entries that are zero here.
    still : ndarray of bool, shape (n,)
        Columns that were not moved.
    visible : float
        Smallest single error that the random directions would have seen, as a share of the largest term of its row.
    detection : Detected or None
        What was seen of the pattern, where it was looked for.
    cut_short : bool
    """

    table: EntryTable
    by_entry: BoolArray
    row_verdict: np.ndarray[tuple[int, ...], np.dtype[np.int8]]
    unexplained: BoolArray
    groups: int
    random: list[RandomDirection]
    tolerance: list[Array]
    factor: Array
    visible: float
    influence: Influence
    still: BoolArray
    detection: Detected | None
    cut_short: bool


def examine_sparse(
    base: Array,
    table: EntryTable,
    centre: Array,
    domain: Domain,
    accuracy: Accuracy,
    *,
    directions: int | str | None = None,
    seed: int = 0,
    detect: bool = False,
) -> Inquiry[SparseExamined]:
    """Examine a claimed Jacobian by directions that move many variables.

    Parameters
    ----------
    base : ndarray, shape (n,)
    table : EntryTable
        The claim, (m, n).
    centre : ndarray, shape (m,)
    domain : Domain
    accuracy : Accuracy
    directions : int, "all" or None
        A number: so many random directions, and every row is judged as a whole. ``"all"``: every entry, however many
        groups that takes. None: every entry where few groups suffice.
    seed : int
    detect : bool
        See from values first which outputs depend on which variables; m·n at the most `PLACES_MOST`.

    Returns
    -------
    SparseExamined
    """
    return (yield from _Examination(base, table, centre, domain, accuracy, directions, seed, detect).run())


class _Examination(SlotLooks):
    """The course of the examination."""

    __slots__ = ()

    def run(self) -> Inquiry[SparseExamined]:
        if self.detect:
            yield from self._detect(np.arange(self.centre.size))
            self.by_entry = self._rows_by_entry()
        yield from self._look_at_random()
        yield from self._look_closely()
        flagged = self._disagreeing()
        if flagged.any():
            yield from self._search_single(flagged)
        rows = np.flatnonzero(self.by_entry)
        if rows.size and not self.ended:
            yield from self._look_by_groups(rows)
        yield from self._search_unexplained()
        yield from self._settle_open()
        yield from self._search_full_rows()
        yield from self._look_again()
        self._drop_empty_places()
        influence = yield from self._influence()
        return self._result(influence)

    def _search_unexplained(self) -> Inquiry[None]:
        """Rows that the entries seen so far do not explain: more places outside the pattern."""
        rows = np.flatnonzero((self._disagreeing() | self.stray) & self.by_entry)
        # Where many rows are at fault in many places, it is cheaper to see the whole pattern than to search by place.
        many = rows.size >= max(MANY_ROWS, MANY_ROWS_SHARE * self.table.shape[0])
        many &= self.base.size >= DETECTED_LEAST
        if many and not self.ended and self.detection is None and rows.size * self.base.size <= PLACES_MOST:
            rows = yield from self._detect(rows)
            if rows.size and not self.ended:
                self.stray[rows] = False
                yield from self._look_by_groups(rows)
        for search in range(SEARCHES_MOST):
            rows = np.flatnonzero((self._disagreeing() | self.stray) & self.by_entry)
            if rows.size == 0 or self.ended:
                return
            found = yield from self._search_in_groups(rows, search)
            fresh = self.table.add(*found)
            if not fresh and search >= HALVINGS_MOST:
                return
            if fresh and not self.ended:
                self.stray[rows] = False
                yield from self._look_by_groups(rows)

    def _drop_empty_places(self) -> None:
        """Places outside the pattern that were suspected, and hold zero as claimed."""
        table = self.table
        with np.errstate(invalid="ignore"):
            nothing = (table.verdict == CONFIRMED) | (
                (table.verdict == UNDECIDED) & (np.abs(table.value) <= table.bound)
            )
        table.drop(~table.inside & (table.claim == 0) & nothing)

    def _influence(self) -> Inquiry[Influence]:
        """Whether entries that are zero here are so elsewhere."""
        table = self.table
        zero = np.flatnonzero(table.inside & (table.value == 0) & self.by_entry[table.row])
        if zero.size == 0 or self.ended:
            return Influence.unknown(len(table))
        rows = np.unique(table.row[zero])
        meant = np.zeros(table.shape[1], bool)
        meant[table.column[zero]] = True
        pattern = table.pattern(rows, meant[table.column])
        changes, stairs, looked = (np.zeros(len(table), bool) for _ in range(3))
        elsewhere = self._elsewhere()
        for way in (Way.BOTH, Way.INWARD):
            columns = meant & self.moves.along(way)
            if not columns.any():
                continue
            colouring = coloured(pattern, columns, most=GROUPS_MOST)
            for group in range(colouring.count if colouring else 0):
                assert colouring is not None
                own = zero[colouring.colour[table.column[zero]] == group]
                direction = self.moves.groups(colouring.colour, np.array([group]))
                room = room_of(self.base, direction, self.domain, way)
                looking = influence_along(self.base, direction, room, self.centre[table.row[own]], elsewhere)
                seen = yield from of_outputs(looking, table.row[own])
                changes[own], stairs[own], looked[own] = seen.changes, seen.stairs, seen.looked
        blurred = stairs & (table.claim == 0) & (table.verdict == CONFIRMED)
        table.verdict[blurred] = UNDECIDED
        table.bound[blurred] = np.inf
        return Influence(changes=changes, stairs=stairs, looked=looked)

    def _elsewhere(self) -> Array:
        """Another point within the bounds, at which every variable that can has moved by a random part of its size."""
        step = self.moves.random(self.moves.way != Way.STILL, 1000 * self.seed + 991) * 0.125
        return np.asarray(np.clip(self.base + step, self.domain.lower, self.domain.upper))

    def _result(self, influence: Influence) -> SparseExamined:
        table = self.table
        still = self.moves.way == Way.STILL
        unseen = (table.verdict == UNDECIDED) & (table.reason == "") & self.by_entry[table.row]
        table.reason[unseen & still[table.column]] = NO_ROOM
        table.reason[unseen & ~still[table.column]] = SPENT if self.ended else "no witness could give a finite bound"
        refuted = np.zeros(self.centre.size, bool)
        refuted[table.row[table.verdict == REFUTED]] = True
        return SparseExamined(
            table=table,
            by_entry=self.by_entry,
            row_verdict=self._row_verdicts(),
            unexplained=self._disagreeing(),
            groups=self.groups,
            random=self.random,
            tolerance=[self._tolerance(seen.row) for seen in self.random],
            factor=self._factors(),
            visible=self._visible(),
            influence=influence,
            still=still,
            detection=self.detection,
            cut_short=self.ended,
        )
