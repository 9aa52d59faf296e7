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

from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from gradcheck.claims import row_faults
from gradcheck.claims.entry_table import CONFIRMED, REFUTED, UNDECIDED, EntryTable
from gradcheck.claims.examination import OTHER_WIDTH
from gradcheck.claims.joint_looks import (
    Accuracy,
    Slots,
    glance,
    look_along,
    of_outputs,
    room_of_one,
    second_glance,
    second_look,
    whole_look,
)
from gradcheck.claims.joint_moves import PART_BITS, Moves, Way, halves, position_weights, room_of, shuffled
from gradcheck.claims.pattern_detection import PLACES_MOST, Detected, detect_pattern
from gradcheck.claims.rule import ALLOWANCE, REFUTING_BOUNDS, ZERO_ALLOWANCE, ZERO_CLAIM
from gradcheck.claims.sparsity import Colouring, coloured, dense_rows
from gradcheck.claims.unused_entries import Influence, influence_along
from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.difference_reasons import NO_ROOM, SPENT
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.quick_look import CLOSE, CLOSE_DEVIATIONS, CLOSE_SHARE
from gradcheck.witnesses.steps import Room

#: Random directions, where the caller does not say how many.
RANDOM = 2
#: More groups of orthogonal columns than this cost more evaluations than a check by itself should; rows are then judged
#: as wholes.
GROUPS_MOST = 64
#: Slots (rows times directions) of one round, which bounds the memory.
SLOTS_OF_A_ROUND = 200_000
#: A row that a direction disagrees with by more than so many of its tolerances and bounds is searched.
SUSPECT = 3.0
#: Tolerance of a direction, in roots of the sum of squares of those of its terms.
DIRECTION_TOLERANCE = 4.0
#: How often rows that nothing explains are searched, and how often the groups are divided further.
SEARCHES_MOST, HALVINGS_MOST = 8, 3
#: Fewer variables than this are searched as cheaply one by one.
DETECTED_LEAST = 600
#: So many rows, and such a share of all, are many.
MANY_ROWS, MANY_ROWS_SHARE = 30, 0.1
#: Into how many parts the columns of a full row are divided, search by search.
PARTS_OF_FULL_ROWS = (8, 64)
#: Looks at single entries take no more directions than this.
GROUPS_AGAIN_MOST = 256
#: What is said of entries beyond that.
TOO_MANY = "suspect: its row holds too many faults for each to get a look of its own"
#: What is said of entries of rows in which something else is wrong that was not found.
UNEXPLAINED = "its row depends on variables outside the pattern that were not found, which may be seen in this entry"
#: A full row is not searched further if more than this share of its groups of columns disagree: most of it is wrong.
MOSTLY_WRONG = 0.7
#: Columns with large entries move less, but not by more than this, where rows are judged as wholes.
LEAST_WEIGHT = 2.0**-10


@dataclass(slots=True, kw_only=True, eq=False)
class RandomDirection:
    """What one random direction showed of all rows: values and bounds (m,)."""

    row: Array
    way: Way
    value: Array
    bound: Array


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


@dataclass(slots=True, eq=False)
class _Examination:
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

    # --- the plan ----------------------------------------------------------------------------------------------------

    def _rows_by_entry(self) -> BoolArray:
        """Rows whose entries are looked at one by one: all but those too full for it, or none."""
        m, _ = self.table.shape
        none = np.zeros(m, bool)
        if isinstance(self.directions, int):
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

    # --- random directions -------------------------------------------------------------------------------------------

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
        return DIRECTION_TOLERANCE * table.root_of_squares(row, own)

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

    # --- places outside the pattern ----------------------------------------------------------------------------------

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

    # --- entry by entry ----------------------------------------------------------------------------------------------

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
        """Rows that nothing explains get a second look along a random direction; their entries cannot be judged."""
        table = self.table
        rows = np.flatnonzero(self._disagreeing())
        for seen in self.random[:1] if rows.size and not self.ended else ():
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

    # --- the outcome -------------------------------------------------------------------------------------------------

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


def _joined(found: list[tuple[IntArray, IntArray]]) -> tuple[IntArray, IntArray]:
    if not found:
        return np.empty(0, np.intp), np.empty(0, np.intp)
    return np.concatenate([rows for rows, _ in found]), np.concatenate([columns for _, columns in found])
