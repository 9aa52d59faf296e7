"""The noise of a model's values along directions: how large it is, and of which kind.

Sixteen values around the point are fitted by polynomials; the interval shrinks until the coefficients end in a sample
that does not decay. A difference table of equally spaced values, much closer together, says whether the same noise is
there on a smaller scale, and adds to the sample. Where the noise is above rounding, seven values closer than the steps
of single precision tell what is noise at every scale from what is smooth from close by: steps, the teeth of a truncated
iteration, or no noise at all but a wave too fast for the first look. The point itself is evaluated again, at once and
after other points. The digits of all values are read.

Sources: Hamming's difference tables and the rule of Moré & Wild 2011 (`difference_table`); discrete orthogonal
polynomials, Forsythe 1957 (`noise_clusters`).
"""

from collections.abc import Generator

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Reply, Request
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.noise import NoiseKind
from gradcheck.witnesses.difference_table import difference_table
from gradcheck.witnesses.noise_clusters import ClusterReading, beyond_cubic, read_cluster
from gradcheck.witnesses.noise_kind import digits_of, explained_by_digits, kind_from_close_by, rounding_limit
from gradcheck.witnesses.noise_reading import NoiseReading
from gradcheck.witnesses.steps import Room

#: Points of a cluster, spread like Chebyshev's but off any lattice, so that rounding errors are independent.
NODES = np.cos((np.arange(16) + 0.5) * np.pi / 16) * (1.0 - 0.02 * np.abs(np.sin(1.0 + 37.0 * np.arange(16) ** 2)))
#: Half-width of the first cluster, in units of the variable's size.
FIRST_WIDTH = 0.0917
#: A variable is tiny, its size unknown, if it may be this much larger; an interval so much narrower than that hides
#: coarse steps, and a wider one is looked at as well.
TINY, NARROW = 10.0, 0.01
SHRINKS_MOST = 5
WIDER_MOST = 3
#: Spacing of the difference table, in units of the cluster's half-width, and its points besides the centre.
TABLE_SPACING, TABLE_POINTS = 0.00377, 8
#: Independent samples that a settled table is worth.
TABLE_SAMPLE = 4
#: Levels of two scales that agree within this factor are one noise.
AGREE = 4.0
#: Places of the finest look, and their distance in units of the variable's size.
FINE_PLACES, FINE = np.arange(7) - 3.0 + np.array([0.11, -0.17, 0.05, 0.0, 0.13, -0.08, 0.19]), 1.37e-11
#: What rounding does to the finest slope, in spacings of floating-point numbers over the width of that look.
FINE_BLUR = 10.0
#: The finest values are quiet if they show so much less noise.
QUIET = 30.0
#: The interval shrinks by this each time the model fails; after that the side where it works is tried.
ESCAPE, ESCAPES_MOST = 1.0 / 16.0, 3
#: Nodes of the cluster that are evaluated again, last ones first; among them the point itself.
AGAIN = [11, NODES.size, 2]
#: The least half-width of a cluster, in units of the grain of x: its points must not coincide.
LEAST_GRAINS = 256.0
#: Factors by which an interval shrinks.
SHRINK = 0.12, 0.6
#: A slope so much larger from close by than across the cluster may belong to a wave.
WAVE_STEEPNESS = 30.0
#: Half-width on which a wave of that slope and of the size of the noise is surely resolved, in units of noise / slope.
WAVE_REACH = 6.0
#: Second looks: clusters so much narrower each time, the one beside so far away in units of the first half-width, at
#: most so many times; noise is the same there within a factor.
PLACE_WIDTH, ELSEWHERE, LOOKS_MOST, SAME = 0.2, 0.55, 6, 3.0
#: Noise that is more than this part of how much the function varies, and of its values, has to show twice.
LARGE_PART, FAINT = 0.1, 1e-4
#: What a wide look may hear, as a part of how much the function varies: more may be a wave that is far too fast for it.
FAIR_PART = 1e-3
#: Between its steps a rounded quantity stands still: the slope from close by misses that of the cluster by more than
#: this share of the slope across it, and than this many times what noise does to it.
SLOPE_MISSED, SLOPE_BLUR = 0.02, 10.0
#: Where the finest look is, in units of the cluster's half-width.
FINE_PLACE = 0.0041

#: What is known of each output along each direction once it has its sample.
_HEARD = ("level", "width", "slope", "variation", "sample")


def noise(
    base: Array, directions: Directions, room: Room, centre: Array, *, apart: Array | None = None
) -> Inquiry[NoiseReading]:
    """Measure the noise of the values around a point; about 30 evaluations for one direction are usual.

    Parameters
    ----------
    base : ndarray, shape (n,)
    directions : ndarray
        Coordinate indices (d,) or rows (d, n).
    room : Room
        How far one may step along each direction.
    centre : ndarray, shape (m,)
        Finite values at `base`.
    apart : ndarray, shape (m,), optional
        Largest difference between values at `base`, where that has been asked already; else the point and two others
        are evaluated again.

    Returns
    -------
    NoiseReading
        A kind ``not examined`` and a level NaN where the budget ended, the bounds leave no room, or the model fails
        all around. Values that do not change at all have the level of a correct rounding.

    Notes
    -----
    A ripple that is smooth from close by, and there much steeper than the function, is no noise but a wave. What no
    value on the interval shows (a jump beside it, the smooth bias of a loose tolerance) is not heard.

    Examples
    --------
    >>> import numpy as np
    >>> from gradcheck.problem.domain import domain_of
    >>> from gradcheck.witnesses.steps import room_along
    >>> x, along = np.array([0.7]), np.array([0])
    >>> inquiry = noise(x, along, room_along(x, along, domain_of(x)), np.sin(x))
    >>> next(inquiry).offsets.tolist()  # the point itself, twice
    [[0.0, 0.0]]
    """
    return (yield from _Listening(base, directions, room, centre, apart).run())


class _Listening:
    """The rounds of one inquiry; all directions go through them together. Arrays are (d,) or (d, m)."""

    def __init__(self, base: Array, directions: Directions, room: Room, centre: Array, apart: Array | None) -> None:
        self.base, self.directions, self.room, self.centre = base, directions, room, centre
        shape = len(directions), centre.size
        narrow, roomier = np.minimum(room.below, room.above), np.maximum(room.below, room.above)
        wanted = FIRST_WIDTH * room.scale
        both = narrow >= 0.1 * np.minimum(wanted, roomier)
        self.side = np.where(both, 0, np.where(room.above >= room.below, 1, -1))
        self.sign = np.where(room.above >= room.below, 1.0, -1.0)
        self.reach = np.where(both, narrow, roomier)
        self.half = np.minimum(wanted, self.reach)
        self.alive = self.half > LEAST_GRAINS * room.grain
        self.escapes = np.zeros(shape[0], dtype=np.intp)
        self.offsets = np.zeros((shape[0], NODES.size + 1))
        self.values = np.tile(centre, (shape[0], NODES.size + 1, 1))
        self.level, self.width = np.full(shape, np.nan), np.full(shape, np.nan)
        self.slope, self.variation, self.sample = np.zeros(shape), np.zeros(shape), np.zeros(shape)
        self.largest = np.tile(np.abs(centre), (shape[0], 1))
        self.fine_slope, self.fine_blur, self.quiet = np.zeros(shape), np.zeros(shape), np.zeros(shape, bool)
        self.repeats = apart is None
        self.apart = np.full(shape[1], np.nan) if apart is None else apart
        self.heard: list[list[Array]] = [[centre[None, :]] for _ in range(shape[0])]
        self.spent = 0

    def run(self) -> Generator[Request, Reply, NoiseReading]:
        if self.repeats:
            yield from self._repeated(0, np.zeros(2), np.tile(self.centre, (2, 1)))
        yield from self._clusters(np.tile(self.alive[:, None], (1, self.centre.size)), SHRINKS_MOST + ESCAPES_MOST)
        yield from self._wider()
        yield from self._tables()
        yield from self._close_by()
        yield from self._doubts()
        if self.repeats and self.alive.any():
            row = int(np.argmax(self.alive))
            yield from self._repeated(row, self.offsets[row, AGAIN], self.values[row, AGAIN])
        return self._reading()

    # --- asking ----------------------------------------------------------------------------------------------------

    def _ask(self, rows: IntArray, offsets: Array, *, fresh: bool = False) -> Generator[Request, Reply, Reply]:
        """Values at offsets (d, k); a direction that is refused is not asked about again."""
        reply = yield Request(base=self.base, directions=self.directions[rows], offsets=offsets, fresh=fresh)
        self.spent += reply.spent
        self.alive[rows[reply.refused.any(axis=1)]] = False
        return reply

    def _realised(self, rows: IntArray, offsets: Array) -> Array:
        """Displacements as rounding leaves them, for coordinates."""
        if self.directions.ndim == 2:
            return offsets
        x = self.base[self.directions[rows]][:, None]
        return np.asarray((x + offsets) - x)

    def _repeated(self, row: int, offsets: Array, before: Array) -> Generator[Request, Reply, None]:
        """Evaluate again, without any cache, what gave the values `before`."""
        reply = yield from self._ask(np.array([row]), offsets[None, :], fresh=True)
        answered = ~reply.refused[0]
        if answered.any():
            with np.errstate(invalid="ignore"):
                gaps = np.where(reply.values[0] == before, 0.0, np.abs(reply.values[0] - before))
            self.apart = np.fmax(self.apart, np.nan_to_num(gaps[answered], nan=0.0).max(axis=0))

    # --- clusters --------------------------------------------------------------------------------------------------

    def _clusters(self, waiting: BoolArray, most: int) -> Generator[Request, Reply, None]:
        """Clusters on shrinking intervals until the outputs that wait (d, m) have their sample."""
        waiting = waiting.copy()
        for _ in range(most):
            rows = np.flatnonzero(waiting.any(axis=1) & self.alive)
            if rows.size == 0:
                return
            rows = yield from self._cluster(rows, self.half[rows])
            if rows.size == 0:
                continue
            reading = self._read(rows)
            taken = waiting[rows] & reading.settled
            self._take(rows, reading, taken)
            waiting[rows] &= ~taken
            self._shrink(rows, reading, waiting[rows])

    def _cluster(self, rows: IntArray, half: Array, *, escape: bool = True) -> Generator[Request, Reply, IntArray]:
        """Values on clusters of these half-widths; the directions that have all of them."""
        side = self.side[rows, None]
        nodes = np.where(side == 0, NODES, side * (1.0 + NODES) / 2.0)
        offsets = self._realised(rows, half[:, None] * nodes)
        reply = yield from self._ask(rows, offsets)
        whole = np.asarray(reply.finite.all(axis=1))
        for place, row in enumerate(rows):
            if whole[place]:
                self.offsets[row, :-1], self.values[row, :-1] = offsets[place], reply.values[place]
                self.heard[row].append(reply.values[place])
            elif escape:
                self._escape(int(row), reply.finite[place], offsets[place])
        self.largest[rows[whole]] = np.abs(self.values[rows[whole]]).max(axis=1)
        return rows[whole]

    def _escape(self, row: int, finite: BoolArray, offsets: Array) -> None:
        """The model failed at some node: a smaller interval, then the side where it works."""
        self.escapes[row] += 1
        self.half[row] *= ESCAPE
        failed = [bool((~finite & (offsets * sign > 0)).any()) for sign in (-1, 1)]
        if self.escapes[row] == ESCAPES_MOST - 1 and self.side[row] == 0 and failed[0] != failed[1]:
            self.side[row] = 1 if failed[0] else -1
            self.sign[row] = self.side[row]
            self.half[row] = min(FIRST_WIDTH * self.room.scale[row], self.reach[row])
        elif self.escapes[row] > ESCAPES_MOST:
            self.alive[row] = False

    def _take(self, rows: IntArray, reading: ClusterReading, taken: BoolArray) -> None:
        width = np.broadcast_to(self.half[rows, None], taken.shape)
        found = reading.level, width, reading.slope / width, reading.variation, reading.sample
        for name, new in zip(_HEARD, found, strict=True):
            mine = getattr(self, name)
            mine[rows] = np.where(taken, new, mine[rows])

    def _shrink(self, rows: IntArray, reading: ClusterReading, waiting: BoolArray) -> None:
        """Smaller intervals where a sample is missing, as if what is left over decayed with the degree of the fit."""
        floor = np.spacing(reading.largest)
        ratio = np.clip((floor / np.maximum(reading.tail, floor)) ** (1 / 13), *SHRINK)
        ratio = np.where(waiting, ratio, 1.0).min(axis=1)
        self.half[rows] *= ratio
        self.alive[rows] &= self.half[rows] > LEAST_GRAINS * self.room.grain[rows]

    def _wider(self) -> Generator[Request, Reply, None]:
        """Where the variable is tiny and its size unknown, an interval as wide as it may be shows coarse steps."""
        wide = np.minimum(FIRST_WIDTH * self.room.widest, self.reach)
        tiny = self.room.widest > TINY * self.room.scale
        rows = np.flatnonzero(self.alive & tiny & (self.half < NARROW * wide))
        if rows.size == 0:
            return
        narrow, largest, waiting = self.half.copy(), self.largest.copy(), np.zeros_like(self.quiet)
        waiting[rows] = True
        self.half[rows] = wide[rows]
        for _ in range(WIDER_MOST):
            rows = yield from self._cluster(rows, self.half[rows], escape=False)
            if rows.size == 0:
                break
            reading = self._read(rows)
            # A wave that is far too fast for so wide a look leaves nothing but noise.
            fair = (reading.level < FAIR_PART * reading.variation) & (reading.largest < TINY * largest[rows])
            with np.errstate(invalid="ignore"):
                louder = (reading.level > AGREE * self.level[rows]) | ~(
                    self.level[rows] < FAIR_PART * self.variation[rows]
                )
            self._take(rows, reading, waiting[rows] & reading.settled & fair & louder)
            waiting[rows] &= ~reading.settled
            self._shrink(rows, reading, waiting[rows])
            rows = rows[waiting[rows].any(axis=1)]
        heard_wide = self.width > AGREE * narrow[:, None]
        self.largest = np.where(heard_wide, self.largest, largest)
        self.half = np.where(heard_wide.any(axis=1), np.where(heard_wide, self.width, 0.0).max(axis=1), narrow)

    def _read(self, rows: IntArray) -> ClusterReading:
        half = self.half[rows]
        return read_cluster(self.offsets[rows] / half[:, None], self.values[rows], self.sign[rows] * FINE_PLACE)

    # --- closer looks ----------------------------------------------------------------------------------------------

    def _tables(self) -> Generator[Request, Reply, None]:
        """A difference table on a smaller scale: one more sample where it hears the same."""
        rows = np.flatnonzero(self.alive)
        if rows.size == 0:
            return
        spacing = TABLE_SPACING * self.half[rows]
        offsets = self._realised(rows, self.sign[rows, None] * spacing[:, None] * np.arange(1, TABLE_POINTS + 1))
        reply = yield from self._ask(rows, offsets)
        for place in np.flatnonzero(reply.finite.all(axis=1)):
            row, values = int(rows[place]), reply.values[place]
            self.heard[row].append(values)
            found = difference_table(np.concatenate([self.centre[None, :], values])).level
            self._pool(row, found, float(spacing[place]) * TABLE_POINTS)

    def _pool(self, row: int, found: Array, width: float) -> None:
        mine, sample = self.level[row], self.sample[row]
        with np.errstate(invalid="ignore"):
            same = (found < AGREE * mine) & (mine < AGREE * found)
            share = sample / (sample + TABLE_SAMPLE)
            both = np.hypot(np.sqrt(share) * mine, np.sqrt(1.0 - share) * found)
        alone = np.isnan(mine) & np.isfinite(found)
        self.width[row] = np.where(alone, width, self.width[row])
        self.variation[row] = np.where(alone, np.ptp(self.values[row], axis=0), self.variation[row])
        self.level[row] = np.where(alone, found, np.where(same, both, mine))

    def _close_by(self) -> Generator[Request, Reply, None]:
        """Values closer than the steps of single precision, where the noise is above rounding."""
        with np.errstate(invalid="ignore"):
            loud = self.level > self._limit()
        rows = np.flatnonzero(self.alive & loud.any(axis=1))
        if rows.size == 0:
            return
        size = np.maximum(self.room.scale[rows], self.half[rows] / FIRST_WIDTH)
        spacing = np.maximum(FINE * size, 16.0 * self.room.grain[rows])
        middle = np.maximum(FINE_PLACE * self.half[rows], 8.0 * spacing)
        offsets = self.sign[rows, None] * (middle[:, None] + spacing[:, None] * FINE_PLACES)
        offsets = self._realised(rows, offsets)
        reply = yield from self._ask(rows, offsets)
        for place in np.flatnonzero(reply.finite.all(axis=1)):
            row, t, values = int(rows[place]), offsets[place], reply.values[place]
            if np.unique(t).size == t.size:
                level, self.fine_slope[row] = beyond_cubic(t, values)
                self.fine_blur[row] = FINE_BLUR * np.spacing(np.abs(values).max(axis=0)) / np.ptp(t)
                self.quiet[row] = level * QUIET < self.level[row]

    def _doubts(self) -> Generator[Request, Reply, None]:
        """Second looks at what is smooth from close by: noise, or structure finer than the first cluster?

        Noise is the same on a smaller scale, and at all places. A wave is smooth on the scale of its slope; a pole, a
        layer, a kink sits somewhere, and elsewhere the function is smooth; kinks of a table shrink with the scale.
        """
        with np.errstate(invalid="ignore", divide="ignore"):
            open_ = self.quiet & self.alive[:, None] & (self.level > self._limit())
            large = (self.level > LARGE_PART * self.variation) & (self.level > FAINT * self.largest)
            slope = np.abs(self.fine_slope)
            steep = slope > np.where(large, 0.0, WAVE_STEEPNESS * self._typical_slope()) + self.fine_blur
            reach = np.where(steep, WAVE_REACH * self.level / slope, np.inf)
            aim = np.where(open_, np.minimum(reach, PLACE_WIDTH * self.width), np.inf)
        open_ &= ~self._told_by_digits(open_)
        if not open_.any():
            return
        doubted, half, far = open_.copy(), self.half.copy(), self.width.copy()
        heard = {name: getattr(self, name).copy() for name in _HEARD}
        noise, seen = np.zeros_like(open_), np.zeros(open_.shape, dtype=np.intp)
        rows = open_.any(axis=1)
        self.half[rows] = np.maximum(aim.min(axis=1), 2 * LEAST_GRAINS * self.room.grain)[rows]
        for _ in range(LOOKS_MOST):
            self.level[open_], aimed = np.nan, self.half.copy()
            yield from self._clusters(open_, 1)
            self.half = aimed
            with np.errstate(invalid="ignore"):
                open_ &= ~(self.level <= self._limit())
                lower = open_ & (self.level < heard["level"] / SAME)
            for name, known in heard.items():
                known[lower] = getattr(self, name)[lower]
            seen[lower] = 0
            same = open_ & ~lower
            if same.any():
                found = yield from self._elsewhere(np.flatnonzero(same.any(axis=1)), far)
                seen += same & (found > heard["level"] / SAME)
                # A wave may look shallow where it was met: what is all there is of a function has to show twice.
                noise |= same & (seen >= np.where(large, 2, 1))
                open_ &= ~noise
            if not open_.any():
                break
            self.half[open_.any(axis=1)] *= PLACE_WIDTH
            self.alive &= self.half > LEAST_GRAINS * self.room.grain
        self.level[open_] = np.nan
        for name, known in heard.items():
            getattr(self, name)[noise] = known[noise]
        self.quiet &= noise | ~doubted
        self.half = np.where(noise.any(axis=1), half, self.half)
        yield from self._tables()

    def _told_by_digits(self, asked: BoolArray) -> BoolArray:
        """(d, m): of the entries asked about, those whose digits explain the noise."""
        told = np.zeros_like(asked)
        for row, output in np.argwhere(asked):
            digits = digits_of(np.concatenate(self.heard[row])[:, output])
            level, largest = float(self.level[row, output]), float(self.largest[row, output])
            told[row, output] = explained_by_digits(digits, level, largest) is not None
        return told

    def _elsewhere(self, rows: IntArray, width: Array) -> Generator[Request, Reply, Array]:
        """(d, m): what a cluster of the present half-widths leaves over in another place; NaN where the model fails."""
        found = np.full(self.level.shape, np.nan)
        half = self.half[rows]
        place = self.sign[rows] * np.maximum(ELSEWHERE * width[rows].min(axis=1), 4.0 * half)
        place = np.clip(place, -0.9 * self.reach[rows], 0.9 * self.reach[rows])
        offsets = self._realised(rows, place[:, None] + np.minimum(half, 0.05 * self.reach[rows])[:, None] * NODES)
        reply = yield from self._ask(rows, offsets)
        whole = np.flatnonzero(reply.finite.all(axis=1))
        if whole.size:
            t = (offsets[whole] - place[whole, None]) / half[whole, None]
            reading = read_cluster(t, reply.values[whole], np.zeros(whole.size))
            found[rows[whole]] = np.where(reading.settled, reading.level, reading.tail)
        return found

    # --- the answer ------------------------------------------------------------------------------------------------

    def _typical_slope(self) -> Array:
        """(d, m): slope across the interval on which the noise was heard."""
        return np.asarray(self.variation / (2 * self.width))

    def _limit(self) -> Array:
        """(d, m): noise up to here is rounding."""
        argument = 0.3 * self.room.grain[:, None] * np.nan_to_num(self._typical_slope())
        return rounding_limit(self.largest, argument)

    def _reading(self) -> NoiseReading:
        level, quantum = self.level.copy(), np.zeros_like(self.level)
        kinds = []
        for row, heard in enumerate(self.heard):
            values = np.concatenate(heard)
            kinds.append(
                tuple(self._concluded((row, i), values[:, i], level, quantum) for i in range(self.centre.size))
            )
        return NoiseReading(
            level=level,
            kind=tuple(kinds),
            width=self.width,
            largest=self.largest,
            apart=self.apart,
            quantum=quantum,
            spent=self.spent,
        )

    def _concluded(self, at: tuple[int, int], values: Array, level: Array, quantum: Array) -> NoiseKind:
        """The kind of one entry; its level and quantum are filled in where the digits tell them."""
        apart = self.apart[at[1]]
        if apart > 0.0:
            level[at] = apart / 2.0 if np.isnan(level[at]) else level[at]
            return NoiseKind.UNREPEATABLE
        digits = digits_of(values)
        quantum[at] = digits.decimal
        explained = explained_by_digits(digits, float(level[at]), float(self.largest[at]))
        if explained is not None:
            kind, level[at] = explained
            return kind
        if np.isnan(level[at]):
            return NoiseKind.NOT_EXAMINED
        if level[at] <= self._limit()[at]:
            return NoiseKind.ROUNDING
        missed = abs(self.fine_slope[at] - self.slope[at])
        blur = SLOPE_BLUR * level[at] / self.width[at] + SLOPE_MISSED * self._typical_slope()[at] + self.fine_blur[at]
        return kind_from_close_by(
            float(level[at]), float(self.largest[at]), stands_still=bool(self.quiet[at] and missed > blur)
        )
