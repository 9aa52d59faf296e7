"""The difference witness: derivatives from function values alone, each value ± bound.

Per direction: three pairs of values around the point; where they show a line or a parabola, two wider pairs finish the
work. Otherwise seven pairs; where their coefficients end in rounding, five more pairs (wider, if the function is nearly
a low polynomial) sharpen the answer. Where the coefficients still decay, the interval shrinks; where they neither decay
nor end in rounding, a ladder of tiny steps tells noise from structure. Near bounds and edges of the domain the values
lie on one side. The answer is the fit of smallest bound that no finer fit contradicts.

Sources: polynomial fits at Chebyshev abscissae; Richardson 1911 and Lyness & Moler 1966 for the use of several steps;
the noise sample from coefficients that are left over follows Hamming's difference tables (see Moré & Wild 2011).
"""

from collections.abc import Generator
from dataclasses import dataclass, replace

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Reply, Request
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.difference_reasons import SPENT, UNSETTLED
from gradcheck.witnesses.difference_track import Track
from gradcheck.witnesses.ladder import FINEST, LADDER, Nature, Rungs, read_ladder, without_waves
from gradcheck.witnesses.polynomial_fit import CLOSE, Fit, fit, stencil_on
from gradcheck.witnesses.stencils import stage_of
from gradcheck.witnesses.steps import Room, least_half_width, rounded_half_width
from gradcheck.witnesses.testimony import Testimony
from gradcheck.witnesses.two_sides import Sides

SOURCE = "finite difference"

#: Half-width of the first interval, in units of the variable's size; no round number, for the reason given at `LADDER`.
FIRST_WIDTH = 0.1 * 0.9643
#: Where the bounds leave less than this share of it on one side, values are taken on the other side only.
NARROW = 0.01
#: Three quarters of a spacing of x: one rounding of a product inside the model, and a little.
WOBBLE = 0.75 * np.finfo(float).eps
#: Nodes of a stencil on both sides that are enough to look at each side alone.
ENOUGH_FOR_SIDES = 14


def finite_difference(
    base: Array, directions: Directions, room: Room, centre: Array, *, derivative: int = 1, wider: bool = False
) -> Inquiry[Testimony]:
    """Derivatives along several directions from function values.

    Parameters
    ----------
    base : ndarray, shape (n,)
    directions : ndarray
        Coordinate indices (d,) or rows (d, n).
    room : Room
        How far one may step along each direction.
    centre : ndarray, shape (m,)
        Finite values of the function at `base`.
    derivative : 1, 2 or 3
        Order of the derivative along the direction. All orders take the same values at the same points, or fewer: a
        cache gives the second one for free.
    wider : bool
        Go on to wider intervals, which suit second derivatives (their rounding goes with 1/h²), for more values.

    Returns
    -------
    Testimony
        Values and bounds (d, m). The bound is infinite, with a reason, at jumps, plateaus, steep points, and where the
        model fails on all sides. At a kink it covers the slopes of both sides, at a curvature break the second
        derivatives of both; it is infinite for what is of higher order than what breaks.
    """
    return (yield from _Rounds(base, directions, room, centre, derivative, wider).run())


@dataclass(frozen=True, slots=True, eq=False)
class _Measured:
    """What one stage measured: nodes (k,), half-widths (d,), differences (d, k, m), sizes (d, m), slips (d, k)."""

    nodes: Array
    width: Array
    differences: Array
    largest: Array
    slips: Array
    wobble: Array

    def fitted(self, derivative: int, side: int) -> Fit:
        """The fit to all nodes; where they lie on the lower side the stencil runs downwards.

        On one side the node close to the point is foretold instead: what it is off by is a narrow feature.
        """
        width = -self.width if side < 0 else self.width
        far = np.abs(self.nodes) > CLOSE
        if side == 0 or far.all():
            return self._fitted(derivative, np.ones(self.nodes.size, bool), width, self.slips, one_sided=side != 0)
        fits = self._fitted(derivative, far, width, self.slips, one_sided=True)
        return replace(fits, apart=self._off_close_to_the_point(fits, far, width)) if derivative == 1 else fits

    def _off_close_to_the_point(self, fits: Fit, far: BoolArray, width: Array) -> Array:
        """(d, m): what the close nodes are off from slope and bend of a fit to the others, in units of its noise."""
        bend = self._fitted(2, far, width, self.slips, one_sided=True).value[:, None, :]
        moved = ((self.nodes + self.slips)[:, ~far] * width[:, None])[:, :, None]
        off = np.abs(self.differences[:, ~far] - (fits.value[:, None, :] + bend * moved / 2) * moved).max(axis=1)
        noise = np.maximum.reduce([fits.tail, fits.floor, fits.argument, np.full_like(off, np.finfo(float).tiny)])
        return np.asarray(off / noise)

    def sides(self) -> Sides:
        """The fits to each side of a stencil on both; the pair close to the point belongs to neither."""
        clear = np.abs(self.nodes) > CLOSE
        lower, upper = clear & (self.nodes < 0), clear & (self.nodes > 0)
        left, left_slope = (self._fitted(p, lower, -self.width, -self.slips, one_sided=True) for p in (2, 1))
        right, right_slope = (self._fitted(p, upper, self.width, self.slips, one_sided=True) for p in (2, 1))
        return Sides(left=left, right=right, left_slope=left_slope, right_slope=right_slope)

    def _fitted(self, derivative: int, chosen: BoolArray, width: Array, slips: Array, *, one_sided: bool) -> Fit:
        nodes = np.abs(self.nodes[chosen]) if one_sided else self.nodes[chosen]
        differences, slips = _with_centre(self.differences[:, chosen]), _with_centre(slips[:, chosen])
        stencil = stencil_on(tuple(nodes.tolist()), one_sided)
        return fit(stencil, width, differences, self.largest, slips, derivative, self.wobble)


def _with_centre(nodes: Array) -> Array:
    """Differences or slips with those of the centre, which are zero and stand last, behind the other nodes (d, k, ...).

    In the order of memory of what is given, so that sums over the nodes are rounded alike; `numpy.pad` does the same in
    ten times the time.
    """
    d, k, *rest = nodes.shape
    whole = np.zeros((d, k + 1, *rest), order="F" if nodes.flags.fnc else "C")
    whole[:, :k] = nodes
    return whole


class _Rounds:
    """The rounds of one inquiry: directions in the same stage are evaluated and fitted together."""

    def __init__(
        self, base: Array, directions: Directions, room: Room, centre: Array, derivative: int, wider: bool
    ) -> None:
        self.base, self.directions, self.room, self.centre = base, directions, room, centre
        self.derivative = derivative
        self.spent = 0
        self.unit = float(np.abs(centre).max()) or 1.0
        self.wobble = WOBBLE * room.scale
        self.tracks = _tracks(room, len(directions), centre.size, wider)

    def run(self) -> Generator[Request, Reply, Testimony]:
        while True:
            groups: dict[tuple[str, int, int], list[int]] = {}
            for row, track in enumerate(self.tracks):
                if track.stage != "done":
                    groups.setdefault((track.stage, track.side, track.filled), []).append(row)
            if not groups:
                return self._testimony()
            for (stage, side, filled), rows in groups.items():
                if stage == "ladder":
                    yield from self._climb(np.array(rows), side)
                else:
                    yield from self._measure(stage, side, filled, np.array(rows))

    def _measure(self, name: str, side: int, filled: int, rows: IntArray) -> Generator[Request, Reply, None]:
        stage = stage_of(name, side)
        tracks = [self.tracks[row] for row in rows]
        half = rounded_half_width(np.array([track.half for track in tracks]), self.room.grain[rows])
        width = half * stage.ratio
        known = min(filled, stage.shared)
        sign = 1.0 if side == 0 else float(side)
        meant = sign * width[:, None] * np.array(stage.nodes[known:])
        offsets = self._realised(rows, meant)
        reply = yield Request(base=self.base, directions=self.directions[rows], offsets=offsets)
        self.spent += reply.spent
        finite = reply.finite
        refused, works = np.any(reply.refused, axis=1), np.all(finite, axis=1)
        slips = sign * (offsets - meant)
        fitted = []
        for i, (track, own) in enumerate(zip(tracks, half.tolist(), strict=True)):
            track.half = own
            if refused[i]:
                track.stop(SPENT)
            elif not works[i]:
                track.after_failure(*_failed_sides(finite[i], meant[i]))
            else:
                self._store(track, name, known, reply.values[i], slips[i])
                fitted.append(i)
        if fitted:
            self._fit(name, side, rows[fitted], width[fitted])

    @staticmethod
    def _store(track: Track, name: str, known: int, values: Array, slips: Array) -> None:
        track.values[known : known + len(values)] = values
        track.slips[known : known + len(values)] = slips
        # The wider nodes of `low` belong to no other stage; those of `probe` before them do.
        track.filled = 6 if name == "low" else known + len(values)

    def _fit(self, name: str, side: int, rows: IntArray, width: Array) -> None:
        stage = stage_of(name, side)
        tracks = [self.tracks[row] for row in rows]
        k = len(stage.nodes)
        values = np.array([track.values[:k] for track in tracks])
        slips = np.array([track.slips[:k] for track in tracks]) / width[:, None]
        # A function that is zero on the whole interval shows no size of its own: that of the other outputs, or 1.
        largest = np.maximum(np.abs(values).max(axis=1), np.abs(self.centre))
        largest = np.where(largest > 0, largest, self.unit)
        measured = _Measured(np.array(stage.nodes), width, values - self.centre, largest, slips, self.wobble[rows])
        fits = measured.fitted(self.derivative, side)
        sides = measured.sides() if self.derivative == 2 and side == 0 and k >= ENOUGH_FOR_SIDES else None
        for i, (track, own) in enumerate(zip(tracks, width.tolist(), strict=True)):
            track.after_fit(fits, i, own, sides)

    def _climb(self, rows: IntArray, side: int) -> Generator[Request, Reply, None]:
        reach = np.array([self.tracks[row].reach for row in rows]) / 2
        size = np.minimum(self.room.scale[rows], reach / LADDER[-1])
        # In a box of a few units in the last place there is no room for a ladder.
        able = size * LADDER[0] >= 4 * self.room.grain[rows]
        for row in rows[~able]:
            self.tracks[row].stop(UNSETTLED)
        rows, size = rows[able], size[able]
        if rows.size == 0:
            return
        tracks = [self.tracks[row] for row in rows]
        steps = rounded_half_width(size, self.room.grain[rows])[:, None] * LADDER
        sign = 1.0 if side == 0 else float(side)
        offsets = sign * np.concatenate([steps, -steps if side == 0 else 2 * steps], axis=1)
        offsets = self._realised(rows, offsets)
        reply = yield Request(base=self.base, directions=self.directions[rows], offsets=offsets)
        self.spent += reply.spent
        r = LADDER.size
        slope = np.stack([_coarse_slope(track) for track in tracks]) * sign
        up, down = reply.values[:, :r], reply.values[:, r:]
        realised = sign * offsets[:, :r] if side else (offsets[:, :r] - offsets[:, r:]) / 2
        rungs = read_ladder(realised, up, down, self.centre, np.full(rows.size, side != 0), slope)
        finite, refused = reply.finite, np.any(reply.refused, axis=1)
        works = np.all(finite, axis=1)
        if side == 0:
            rungs = yield from self._below(rows, works, steps, rungs)
        for i, track in enumerate(tracks):
            if refused[i]:
                track.stop(SPENT)
            elif not works[i]:
                track.after_failure(*_failed_sides(finite[i], offsets[i]))
            else:
                track.after_ladder(rungs, i, self.centre == 0)

    def _below(self, rows: IntArray, works: BoolArray, steps: Array, rungs: Rungs) -> Generator[Request, Reply, Rungs]:
        """The ladder's rungs again, after a look at still finer steps where it heard noise."""
        finest = rounded_half_width(steps[:, 0] / LADDER[0], self.room.grain[rows])[:, None] * FINEST
        fine = works & (rungs.nature == Nature.NOISE).any(axis=1) & (finest[:, 0] >= 4 * self.room.grain[rows])
        asked = np.flatnonzero(fine)
        if asked.size == 0:
            return rungs
        offsets = self._realised(rows[asked], np.concatenate([finest[asked], -finest[asked]], axis=1))
        reply = yield Request(base=self.base, directions=self.directions[rows[asked]], offsets=offsets)
        self.spent += reply.spent
        values = np.broadcast_to(self.centre, (rows.size, 4, self.centre.size)).copy()
        # Where the budget or the model ends, nothing is seen: values as at the point.
        seen = reply.finite.all(axis=1)
        values[asked[seen]] = reply.values[seen]
        return without_waves(rungs, steps[:, 1], finest, values[:, :2], values[:, 2:], self.centre)

    def _realised(self, rows: IntArray, offsets: Array) -> Array:
        """Displacements as rounding will leave them: coordinates move to the number that x + h really is."""
        if self.directions.ndim == 2:
            return offsets
        x = self.base[self.directions[rows]][:, None]
        realised: Array = (x + offsets) - x
        return realised

    def _testimony(self) -> Testimony:
        answers = [track.answer() for track in self.tracks]
        value, bound, half, noise = np.array(answers).transpose(1, 0, 2)
        left, right = (np.array([getattr(track, side) for track in self.tracks]) for side in ("left", "right"))
        if self.derivative > 1:
            # Slopes on both sides of a kink say nothing about higher derivatives.
            value, bound = np.where(np.isfinite(left), np.nan, value), np.where(np.isfinite(left), np.inf, bound)
        return Testimony(
            value=value,
            bound=bound,
            source=SOURCE,
            step=half,
            left=left,
            right=right,
            noise=_median(noise),
            noise_along=noise,
            doubtful=np.array([track.doubtful() for track in self.tracks]),
            spent=self.spent,
            works=bool(np.isfinite(bound).any()),
            reasons={
                (row, output): reason
                for row, track in enumerate(self.tracks)
                for output, reason in track.reasons.items()
                if not np.isfinite(bound[row, output]) or track.reasons[output] != ""
            },
        )


def _median(values: Array) -> Array:
    """(m,): median over the directions of the finite values (d, m); NaN where there are none."""
    finite = np.isfinite(values)
    count = finite.sum(axis=0)
    # Infinity stands behind all finite values. `numpy.nanmedian` goes by masked arrays: a tenth of a small estimate.
    ordered = np.sort(np.where(finite, values, np.inf), axis=0)
    output = np.arange(count.size)
    middle = (
        ordered[np.maximum(count - 1, 0) // 2, output] + ordered[np.minimum(count // 2, len(values) - 1), output]
    ) / 2
    return np.where(count > 0, middle, np.nan)


def _tracks(room: Room, d: int, outputs: int, wider: bool) -> list[Track]:
    """One track a direction, with its first interval: both sides where there is room, else the roomier side."""
    wanted = np.maximum(FIRST_WIDTH * room.scale, least_half_width(room.grain))
    # Less room than the smallest interval is none.
    below, above = (np.where(side < least_half_width(room.grain), 0.0, side) for side in (room.below, room.above))
    narrow = np.minimum(below, above)
    both = (narrow >= NARROW * wanted) & (narrow > 0)
    side = np.where(both, 0, np.where(above >= below, 1, -1))
    roomier = np.maximum(below, above)
    reach = np.where(both, narrow, roomier)
    # One-sided fits lose digits to the end of their interval; a wider one gives some of them back.
    half = np.minimum(np.where(both, wanted, 2 * wanted), reach)
    return [
        Track.begin(
            outputs, float(half[i]), int(side[i]), float(reach[i]), float(below[i]), float(room.widest[i]), wider
        )
        for i in range(d)
    ]


def _coarse_slope(track: Track) -> Array:
    return np.zeros(track.satisfied.size) if track.coarse is None else np.nan_to_num(track.coarse.value)


def _failed_sides(finite: BoolArray, offsets: Array) -> tuple[bool, bool]:
    """Whether the model failed above, and below, the point."""
    return bool((~finite & (offsets > 0)).any()), bool((~finite & (offsets < 0)).any())
