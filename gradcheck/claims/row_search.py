"""The search for what is wrong in rows that disagree with random directions.

Places outside the pattern are taken up, to be looked at like all others. In rows that are too full for that, the
entries at fault are found by the columns in smaller and smaller groups.
"""

import numpy as np

from gradcheck.claims import row_faults
from gradcheck.claims.entry_table import REFUTED
from gradcheck.claims.joint_looks import (
    of_outputs,
)
from gradcheck.claims.joint_moves import Way, halves, position_weights
from gradcheck.claims.pattern_detection import detect_pattern
from gradcheck.claims.sparsity import coloured
from gradcheck.claims.whole_rows import SUSPECT, WholeRows
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.records.arrays import Array, BoolArray, IntArray

#: How often rows that nothing explains are searched, and how often the groups are divided further.
SEARCHES_MOST, HALVINGS_MOST = 8, 3
#: Into how many parts the columns of a full row are divided, search by search.
PARTS_OF_FULL_ROWS = (8, 64)
#: A full row is not searched further if more than this share of its groups of columns disagree: most of it is wrong.
MOSTLY_WRONG = 0.7


class RowSearch(WholeRows):
    """Rows, and how they are searched."""

    __slots__ = ()

    def _search_single(self, flagged: BoolArray) -> Inquiry[None]:
        """Rows with a single fault: its column, by one more direction; places outside the pattern are taken up."""
        outputs = np.flatnonzero(flagged)
        weights = position_weights(self.table.shape[1])
        for way in (Way.BOTH, Way.INWARD):
            own = [one for one in self._disagreement() if one[0].way == way]
            if not own or self.ended:
                continue
            first = own[0]
            weighted = yield from self._along(first[0].row * weights, way, outputs)
            gap = weighted.value - self.table.product(weighted.row, self.table.best)
            slack = weighted.bound + self._tolerance(weighted.row)
            evidence = [(one.row, apart, spread) for one, apart, spread in own]
            rows, columns, outside = row_faults.single_faults(
                self.table, outputs, evidence, (gap, slack), weights, self.moves.along(way)
            )
            self.table.add(rows[outside], columns[outside])

    def _detect(self, rows: IntArray) -> Inquiry[IntArray]:
        """Take up every place at which these outputs are seen to depend on a variable; which rows were settled so."""
        columns = self.moves.way != Way.STILL
        counts = np.bincount(self.table.row, minlength=self.table.shape[0])[rows]
        detecting = detect_pattern(
            self.base,
            self.moves.size,
            columns,
            self.centre[rows],
            entries=float(np.median(counts)) if rows.size else 0.0,
            seed=self.seed,
        )
        found = yield from of_outputs(detecting, rows)
        self.detection = found
        self.table.add(rows[found.rows], found.columns)
        return rows if found.complete else rows[:0]

    def _search_in_groups(self, rows: IntArray, search: int) -> Inquiry[tuple[IntArray, IntArray]]:
        """Candidates (rows, columns) from three weightings of every group of columns, divided further at random."""
        n = self.table.shape[1]
        weights = position_weights(n)
        found: list[tuple[IntArray, IntArray]] = []
        for way in (Way.BOTH, Way.INWARD):
            columns = self.moves.along(way)
            if not columns.any():
                continue
            colouring = coloured(self.table.pattern(rows), columns)
            assert colouring is not None  # no limit was set
            parts = 2 ** min(search, HALVINGS_MOST)
            group = colouring.colour * parts + halves(n, self.seed + 77 * (search + 1), parts)
            for number in np.unique(group[columns]):
                members = columns & (group == number)
                plain = np.where(members, self.moves.size, 0.0)
                three = []
                for power in range(3):
                    seen = yield from self._along(plain * weights**power, way, rows)
                    three.append((seen.value[rows], seen.bound[rows]))
                    if self.ended:
                        return _joined(found)
                found.append(row_faults.faults_of_group(self.table, rows, members, plain, three, weights))
        return _joined(found)

    def _search_full_rows(self) -> Inquiry[None]:
        """Rows judged as wholes that disagree: their faults, with the columns in smaller and smaller groups."""
        searchable = ~self.by_entry & ~self._of_one_factor()
        rows = np.flatnonzero(self._disagreeing() & searchable)
        if rows.size == 0 or self.ended:
            return
        yield from self._accuse_single(rows)
        for parts in PARTS_OF_FULL_ROWS:
            rows = np.flatnonzero(self._disagreeing() & searchable)
            if rows.size == 0 or self.ended:
                return
            disagreeing = yield from self._accuse_in_groups(rows, parts)
            searchable &= disagreeing <= MOSTLY_WRONG * parts

    def _accuse_single(self, rows: IntArray) -> Inquiry[None]:
        weights = position_weights(self.table.shape[1])
        for way in (Way.BOTH, Way.INWARD):
            own = [one for one in self._disagreement() if one[0].way == way]
            if not own or self.ended:
                continue
            weighted = yield from self._along(own[0][0].row * weights, way, rows)
            gap = weighted.value - self.table.product(weighted.row, self.table.best)
            slack = weighted.bound + self._tolerance(weighted.row)
            evidence = [(one.row, apart, spread) for one, apart, spread in own]
            found, columns, _ = row_faults.single_faults(
                self.table, rows, evidence, (gap, slack), weights, self.moves.along(way)
            )
            gaps, slacks = own[0][1][found], own[0][2][found]
            self._accuse(found, columns, gaps / own[0][0].row[columns], slacks / np.abs(own[0][0].row[columns]))

    def _accuse_in_groups(self, rows: IntArray, parts: int) -> Inquiry[IntArray]:
        """Search the columns group by group; in how many groups each row (m,) disagrees."""
        disagreeing = np.zeros(self.centre.size, np.intp)
        n = self.table.shape[1]
        weights = position_weights(n)
        weight = self._weight
        for way in (Way.BOTH, Way.INWARD):
            columns = self.moves.along(way)
            if not columns.any():
                continue
            base_row = self.moves.random(columns, 1000 * self.seed + 500 + parts, weight)
            group = halves(n, self.seed + 31 * parts, parts)
            for number in range(parts):
                members = columns & (group == number)
                if not members.any():
                    continue
                plain = np.where(members, base_row, 0.0)
                evidence = []
                for row in (plain, plain * weights):
                    seen = yield from self._along(row, way, rows)
                    if self.ended:
                        return disagreeing
                    evidence.append(
                        (row, seen.value - self.table.product(row, self.table.best), seen.bound + self._tolerance(row))
                    )
                gap, slack = evidence[0][1], evidence[0][2]
                with np.errstate(invalid="ignore"):
                    apart = rows[np.isfinite(slack[rows]) & (np.abs(gap[rows]) > SUSPECT * slack[rows])]
                disagreeing[apart] += 1
                if apart.size == 0:
                    continue
                found, at, _ = row_faults.single_faults(
                    self.table, apart, evidence[:1], evidence[1][1:], weights, members
                )
                self._accuse(found, at, gap[found] / plain[at], slack[found] / np.abs(plain[at]))
        return disagreeing

    def _accuse(self, rows: IntArray, columns: IntArray, error: Array, spread: Array) -> None:
        """Take down faults of full rows, as refuted by one look; where several columns may be meant, all of them."""
        self.table.add(rows, columns)
        at = self.table.find(rows, columns)
        claimed = np.where(np.isfinite(self.table.claim[at]), self.table.claim[at], 0.0)
        self.table.value[at] = claimed + error
        self.table.bound[at] = spread
        self.table.verdict[at] = REFUTED


def _joined(found: list[tuple[IntArray, IntArray]]) -> tuple[IntArray, IntArray]:
    if not found:
        return np.empty(0, np.intp), np.empty(0, np.intp)
    return np.concatenate([rows for rows, _ in found]), np.concatenate([columns for _, columns in found])
