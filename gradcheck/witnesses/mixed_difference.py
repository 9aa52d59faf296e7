"""Mixed second derivatives from function values, each value ± bound.

With steps s and r in two variables, m(t) = f(+ts, +tr) − f(+ts, −tr) − f(−ts, +tr) + f(−ts, −tr) is even in t, and its
slope in t² at 0 is 4·s·r times the mixed derivative (Abramowitz & Stegun 25.3.26 is its value at one t). Whatever
depends on one of the two variables alone cancels at every t; so where nothing is mixed, m is rounding and few values
show it. The slope comes from a polynomial fit in t², and its bound from what the fit leaves over.

In a corner of the bounds, where one of the two has room on one side only, g(t) = f(ts, tr) − f(ts, 0) − f(0, tr) + f(0,
0) stays inside; its second derivative in t at 0 is 2·s·r times the mixed one.
"""

from collections.abc import Generator
from dataclasses import dataclass, field, replace

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Reply, Request, Status
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.difference_reasons import DISAGREE, FAILS, NO_ROOM, SPENT, TOO_NARROW, UNSETTLED
from gradcheck.witnesses.finite_difference import FIRST_WIDTH, NARROW, SOURCE, WOBBLE
from gradcheck.witnesses.polynomial_fit import Fit, fit, stencil_on
from gradcheck.witnesses.steps import NODE_GRID, Room
from gradcheck.witnesses.testimony import Testimony

#: The first steps, in units of those that decided the second derivatives along the axes.
SHARE = 0.35
#: Left-over coefficients are rounding below so many floors, noise below so many noise levels, and digits of a cancelled
#: sum below so many floors if they do not decay.
ROUNDING_MARGIN, HEARD_MARGIN, AMPLIFIED_MARGIN = 4.0, 6.0, 1e3
#: ... or, on few values, if they are hardly larger than the noise that the axes showed.
HEARD_ALIKE = 2.0
SHRINKS_MOST = 5
SHRINK = 0.05, 0.8
ESCAPES_MOST = 4
#: The interval shrinks by this each time that the model fails.
ESCAPE = 1 / 16
#: Pairs looked at together: a budget that runs out leaves the pairs before with their answer.
TOGETHER = 128
#: Second derivatives along axes and diagonals do not fit together if they are apart by so many times their bounds.
DISAGREEMENT = 5.0
#: Independent errors of four values.
_FOUR = 2.0


def _on_grid(nodes: Array) -> Array:
    return np.asarray(np.round(nodes / NODE_GRID) * NODE_GRID)


#: Positive Chebyshev abscissae of sixteen points (in t² those of eight on one side); the first four span the interval.
_EIGHT = _on_grid(np.cos((2 * np.arange(1, 9) - 1) * np.pi / 32))[[0, 2, 4, 6, 1, 3, 5, 7]]
_FEW = 4
#: Chebyshev-Lobatto abscissae on [0, 1].
_SIDE = _on_grid((1 - np.cos(np.arange(1, 15) * np.pi / 14)) / 2)


#: Signs of the two steps, in the order in which values are kept.
_QUADRANTS = ((1, 1), (1, -1), (-1, 1), (-1, -1))


@dataclass(slots=True, eq=False)
class _Pair:
    """One pair on its way: its row, its variables (i, j), and its steps.

    ``corner`` holds the signs of a corner; (0, 0) is all around.
    """

    row: int
    place: IntArray
    corner: tuple[int, int]
    steps: Array
    widest: Array
    shrinks: int = 0
    escapes: int = 0
    corners_left: list[tuple[int, int]] = field(default_factory=lambda: list(_QUADRANTS))


def mixed_differences(base: Array, pairs: IntArray, room: Room, own: Testimony, centre: Array) -> Inquiry[Testimony]:
    """Mixed second derivatives of several pairs of variables from function values.

    Parameters
    ----------
    base : ndarray, shape (n,)
    pairs : ndarray of int, shape (p, 2)
        Indices of two different variables each.
    room : Room
        Along all n coordinates.
    own : Testimony
        Second derivatives along all n coordinates. The interval that decided one tells how far the function is a
        polynomial there, up to rounding; and what four values around the point say of both variables must fit to them.
    centre : ndarray, shape (m,)
        Finite values at `base`.

    Returns
    -------
    Testimony
        Values and bounds (p, m); ``step`` is the larger step. The bound is infinite, with a reason, where the values
        settle at no step, the model fails, or the bounds of a variable leave no room.
    """
    return (yield from _Mixed(base, pairs, room, own, centre).run())


class _Mixed:
    def __init__(self, base: Array, pairs: IntArray, room: Room, own: Testimony, centre: Array) -> None:
        self.base, self.pairs, self.room, self.own, self.centre = base, pairs, room, own, centre
        self.noise = np.nan_to_num(own.noise)
        steps = own.step.min(axis=1)
        self.unit = float(np.abs(centre).max()) or 1.0
        # Steps that are multiples of this keep x + t·step exact for every node t.
        self.grain = room.grain / NODE_GRID
        wanted = np.where(np.isfinite(steps) & (steps > 0), SHARE * steps, FIRST_WIDTH * room.scale)
        self.wanted = np.minimum(wanted, np.maximum(room.below, room.above))
        shape = len(pairs), centre.size
        self.value, self.bound = np.full(shape, np.nan), np.full(shape, np.inf)
        self.step = np.full(shape, np.nan)
        self.reasons: dict[tuple[int, int], str] = {}
        self.spent = 0

    def run(self) -> Generator[Request, Reply, Testimony]:
        for begin in range(0, len(self.pairs), TOGETHER):
            rows = range(begin, min(begin + TOGETHER, len(self.pairs)))
            waiting = [pair for pair in map(self._begun, rows) if self._has_steps(pair)]
            while waiting:
                around = [pair for pair in waiting if pair.corner == (0, 0)]
                cornered = [pair for pair in waiting if pair.corner != (0, 0)]
                if around:
                    yield from self._around(around)
                if cornered:
                    yield from self._in_a_corner(cornered)
                waiting = [pair for pair in waiting if not self._done(pair)]
        return Testimony(
            value=self.value,
            bound=self.bound,
            source=SOURCE,
            step=self.step,
            spent=self.spent,
            works=bool(np.isfinite(self.bound).any()),
            reasons=self.reasons,
        )

    def _begun(self, row: int) -> _Pair:
        """All around where both variables have room on both sides, else in the roomier corner."""
        place = self.pairs[row]
        below, above, wanted = (part[place] for part in (self.room.below, self.room.above, self.wanted))
        narrow = np.minimum(below, above)
        if (narrow >= NARROW * wanted).all() and (narrow > 0).all():
            return _Pair(row, place, (0, 0), np.minimum(wanted, narrow), np.minimum(wanted, narrow))
        signs = np.where(above >= below, 1, -1)
        corner, steps = (int(signs[0]), int(signs[1])), np.minimum(wanted, np.maximum(below, above))
        return _Pair(row, place, corner, steps, steps, corners_left=[])

    def _has_steps(self, pair: _Pair) -> bool:
        """Round the steps; without one the pair is done."""
        grain = self.grain[pair.place]
        with np.errstate(over="ignore"):
            counted = np.floor(pair.steps / grain)
        # So many units are a multiple of them as they are, and their number may be beyond the largest double.
        pair.steps = np.where(counted >= 2.0**53, pair.steps, np.minimum(counted, 2.0**53) * grain)
        if (pair.steps > 0).all():
            return True
        self._end(pair, UNSETTLED if pair.shrinks else NO_ROOM)
        return False

    def _end(self, pair: _Pair, reason: str) -> None:
        for output in np.flatnonzero(~np.isfinite(self.bound[pair.row])):
            self.reasons[pair.row, int(output)] = reason

    def _done(self, pair: _Pair) -> bool:
        """Whether every output has a finite bound or a reason why not."""
        return all(
            (pair.row, j) in self.reasons or np.isfinite(self.bound[pair.row, j]) for j in range(len(self.noise))
        )

    # --- all around ------------------------------------------------------------------------------------------------

    def _around(self, pairs: list[_Pair]) -> Generator[Request, Reply, None]:
        kept, values = yield from self._quadrants(pairs, _EIGHT[:_FEW])
        if not kept:
            return
        few = self._fitted(kept, values, _EIGHT[:_FEW])
        open_ = []
        for i, pair in enumerate(kept):
            if self._at_floor(few, i).all():
                self._keep(pair, few, i, 4.0)
                self._compare(pair, values[i], _EIGHT[:_FEW])
            else:
                open_.append(i)
        if not open_:
            return
        rest, more = yield from self._quadrants([kept[i] for i in open_], _EIGHT[_FEW:])
        if not rest:
            return
        known = np.stack([values[i] for i in open_ if any(kept[i] is pair for pair in rest)])
        values = np.concatenate([known, more], axis=2)
        fits = self._fitted(rest, values, _EIGHT)
        for i, pair in enumerate(rest):
            if self._at_floor(fits, i).all():
                self._keep(pair, fits, i, 4.0)
                self._compare(pair, values[i], _EIGHT)
            else:
                self._shrink(pair, fits, i, 16)

    def _quadrants(self, pairs: list[_Pair], nodes: Array) -> Generator[Request, Reply, tuple[list[_Pair], Array]]:
        """The pairs whose values are all finite, and those values (p, 4, k, m)."""
        signs = np.array([[1.0, 1.0], [1.0, -1.0]])
        status, values = yield from self._ask(pairs, signs, np.concatenate([nodes, -nodes]))
        k = nodes.size
        # (+, +) and (+, −) upwards, (−, +) and (−, −) downwards
        quadrants = np.stack([values[:, 0, :k], values[:, 1, :k], values[:, 1, k:], values[:, 0, k:]], axis=1)
        fine = [i for i, pair in enumerate(pairs) if self._answered(pair, status[i])]
        return [pairs[i] for i in fine], quadrants[fine]

    def _fitted(self, pairs: list[_Pair], values: Array, nodes: Array) -> Fit:
        """m(t) as a polynomial in t²: its slope at 0, per pair, with the rounding of x in the bound."""
        upper, right, left, lower = (values[:, q] for q in range(4))
        mixed = np.pad((upper - right) - (left - lower), ((0, 0), (0, 1), (0, 0)))
        stencil = stencil_on(tuple((nodes**2).tolist()), True)
        fits = fit(stencil, np.ones(len(pairs)), mixed, _FOUR * self._largest(values))
        # A model that rounds a product of x is exact at a point beside it: the next derivative, from the odd parts.
        cubic = np.linalg.pinv(np.vander(nodes**2, 4, increasing=True))[1]
        wobble = np.zeros_like(fits.bound)
        for side, odd in enumerate(((upper - left) + (right - lower), (upper - right) + (left - lower))):
            third = np.abs(np.einsum("k,pkm->pm", cubic / nodes, odd))
            other = 1 - side
            wobble += 2 * third * np.array([self._blur(pair, other) for pair in pairs])[:, None]
        return replace(fits, bound=fits.bound + wobble)

    def _compare(self, pair: _Pair, values: Array, nodes: Array) -> None:
        """Where a second derivative breaks between the axes, those along the diagonals do not fit those along them.

        Of a smooth function the two along the diagonals add up to twice the sum of the two along the axes (in units of
        the steps); of |x·y| and its like they do not.
        """
        total = np.pad(values.sum(axis=0) - 4 * self.centre, ((0, 1), (0, 0)))[None]
        stencil = stencil_on(tuple((nodes**2).tolist()), True)
        fits = fit(stencil, np.ones(1), total, _FOUR * self._largest(values[None]))
        with np.errstate(over="ignore", invalid="ignore"):
            weights = 2 * pair.steps[:, None] ** 2
            expected = (weights * self.own.value[pair.place]).sum(axis=0)
            error = fits.bound[0] + (weights * self.own.bound[pair.place]).sum(axis=0)
            # Another Taylor term may hide in few nodes: what was left over counts as noise, and the bound is wide.
            broken = fits.resolved[0] & (np.abs(fits.value[0] - expected) > DISAGREEMENT * error)
        for output in np.flatnonzero(broken):
            self.value[pair.row, output], self.bound[pair.row, output] = np.nan, np.inf
            self.reasons[pair.row, int(output)] = DISAGREE

    def _blur(self, pair: _Pair, side: int) -> float:
        """The rounding of one of the two variables, in units of its step."""
        return float(WOBBLE * self.room.scale[pair.place[side]] / pair.steps[side])

    # --- in a corner -----------------------------------------------------------------------------------------------

    def _in_a_corner(self, pairs: list[_Pair]) -> Generator[Request, Reply, None]:
        signs = np.array([[1.0, 1.0], [1.0, 0.0], [0.0, 1.0]])
        status, values = yield from self._ask(pairs, signs, _SIDE)
        fine = [i for i, pair in enumerate(pairs) if self._answered(pair, status[i])]
        if not fine:
            return
        pairs, values = [pairs[i] for i in fine], values[fine]
        mixed = np.pad((values[:, 0] - values[:, 1]) - (values[:, 2] - self.centre), ((0, 0), (0, 1), (0, 0)))
        blur = np.array([max(self._blur(pair, 0), self._blur(pair, 1)) for pair in pairs])
        stencil = stencil_on(tuple(_SIDE.tolist()), True)
        fits = fit(stencil, np.ones(len(pairs)), mixed, _FOUR * self._largest(values), derivative=2, wobble=blur)
        for i, pair in enumerate(pairs):
            if self._at_floor(fits, i).all():
                self._keep(pair, fits, i, 2.0 * pair.corner[0] * pair.corner[1])
            else:
                self._shrink(pair, fits, i, 13)

    # --- both ------------------------------------------------------------------------------------------------------

    def _ask(self, pairs: list[_Pair], signs: Array, nodes: Array) -> Generator[Request, Reply, tuple[IntArray, Array]]:
        """Status (p, rows, k) and values (p, rows, k, m) along rows whose steps have the given signs."""
        rows = np.zeros((len(pairs), len(signs), self.base.size))
        for row, pair in zip(rows, pairs, strict=True):
            corner = np.where(np.array(pair.corner) == 0, 1, pair.corner)
            row[:, pair.place] = signs * corner * pair.steps
        offsets = np.broadcast_to(nodes, (len(pairs) * len(signs), nodes.size))
        reply = yield Request(base=self.base, directions=rows.reshape(-1, self.base.size), offsets=offsets)
        self.spent += reply.spent
        shape = len(pairs), len(signs), nodes.size
        return reply.status.astype(np.intp).reshape(shape), reply.values.reshape(*shape, -1)

    def _answered(self, pair: _Pair, status: IntArray) -> bool:
        """Whether all values are there; else smaller steps come next, then the corners, or the end."""
        if (status == Status.OK).all():
            return True
        if (status == Status.REFUSED).any():
            self._end(pair, SPENT)
        elif pair.escapes < ESCAPES_MOST:
            pair.escapes += 1
            pair.steps = pair.steps * ESCAPE
            self._has_steps(pair)
        elif pair.corners_left:
            # the domain of the model may end at the point: the corner where it does not
            pair.corner, pair.escapes = pair.corners_left.pop(0), ESCAPES_MOST
            pair.steps = pair.widest
            self._has_steps(pair)
        else:
            self._end(pair, FAILS)
        return False

    def _largest(self, values: Array) -> Array:
        largest = np.maximum(np.abs(values).max(axis=(1, 2)), np.abs(self.centre))
        return np.where(largest > 0, largest, self.unit)

    def _level(self, fits: Fit, i: int) -> Array:
        return np.asarray(np.maximum(fits.floor[i], _FOUR * self.noise))

    def _at_floor(self, fits: Fit, i: int) -> BoolArray:
        result: BoolArray = fits.resolved[i] & (
            (fits.noise[i] <= ROUNDING_MARGIN * fits.floor[i])
            | (fits.noise[i] <= HEARD_ALIKE * _FOUR * np.minimum(self.noise, AMPLIFIED_MARGIN * fits.floor[i]))
            | (fits.flat[i] & (fits.noise[i] <= AMPLIFIED_MARGIN * fits.floor[i]))
            | (fits.flat[i] & (fits.noise[i] <= HEARD_MARGIN * _FOUR * self.noise))
        )
        return result

    def _keep(self, pair: _Pair, fits: Fit, i: int, factor: float) -> None:
        """`factor`: the fitted derivative of a product of the two steps."""
        with np.errstate(over="ignore", invalid="ignore"):
            for mine, fitted in ((self.value, fits.value[i]), (self.bound, fits.bound[i])):
                mine[pair.row] = fitted / factor / pair.steps[0] / pair.steps[1]
        self.bound[pair.row] = np.nan_to_num(np.abs(self.bound[pair.row]), nan=np.inf, posinf=np.inf)
        self.step[pair.row] = pair.steps.max()
        if not np.isfinite(self.bound[pair.row]).all():
            self._end(pair, TOO_NARROW)

    def _shrink(self, pair: _Pair, fits: Fit, i: int, orders: int) -> None:
        pair.shrinks += 1
        if pair.shrinks > SHRINKS_MOST:
            self._end(pair, UNSETTLED)
            return
        level = self._level(fits, i)
        ratio = float(np.min(level / np.maximum(fits.tail[i], level)))
        pair.steps = pair.steps * float(np.clip(ratio ** (1 / orders), *SHRINK))
        self._has_steps(pair)
