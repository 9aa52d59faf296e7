"""The cheap difference witness: two pairs a direction, a third where they leave doubt; enough for most right claims.

Central differences at steps of ratio 4 and Richardson's extrapolation in h² (Richardson 1911). It is never the last
word on a claim it does not confirm.
"""

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Reply, Request
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.witnesses.finite_difference import SOURCE
from gradcheck.witnesses.polynomial_fit import ROUNDING
from gradcheck.witnesses.steps import Room, rounded_half_width
from gradcheck.witnesses.testimony import Testimony

#: Larger step of the two pairs in units of the variable's size. Not a round number: on a staircase whose stairs are a
#: round part of x, round steps go from stair to stair and see a straight line.
STEP = 0.0015 * 0.8637
#: Ratio of neighbouring steps; the third pair is the widest.
RATIO = 4.0
#: A variable this much smaller than its typical size is stepped as if it were larger.
SMALLEST_SHARE = 0.1
#: Where the bounds leave less than this share of the step, a quick look is none; where they leave less than this
#: multiple of it for the third pair, that pair says nothing new.
LEAST_ROOM, LEAST_WIDENING = 0.1, 2.0
#: Step of the close look in units of the variables' sizes; what it may be off by rounding, in units in the last place,
#: and as a share of its terms.
CLOSE, CLOSE_DEVIATIONS, CLOSE_SHARE = 2.0**-20, 30.0, 1e-6
#: Fractional parts of its multiples are spread evenly.
GOLDEN = 0.6180339887
#: Half-width of the bound in standard deviations of rounding.
DEVIATIONS = 8.0
#: Multiple of the next Taylor term, as the decay of the terms before foretells it, that counts as truncation.
FORETOLD = 10.0
_LARGEST = float(np.finfo(float).max)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Pairs:
    """Values in pairs around the point along d directions, widest pair first.

    Attributes
    ----------
    steps : ndarray, shape (d, k)
        Half the distance between the two points of each pair, as rounding left it.
    odd, even : ndarray, shape (d, k, m)
        Halves of the differences and of the second differences, over the step: f' and f''·h/2 with their errors.
    largest : ndarray, shape (d, m)
        Largest size of the values.
    fine : ndarray of bool, shape (d,)
        All values are there and finite.
    refused : ndarray of bool, shape (d,)
        The budget was spent before all values were there.
    spent : int
        Evaluations that the newest pairs took.
    """

    steps: Array
    odd: Array
    even: Array
    largest: Array
    fine: BoolArray
    refused: BoolArray
    spent: int

    @staticmethod
    def of(steps: Array, reply: Reply, centre: Array) -> "Pairs":
        """From values at (+step, −step) of each pair in turn; steps that rounding made equal show nothing."""
        apart = (steps[:, -1] > 0) & (steps[:, :-1] >= LEAST_WIDENING * steps[:, 1:]).all(axis=1)
        steps = np.where(apart[:, None], steps, RATIO ** -np.arange(steps.shape[1]))
        up, down = reply.values[:, 0::2], reply.values[:, 1::2]
        width = 2 * steps[:, :, None]
        with np.errstate(invalid="ignore", over="ignore"):
            return Pairs(
                steps=steps,
                odd=(up - down) / width,
                even=(up + down - 2 * centre) / width,
                largest=np.maximum(np.abs(reply.values).max(axis=1), np.abs(centre)),
                fine=np.asarray(reply.finite.all(axis=1)) & apart,
                refused=np.asarray(reply.refused.any(axis=1)),
                spent=reply.spent,
            )

    def beside(self, wider: "Pairs", rows: IntArray) -> "Pairs":
        """These pairs of some rows with wider ones before them."""
        return Pairs(
            steps=np.concatenate([wider.steps, self.steps[rows]], axis=1),
            odd=np.concatenate([wider.odd, self.odd[rows]], axis=1),
            even=np.concatenate([wider.even, self.even[rows]], axis=1),
            largest=np.maximum(wider.largest, self.largest[rows]),
            fine=wider.fine & self.fine[rows],
            refused=wider.refused,
            spent=wider.spent,
        )

    def part(self, which: slice) -> "Pairs":
        """Some of the pairs only."""
        return replace(self, steps=self.steps[:, which], odd=self.odd[:, which], even=self.even[:, which])

    def taylor(self) -> tuple[Array, Array]:
        """Odd terms a1, a3, ... and even ones a2, a4, ..., each (d, k, m), as values at the widest step of the pairs.

        As many as there are pairs; of the last ones only the size is meant.
        """
        ratio = self._ratios
        powers = ratio[:, :, None] ** (2 * np.arange(ratio.shape[1]))
        widest = self.steps[:, :1, None]
        odd, even = np.linalg.solve(powers, self.odd), np.linalg.solve(powers * ratio[:, :, None], self.even)
        return np.asarray(odd * widest), np.asarray(even * widest)

    def extrapolated(self) -> tuple[Array, Array]:
        """The quotients at step 0, (d, m), and the standard deviation of one for values of error 1, (d,)."""
        ratio = self._ratios
        weights = _weights_at_zero(ratio**2, np.arange(ratio.shape[1]))
        spread = np.sqrt(np.sum((weights / ratio) ** 2, axis=1) / 2)
        return np.einsum("dk,dkm->dm", weights, self.odd), spread / self.steps[:, 0]

    def bend(self) -> tuple[Array, Array]:
        """The gap between the slopes on both sides, (d, m), and its standard deviation for values of error 1, (d,).

        Of a smooth function the even parts over the step vanish with the step; what is left at step 0 is a kink, or
        noise. Central differences give the mean slope at a kink for every step, so this must be asked for.
        """
        ratio = self._ratios
        weights = _weights_at_zero(ratio, np.maximum(2 * np.arange(ratio.shape[1]) - 1, 0))
        shares = weights / ratio
        spread = np.sqrt(np.sum(shares**2, axis=1) / 2 + np.sum(shares, axis=1) ** 2)
        return 2 * np.abs(np.einsum("dk,dkm->dm", weights, self.even)), 2 * spread / self.steps[:, 0]

    @property
    def _ratios(self) -> Array:
        """(d, k): the steps beside the widest one."""
        return self.steps / self.steps[:, :1]


def _weights_at_zero(at: Array, powers: IntArray) -> Array:
    """(d, k): weights of values at the abscissae `at` (d, k) that give the constant of a sum of k powers."""
    if (at == at[:1]).all():  # nearly always: the steps of all directions have the same ratios
        return _weights_of_one(tuple(at[0].tolist()), tuple(powers.tolist())).repeat(len(at), axis=0)
    return _solved(at, powers)


@lru_cache(maxsize=64)
def _weights_of_one(at: tuple[float, ...], powers: tuple[int, ...]) -> Array:
    return _solved(np.array([at]), np.array(powers))


def _solved(at: Array, powers: IntArray) -> Array:
    basis = np.swapaxes(at[:, :, None] ** powers, 1, 2)
    unit = np.zeros((*at.shape, 1))
    unit[:, 0] = 1.0
    return np.asarray(np.linalg.solve(basis, unit)[:, :, 0])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class QuickLook:
    """What two pairs a direction say, and the values themselves.

    Attributes
    ----------
    testimony : Testimony
        Along all directions.
    rows : ndarray of int
        The directions that were looked at.
    pairs : Pairs or None
        Their values; None if there were none.
    """

    testimony: Testimony
    rows: IntArray
    pairs: Pairs | None

    @property
    def cut_short(self) -> bool:
        """Whether the budget or the time ended before all values were there."""
        return self.pairs is not None and bool(self.pairs.refused.any())


def quick_look(base: Array, directions: Directions, room: Room, centre: Array) -> Inquiry[QuickLook]:
    """Value ± bound along each direction from four evaluations.

    Parameters
    ----------
    base, directions, room, centre
        As in `finite_difference`.

    Returns
    -------
    QuickLook
        Bound infinite where the bounds leave no room on both sides or the model fails. The bound covers truncation,
        rounding and a kink at the point, not noise inside the model: use it to confirm, never to refute.
    """
    wanted = STEP * np.maximum(room.scale, SMALLEST_SHARE * room.typical)
    narrow = np.minimum(room.below, room.above)
    rows = np.flatnonzero(narrow >= LEAST_ROOM * wanted)
    if rows.size == 0:
        return QuickLook(testimony=_unseen(len(directions), centre.size), rows=rows, pairs=None)
    h = rounded_half_width(np.minimum(wanted, narrow)[rows], room.grain[rows])
    pairs = yield from measured_pairs(base, directions, rows, np.stack([h, h / RATIO], axis=1), centre)
    value, amplification = pairs.extrapolated()
    odd, even = pairs.taylor()
    # An error of order 5 at steps h and h / 4 leaves 1/16 of it, with the other sign.
    truncation = FORETOLD * foretold_term(odd, even) / RATIO**2 / pairs.steps[:, :1]
    testimony = _testimony(len(directions), rows, centre, pairs, value, truncation, amplification)
    return QuickLook(testimony=testimony, rows=rows, pairs=pairs)


def wider_look(
    base: Array, directions: Directions, room: Room, centre: Array, seen: QuickLook, wanted: IntArray
) -> Inquiry[Testimony]:
    """Value ± bound along some directions from a third, wider pair beside the two of a quick look.

    Parameters
    ----------
    base, directions, room, centre
        As for the quick look.
    seen : QuickLook
    wanted : ndarray of int
        Which directions.

    Returns
    -------
    Testimony
        Along the directions `wanted`, in their order. The extrapolated values of two and of three pairs differ by the
        error of the worse one. Rounding weighs less on the two wide pairs, truncation on all three: the better counts.
    """
    silent = _unseen(wanted.size, centre.size)
    if seen.pairs is None:
        return silent
    places = np.full(len(directions), -1)
    places[seen.rows] = np.arange(seen.rows.size)
    h = seen.pairs.steps[:, 0][places]
    reach = np.minimum(RATIO * h, np.minimum(room.below, room.above))
    able = (places[wanted] >= 0) & (reach[wanted] >= LEAST_WIDENING * h[wanted]) & seen.pairs.fine[places[wanted]]
    chosen = np.flatnonzero(able)
    if chosen.size == 0:
        return silent
    rows = wanted[chosen]
    steps = rounded_half_width(reach[rows], room.grain[rows])
    wider = yield from measured_pairs(base, directions, rows, steps[:, None], centre)
    pairs = seen.pairs.beside(wider, places[rows])
    three, of_three = pairs.extrapolated()
    narrow, _ = pairs.part(slice(1, None)).extrapolated()
    wide, of_wide = pairs.part(slice(0, 2)).extrapolated()
    all_three = _testimony(wanted.size, chosen, centre, pairs, three, np.abs(three - narrow), of_three)
    widest = _testimony(wanted.size, chosen, centre, pairs, wide, np.abs(three - wide), of_wide)
    return _sharper(all_three, widest)


def _sharper(one: Testimony, other: Testimony) -> Testimony:
    """The smaller bound of two, entry by entry."""
    better = other.bound < one.bound
    return replace(one, value=np.where(better, other.value, one.value), bound=np.where(better, other.bound, one.bound))


def measured_pairs(base: Array, directions: Directions, rows: IntArray, steps: Array, centre: Array) -> Inquiry[Pairs]:
    """Values at ± each step (d, k) along some directions."""
    offsets = steps.repeat(2, axis=1)
    offsets[:, 1::2] *= -1.0
    moved = offsets
    if directions.ndim == 1:
        x = base[directions[rows]][:, None]
        moved = (x + offsets) - x
    chosen = directions if rows.size == len(directions) else directions[rows]
    reply = yield Request(base=base, directions=chosen, offsets=moved)
    return Pairs.of((moved[:, 0::2] - moved[:, 1::2]) / 2, reply, centre)


def foretold_term(odd: Array, even: Array) -> Array:
    """(d, m): the fifth Taylor term at the larger step, from the first four of them."""
    a1, a3, a2, a4 = (np.abs(terms[:, i]) for terms in (odd, even) for i in (0, 1))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        decay = np.fmax(np.fmax(a2 / a1, np.sqrt(a3 / a1)), np.cbrt(a4 / a1))
        # Near a critical point the first term is no measure: odd terms decay like odd ones, even ones like even ones.
        apart = np.fmax(np.where(a3 > 0, a3 * np.fmin(a3 / a1, 1.0), 0.0), a4 * np.fmin(np.sqrt(a4 / a2), 1.0))
        return np.asarray(np.where(a2 <= a1, a1 * _number(decay) ** 4, _number(apart)))


def _number(sizes: Array) -> Array:
    """Sizes >= 0 with 0 for NaN and the largest number for infinity; `numpy.nan_to_num` takes four times as long."""
    return np.where(np.isnan(sizes), 0.0, np.minimum(sizes, _LARGEST))


def _unseen(directions: int, outputs: int) -> Testimony:
    """Testimony of a look for which there was no room."""
    shape = directions, outputs
    return Testimony(value=np.full(shape, np.nan), bound=np.full(shape, np.inf), source=SOURCE)


def _testimony(
    directions: int,
    rows: IntArray,
    centre: Array,
    pairs: Pairs,
    seen: Array,
    truncation: Array,
    amplification: Array,
) -> Testimony:
    """Testimony along all directions; the rows that were looked at have a bound if their values are finite."""
    d, m = directions, centre.size
    value, bound, step = np.full((d, m), np.nan), np.full((d, m), np.inf), np.full((d, m), np.nan)
    value[rows] = seen
    bend, spread = pairs.bend()
    largest = np.where(pairs.largest > 0, pairs.largest, float(np.abs(centre).max()) or 1.0)
    # Where the values of an output cancel, its rounding is larger than their size tells; the parts of second
    # differences that belong to no smooth function show it, and the median over all directions is not misled by a kink
    # in one.
    with np.errstate(invalid="ignore"):
        heard = _median(bend / spread[:, None]) / 0.67
        sigma = np.fmax(ROUNDING * np.spacing(largest), heard)
        whole = truncation + bend / 2 + DEVIATIONS * amplification[:, None] * sigma
        # Values that are all the same leave no more slope than one unit in the last place across the widest pair, and
        # another for rounding inside the model.
        flat = (pairs.odd == 0).all(axis=1) & (pairs.even == 0).all(axis=1)
        whole = np.where(flat, np.fmin(whole, np.spacing(largest) / pairs.steps[:, :1]), whole)
    good = pairs.fine[:, None] & np.isfinite(seen)
    bound[rows] = np.where(good, whole, np.inf)
    step[rows] = pairs.steps[:, :1]
    reasons = {(int(rows[i]), j): SPENT for i in np.flatnonzero(pairs.refused) for j in range(m)}
    return Testimony(value=value, bound=bound, step=step, source=SOURCE, spent=pairs.spent, reasons=reasons)


def close_look(base: Array, columns: IntArray, room: Room, claim: Array, centre: Array) -> Inquiry[BoolArray]:
    """Outputs whose slope close to the point is not what a claim says along one direction that moves all variables.

    All steps of a quick look are wide beside a narrow feature at the point (a resonance, a saturation): it sees the
    slope around the feature. Two evaluations for all variables together find that out.

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : ndarray of int, shape (d,)
    room : Room
        Along these coordinates.
    claim : ndarray, shape (m, d)
    centre : ndarray, shape (m,)

    Returns
    -------
    ndarray of bool, shape (m,)
        False where nothing speaks against the claim, or the bounds or the model leave no room for a pair of values.
    """
    reach = np.minimum(room.below, room.above) / CLOSE
    # Moves of unequal size: those of equal variables would cancel what both have in common.
    place = np.arange(columns.size)
    signs = np.where(place % 2 == 0, 1.0, -1.0) * (0.5 + 0.5 * ((0.31 + GOLDEN * place) % 1.0))
    row = np.zeros(base.size)
    row[columns] = signs * np.minimum(room.scale, reach)
    reply = yield Request(base=base, directions=row[None, :], offsets=np.array([[CLOSE, -CLOSE]]))
    if not reply.finite.all():
        return np.zeros(centre.size, bool)
    slope = (reply.values[0, 0] - reply.values[0, 1]) / (2 * CLOSE)
    with np.errstate(invalid="ignore", over="ignore"):
        terms = np.where(np.isfinite(claim), claim, 0.0) * row[columns]
        # Rounding of f, and of every variable, over the small step; the moves are the variables' own sizes.
        whole = np.abs(terms).sum(axis=1)
        rounding = CLOSE_DEVIATIONS * np.finfo(float).eps * (np.abs(centre) + whole) / CLOSE
        apart = np.abs(slope - terms.sum(axis=1)) > rounding + CLOSE_SHARE * whole
    result: BoolArray = apart
    return result


def _median(values: Array) -> Array:
    """Median over the directions of the finite values (d, m); 0 where there are none."""
    finite = np.isfinite(values)
    ordered = np.sort(np.where(finite, values, np.inf), axis=0)
    middle = np.maximum(finite.sum(axis=0) - 1, 0) // 2
    median = ordered[middle, np.arange(middle.size)]
    return np.where(np.isfinite(median), median, 0.0)
