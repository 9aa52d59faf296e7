"""Every row of a Jacobian as a whole, along random directions that move all variables at once."""

from dataclasses import dataclass, field

import numpy as np

from gradcheck.claims.entry_table import CONFIRMED, REFUTED, UNDECIDED, EntryTable
from gradcheck.claims.joint_looks import (
    Accuracy,
    glance,
    of_outputs,
    second_glance,
)
from gradcheck.claims.joint_moves import PART_BITS, Moves, Way, room_of
from gradcheck.claims.pattern_detection import Detected
from gradcheck.claims.rule import ALLOWANCE, REFUTING_BOUNDS, ZERO_ALLOWANCE, ZERO_CLAIM
from gradcheck.claims.sparsity import Colouring, coloured, dense_rows
from gradcheck.claims.unused_entries import influence_along
from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.quick_look import CLOSE, CLOSE_DEVIATIONS, CLOSE_SHARE

#: Random directions, where the caller does not say how many.
RANDOM = 2
#: More groups of orthogonal columns than this cost more evaluations than a check by itself should; rows are then judged
#: as wholes.
GROUPS_MOST = 64
#: A row that a direction disagrees with by more than so many of its tolerances and bounds is searched.
SUSPECT = 3.0
#: Tolerance of a direction, in roots of the sum of squares of those of its terms.
DIRECTION_TOLERANCE = 4.0
#: Columns with large entries move less, but not by more than this, where rows are judged as wholes.
LEAST_WEIGHT = 2.0**-10


@dataclass(slots=True, kw_only=True, eq=False)
class RandomDirection:
    """What one random direction showed of all rows: values and bounds (m,)."""

    row: Array
    way: Way
    value: Array
    bound: Array


@dataclass(slots=True, eq=False)
class WholeRows:
    """The claim as a whole: what moves, which rows are looked at entry by entry, and what random directions show."""

    base: Array
    table: EntryTable
    centre: Array
    domain: Domain
    accuracy: Accuracy
    directions: int | str | None
    seed: int
    detect: bool
    moves: Moves = field(init=False)
    floor: Array = field(init=False)
    by_entry: BoolArray = field(init=False)
    random: list[RandomDirection] = field(default_factory=list)
    close: BoolArray = field(init=False)
    stray: BoolArray = field(init=False)
    detection: Detected | None = None
    ended: bool = False
    groups: int = 0

    def __post_init__(self) -> None:
        m, _ = self.table.shape
        self.moves = Moves.within(self.base, self.domain)
        largest = np.abs(self.centre)
        largest = np.where(largest > 0, largest, largest.max() if largest.max() > 0 else 1.0)
        self.floor = self.accuracy.unit_roundoff * largest
        self.close = np.zeros(m, bool)
        self.stray = np.zeros(m, bool)
        self.by_entry = self._rows_by_entry()

    def _rows_by_entry(self) -> BoolArray:
        """Rows whose entries are looked at one by one: all but those too full for it, or none."""
        m, _ = self.table.shape
        none = np.zeros(m, bool)
        if isinstance(self.directions, int) or len(self.table) == 0:
            return none
        pattern = self.table.pattern()
        if self.directions == "all":
            return ~none
        rows = ~dense_rows(pattern)
        if not rows.any():
            return none
        fullest = int(np.diff(pattern[np.flatnonzero(rows)].indptr).max(initial=0))
        if fullest > GROUPS_MOST:
            return none
        return rows if self._colours(np.flatnonzero(rows), GROUPS_MOST) is not None else none

    def _colours(self, rows: IntArray, most: int | None = None) -> list[tuple[Way, Colouring]] | None:
        """The groups of orthogonal columns on these rows: of those that move to both sides, and inwards."""
        pattern = self.table.pattern(rows)
        met = np.zeros(self.table.shape[1], bool)
        met[pattern.indices] = True
        found = []
        for way in (Way.BOTH, Way.INWARD):
            columns = self.moves.along(way) & met
            if columns.any():
                colouring = coloured(pattern, columns, most=most)
                if colouring is None:
                    return None
                found.append((way, colouring))
        return found

    @property
    def _weight(self) -> Array | None:
        """Powers of two that let columns of large entries move less, where rows are judged as wholes.

        Without them an entry that is small beside others of its row could be wrong unseen.
        """
        if self.by_entry.any():
            return None
        n = self.table.shape[1]
        size = np.abs(self.table.claim * self.moves.size[self.table.column])
        size = np.where(np.isfinite(size), size, 0.0)
        largest = np.zeros(self.table.shape[0])
        np.maximum.at(largest, self.table.row, size)
        share = size / np.where(largest > 0, largest, 1.0)[self.table.row]
        squares = np.bincount(self.table.column, weights=share**2, minlength=n)
        counts = np.bincount(self.table.column, weights=share > 0, minlength=n)
        typical = np.sqrt(squares / np.maximum(counts, 1))
        if not (typical > 0).any():
            return None
        small = np.quantile(typical[typical > 0], 0.01)
        with np.errstate(divide="ignore"):
            weight = np.where(typical > 0, small / typical, 1.0)
        return np.asarray(2.0 ** np.floor(np.log2(np.clip(weight, LEAST_WEIGHT, 1.0))))

    def _look_at_random(self) -> Inquiry[None]:
        count = self.directions if isinstance(self.directions, int) else RANDOM
        weight = self._weight
        for way in (Way.BOTH, Way.INWARD):
            which = self.moves.along(way)
            if not which.any():
                continue
            for k in range(count):
                row = self.moves.random(which, 1000 * self.seed + 2 * k + int(way), weight)
                everything = np.arange(self.centre.size)
                seen = yield from self._along(row, way, everything, wider=lambda seen: self._open_rows(seen) > 0)
                self.random.append(seen)
        whole = np.flatnonzero(~self.by_entry)
        if whole.size and not self.ended:
            yield from self._settle_whole_rows(whole)
        if len(self.table) == 0 and self.random and not self.ended:
            yield from self._look_for_stairs()

    def _look_for_stairs(self) -> Inquiry[None]:
        """Where nothing at all is claimed: an output that is flat here, on one of several levels, confirms no zero."""
        for seen in self.random:
            rows = seen.row[None, :]
            room = room_of(self.base, rows, self.domain, seen.way, bits=PART_BITS)
            found = yield from influence_along(self.base, rows, room, self.centre, self.base)
            seen.bound[found.stairs] = np.inf

    def _along(self, row: Array, way: Way, outputs: IntArray, *, wider: object = None) -> Inquiry[RandomDirection]:
        """Value ± bound of some outputs along one direction; of the others nothing."""
        rows, m = row[None, :], self.centre.size
        room = room_of(self.base, rows, self.domain, way, bits=PART_BITS)
        centre = self.centre[outputs]
        if way == Way.INWARD:
            heard = yield from of_outputs(finite_difference(self.base, rows, room, centre), outputs)
        else:
            heard, look = yield from of_outputs(glance(self.base, rows, room, centre), outputs)
            self.ended |= look.cut_short
            seen = self._spread(row, way, outputs, heard.value[0], heard.bound[0], m)
            if callable(wider) and wider(seen) and not self.ended:
                again = yield from of_outputs(second_glance(self.base, rows, room, centre, look, np.arange(1)), outputs)
                better = again.bound[0] < heard.bound[0]
                value = np.where(better, again.value[0], heard.value[0])
                return self._spread(row, way, outputs, value, np.fmin(again.bound[0], heard.bound[0]), m)
            return seen
        return self._spread(row, way, outputs, heard.value[0], heard.bound[0], m)

    @staticmethod
    def _spread(row: Array, way: Way, outputs: IntArray, value: Array, bound: Array, m: int) -> RandomDirection:
        values, bounds = np.full(m, np.nan), np.full(m, np.inf)
        values[outputs], bounds[outputs] = value, bound
        return RandomDirection(row=row, way=way, value=values, bound=bounds)

    def _open_rows(self, seen: RandomDirection) -> int:
        gap = np.abs(seen.value - self.table.product(seen.row, self.table.best))
        with np.errstate(invalid="ignore"):
            return int((~(gap + seen.bound <= self._tolerance(seen.row))).sum())

    def _settle_whole_rows(self, whole: IntArray) -> Inquiry[None]:
        """Rows that are judged as wholes get the whole witness where the quick looks leave them open."""
        for seen in self.random:
            gap = np.abs(seen.value - self.table.product(seen.row, self.table.best))[whole]
            with np.errstate(invalid="ignore"):
                open_ = whole[~(gap + seen.bound[whole] <= self._tolerance(seen.row)[whole])]
            if open_.size == 0:
                continue
            rows = seen.row[None, :]
            room = room_of(self.base, rows, self.domain, seen.way, bits=PART_BITS)
            heard = yield from of_outputs(finite_difference(self.base, rows, room, self.centre[open_]), open_)
            better = heard.bound[0] < seen.bound[open_]
            seen.value[open_] = np.where(better, heard.value[0], seen.value[open_])
            # A quick look does not know of the noise inside the model; the whole witness does.
            seen.bound[open_] = np.where(better, heard.bound[0], np.fmax(seen.bound[open_], heard.bound[0]))

    def _tolerance(self, row: Array) -> Array:
        """(m,): what may separate a right claim from the truth along a direction."""
        table = self.table
        with np.errstate(invalid="ignore"):
            size = np.where(np.isfinite(table.claim), np.abs(table.claim), 0.0)
        move = np.abs(self.moves.size[table.column])
        typical = np.where(move > 0, self.moves.typical[table.column] * move, np.inf)
        rounding = self.floor[table.row] / typical
        allowance = np.where(size <= ZERO_CLAIM * rounding, ZERO_ALLOWANCE, ALLOWANCE)
        own = self.accuracy.abs_tol + self.accuracy.rel_tol * size + allowance * rounding
        # A row without entries is claimed zero as a whole.
        empty = np.bincount(table.row, minlength=self.centre.size) == 0
        zero = np.where(empty, self.accuracy.abs_tol * np.abs(row).max() + ZERO_ALLOWANCE * self.floor, 0.0)
        return DIRECTION_TOLERANCE * (table.root_of_squares(row, own) + zero)

    def _disagreement(self) -> list[tuple[RandomDirection, Array, Array]]:
        """Each random direction with what the best known values leave unexplained, and what may be: (m,) each."""
        best, error = self.table.best, self.table.error
        return [
            (
                seen,
                seen.value - self.table.product(seen.row, best),
                seen.bound + self._tolerance(seen.row) + 2 * self.table.root_of_squares(seen.row, error),
            )
            for seen in self.random
        ]

    def _disagreeing(self) -> BoolArray:
        """Rows (m,) that some random direction disagrees with."""
        rows = np.zeros(self.centre.size, bool)
        for _, gap, slack in self._disagreement():
            with np.errstate(invalid="ignore"):
                rows |= np.isfinite(slack) & (np.abs(gap) > SUSPECT * slack)
        return rows

    def _look_closely(self) -> Inquiry[None]:
        """Rows whose slope close to the point is another than at wider steps: there may be a narrow feature."""
        seen = next((one for one in self.random if one.way == Way.BOTH), None)
        if seen is None or self.ended:
            return
        request = Request(base=self.base, directions=seen.row[None, :], offsets=np.array([[CLOSE, -CLOSE]]))
        reply = yield request
        up, down = reply.values[0]
        with np.errstate(invalid="ignore", over="ignore"):
            slope = (up - down) / (2 * CLOSE)
            claimed = np.where(np.isfinite(self.table.claim), self.table.claim, 0.0)
            whole = self.table.product(np.abs(seen.row), np.abs(claimed))
            rounding = CLOSE_DEVIATIONS * np.finfo(float).eps * (np.abs(self.centre) + whole) / CLOSE
            gap = np.abs(slope - seen.value)
            self.close = np.isfinite(gap) & (gap > rounding + seen.bound + CLOSE_SHARE * (whole + np.abs(seen.value)))

    def _of_one_factor(self) -> BoolArray:
        """Rows (m,) that are wrong by one factor, as all random directions have it."""
        result: BoolArray = np.isfinite(self._factors())
        return result

    def _factors(self) -> Array:
        """(m,): the factor by which the claim differs from every random direction; NaN where there is none, or is 1."""
        claimed = np.where(np.isfinite(self.table.claim), self.table.claim, 0.0)
        ratios, slacks = [], []
        for seen in self.random:
            claim = self.table.product(seen.row, claimed)
            with np.errstate(divide="ignore", invalid="ignore"):
                ratios.append(claim / seen.value)
                slacks.append(
                    (seen.bound + self._tolerance(seen.row)) / np.abs(seen.value) * np.fmax(1.0, np.abs(ratios[-1]))
                )
        if len(ratios) < RANDOM:
            return np.full(self.centre.size, np.nan)
        ratio, slack = np.array(ratios), np.array(slacks)
        with np.errstate(invalid="ignore"):
            same = (np.abs(ratio - ratio[0]) <= 2 * (slack + slack[0])).all(axis=0) & (slack.max(axis=0) < 1e-3)
            off = np.abs(ratio[0] - 1) > SUSPECT * slack[0]
        return np.where(same & off & (ratio[0] != 0), ratio[0], np.nan)

    def _row_verdicts(self) -> np.ndarray[tuple[int, ...], np.dtype[np.int8]]:
        """Confirmed where every random direction agrees with the claim itself, refuted where one does not."""
        table = self.table
        claimed = np.where(np.isfinite(table.claim), table.claim, np.nan)
        confirmed = np.full(self.centre.size, bool(self.random))
        refuted = np.zeros(self.centre.size, bool)
        for seen in self.random:
            allowed = self._tolerance(seen.row)
            terms = claimed * seen.row[table.column]
            terms = np.where(seen.row[table.column] == 0, 0.0, terms)
            gap = np.abs(seen.value - np.bincount(table.row, weights=terms, minlength=self.centre.size))
            with np.errstate(invalid="ignore"):
                confirmed &= np.isfinite(seen.bound) & (gap + seen.bound <= allowed)
                refuted |= np.isfinite(seen.bound) & (gap > allowed + REFUTING_BOUNDS * seen.bound)
        return np.where(refuted, REFUTED, np.where(confirmed, CONFIRMED, UNDECIDED)).astype(np.int8)

    def _visible(self) -> float:
        """The smallest single error that the random directions would have seen in every row that they confirm.

        As a share of the largest term of its row; NaN where nothing was confirmed.
        """
        table = self.table
        own = np.abs(self.moves.size[table.column])
        largest = np.zeros(self.centre.size)
        np.maximum.at(largest, table.row, np.where(np.isfinite(table.claim), np.abs(table.claim), 0.0) * own)
        worst = np.nan
        rows = (self._row_verdicts() == CONFIRMED) & (largest > 0)
        for seen in self.random:
            if seen.way != Way.BOTH or not rows.any():
                continue
            # An error of one entry is off by at least half of its move.
            seen_from = 2 * (2 * self._tolerance(seen.row) + 4 * seen.bound)[rows]
            worst = np.fmax(worst, float((seen_from / largest[rows]).max()))
        return float(worst)
