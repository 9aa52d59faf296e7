"""Entry by entry: all of them by groups of orthogonal columns, doubtful and refuted ones in directions of their own."""

from collections.abc import Iterator

import numpy as np

from gradcheck.claims.entry_table import CONFIRMED, REFUTED, UNDECIDED
from gradcheck.claims.examination import OTHER_WIDTH
from gradcheck.claims.joint_looks import (
    Accuracy,
    Slots,
    look_along,
    of_outputs,
    room_of_one,
    second_look,
    whole_look,
)
from gradcheck.claims.joint_moves import PART_BITS, Way, room_of, shuffled
from gradcheck.claims.row_search import RowSearch
from gradcheck.claims.sparsity import Colouring, coloured
from gradcheck.claims.whole_rows import SUSPECT
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.records.arrays import Array, IntArray
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import Room

#: Slots (rows times directions) of one round, which bounds the memory.
SLOTS_OF_A_ROUND = 200_000
#: Looks at single entries take no more directions than this.
GROUPS_AGAIN_MOST = 256
#: What is said of entries beyond that.
TOO_MANY = "suspect: its row holds too many faults for each to get a look of its own"
#: What is said of entries of rows in which something else is wrong that was not found.
UNEXPLAINED = "its row depends on variables outside the pattern that were not found, which may be seen in this entry"


class SlotLooks(RowSearch):
    """Rows, and how their entries are looked at."""

    __slots__ = ()

    def _look_by_groups(self, rows: IntArray) -> Inquiry[None]:
        """Every entry of these rows, by directions of orthogonal columns."""
        colours = self._colours(rows)
        assert colours is not None  # no limit was set
        if rows.size == int(self.by_entry.sum()):
            self.groups = sum(colouring.count for _, colouring in colours)
        most = max(1, SLOTS_OF_A_ROUND // rows.size)
        for way, colouring in colours:
            for first in range(0, colouring.count, most):
                groups = np.arange(first, min(first + most, colouring.count))
                yield from self._look_at_groups(rows, way, colouring, groups)
                if self.ended:
                    return

    def _look_at_groups(self, rows: IntArray, way: Way, colouring: Colouring, groups: IntArray) -> Inquiry[None]:
        directions = self.moves.groups(colouring.colour, groups)
        room = room_of(self.base, directions, self.domain, way)
        entries, place, slot = self._slots_of(rows, colouring.colour, groups)
        size = self.moves.size[self.table.column[entries]]
        shape = (rows.size, groups.size)
        claim, typical, moved, filled = np.zeros(shape), np.ones(shape), np.ones(shape), np.zeros(shape, bool)
        claim[place, slot] = self.table.claim[entries] * size
        typical[place, slot] = self.moves.typical[self.table.column[entries]]
        moved[place, slot] = np.abs(size)
        filled[place, slot] = True
        looking = look_along(
            self.base,
            directions,
            room,
            claim,
            self.centre[rows],
            typical,
            moved,
            self.accuracy,
        )
        seen = yield from of_outputs(looking, rows)
        seen.confirmed[self.close[rows]] = False
        self._take_down(entries, size, seen, place, slot)
        with np.errstate(invalid="ignore"):
            odd = ~filled & ~seen.confirmed & (np.abs(seen.value) > SUSPECT * seen.bound) & np.isfinite(seen.bound)
        self.stray[rows] |= odd.any(axis=1)
        self.ended |= seen.cut_short

    def _slots_of(self, rows: IntArray, colour: IntArray, groups: IntArray) -> tuple[IntArray, IntArray, IntArray]:
        """Entries of these rows in these groups, and where each stands: which of the rows, which of the groups."""
        place = np.full(self.table.shape[0], -1)
        place[rows] = np.arange(rows.size)
        own = colour[self.table.column]
        entries = np.flatnonzero((place[self.table.row] >= 0) & (own >= groups[0]) & (own <= groups[-1]))
        return entries, place[self.table.row[entries]], own[entries] - groups[0]

    def _take_down(self, entries: IntArray, size: Array, seen: Slots, place: IntArray, slot: IntArray) -> None:
        table, at = self.table, (place, slot)
        table.value[entries] = seen.value[at] / size
        table.bound[entries] = seen.bound[at] / np.abs(size)
        lower, upper = seen.left[at] / size, seen.right[at] / size
        table.left[entries] = np.where(size < 0, upper, lower)
        table.right[entries] = np.where(size < 0, lower, upper)
        table.verdict[entries] = np.where(seen.refuted[at], REFUTED, np.where(seen.confirmed[at], CONFIRMED, UNDECIDED))
        table.reason[entries] = seen.reason[at]

    def _settle_open(self) -> Inquiry[None]:
        """What quick looks left open gets the whole witness: only the columns in question move."""
        table = self.table
        movable = (table.verdict == UNDECIDED) & (self.moves.way[table.column] != Way.STILL)
        open_ = np.flatnonzero(movable & self.by_entry[table.row] & (table.reason == ""))
        for own, direction, way in self._divided(open_):
            arrangement = self._arranged(own, direction, way)
            failing = ~np.isfinite(table.bound[own]) if way == Way.BOTH else np.zeros(own.size, bool)
            looking = whole_look(*arrangement, failing)
            seen = yield from of_outputs(looking, table.row[own])
            self._take_down(
                own, self.moves.size[table.column[own]], seen, np.arange(own.size), np.zeros(own.size, np.intp)
            )
            self.ended |= seen.cut_short
            if self.ended:
                return

    def _look_again(self) -> Inquiry[None]:
        """Refuted entries once more, at other steps."""
        # In other groups than before: what a place outside the pattern adds to an entry is not added again.
        order = shuffled(self.table.shape[1], self.seed + 13)
        for own, direction, way in self._divided(np.flatnonzero(self.table.verdict == REFUTED), order):
            yield from self._look_again_along(own, direction, way)
        yield from self._look_at_rows_again()

    def _look_at_rows_again(self) -> Inquiry[None]:
        """Rows that nothing explains get a second look along the directions; their entries cannot be judged.

        Along every direction that disagrees: each of them would refute the row by itself.
        """
        table = self.table
        for seen, gap, slack in self._disagreement():
            with np.errstate(invalid="ignore"):
                rows = np.flatnonzero(np.isfinite(slack) & (np.abs(gap) > SUSPECT * slack))
            if rows.size == 0 or self.ended:
                continue
            direction = seen.row[None, :]
            room = room_of(self.base, direction, self.domain, seen.way, bits=PART_BITS)
            looking = finite_difference(
                self.base, direction, room_of_one(room, 0, scale=OTHER_WIDTH), self.centre[rows]
            )
            heard = yield from of_outputs(looking, rows)
            seen.value[rows], seen.bound[rows] = heard.value[0], np.fmax(heard.bound[0], seen.bound[rows])
        unexplained = self._disagreeing()
        accused = (table.verdict == REFUTED) & unexplained[table.row] & self.by_entry[table.row]
        table.verdict[accused] = UNDECIDED
        table.reason[accused] = UNEXPLAINED

    def _divided(self, entries: IntArray, order: IntArray | None = None) -> Iterator[tuple[IntArray, Array, Way]]:
        """These entries in groups that can be looked at together, each with its direction (1, n).

        Only their columns move, and in none of their rows two of them.
        """
        table = self.table
        if entries.size == 0:
            return
        rows = np.unique(table.row[entries])
        meant = np.zeros(table.shape[1], bool)
        meant[table.column[entries]] = True
        pattern = table.pattern(rows, meant[table.column])
        for way in (Way.BOTH, Way.INWARD):
            columns = meant & self.moves.along(way)
            if not columns.any():
                continue
            colouring = coloured(pattern, columns, order=order)
            assert colouring is not None  # no limit was set
            own = colouring.colour[table.column[entries]]
            for group in range(min(colouring.count, GROUPS_AGAIN_MOST)):
                if (own == group).any():
                    direction = self.moves.groups(colouring.colour, np.array([group]))
                    yield entries[own == group], direction, way
            left = entries[own >= GROUPS_AGAIN_MOST]
            table.verdict[left] = UNDECIDED
            table.reason[left] = TOO_MANY

    def _arranged(
        self, own: IntArray, direction: Array, way: Way, *, scale: float = 1.0
    ) -> tuple[Array, Array, Room, Array, Array, Array, Array, Accuracy]:
        """What a look at these entries along a direction needs to know."""
        table = self.table
        columns = table.column[own]
        size = self.moves.size[columns]
        room = room_of_one(room_of(self.base, direction, self.domain, way), 0, scale=scale)
        claim, typical = (table.claim[own] * size)[:, None], self.moves.typical[columns][:, None]
        return (
            self.base,
            direction,
            room,
            claim,
            self.centre[table.row[own]],
            typical,
            np.abs(size)[:, None],
            self.accuracy,
        )

    def _look_again_along(self, own: IntArray, direction: Array, way: Way) -> Inquiry[None]:
        table = self.table
        size = self.moves.size[table.column[own]]
        one = np.ones((own.size, 1), bool)
        lower, upper = table.left[own] * size, table.right[own] * size
        first = Slots(
            value=(table.value[own] * size)[:, None],
            bound=(table.bound[own] * np.abs(size))[:, None],
            left=np.where(size < 0, upper, lower)[:, None],
            right=np.where(size < 0, lower, upper)[:, None],
            confirmed=~one,
            refuted=one,
            reason=np.full((own.size, 1), "", dtype=object),
            cut_short=False,
        )
        looking = second_look(
            *self._arranged(own, direction, way, scale=OTHER_WIDTH), first, ~self.by_entry[table.row[own]]
        )
        seen = yield from of_outputs(looking, table.row[own])
        self._take_down(own, size, seen, np.arange(own.size), np.zeros(own.size, np.intp))
