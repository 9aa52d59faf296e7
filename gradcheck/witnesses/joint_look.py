"""The cheap difference witness along directions that move many variables of a scalar function at once.

Two pairs a direction, as in a quick look. Directions of one kind resemble one another, so the step that suits them and
the noise of the values are learnt from one and used for the next: a direction takes four evaluations.
"""

from dataclasses import dataclass, field

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.records.arrays import Array
from gradcheck.witnesses.polynomial_fit import ROUNDING
from gradcheck.witnesses.quick_look import DEVIATIONS, FORETOLD, RATIO, Pairs, measured_pairs

#: Steps of the first survey, in units of the direction: a ladder of pairs, the widest first. No round number.
LADDER = 0.25 * 0.9137 * RATIO ** -np.arange(6.0)
#: The widest step; how often a better one is looked for; and where it promises a bound so many times smaller.
WIDEST, TRIES, WORTHWHILE = 0.25 * 0.9643, 2, 3.0
#: Numbers of pairs to choose from.
PAIRS = (2, 3, 4)
#: Fewer pairs are taken where their bound is no more than so many times that of more.
NEARLY = 2.0
#: Where the function fails at a step, the next one is so many times smaller; so often.
NARROWER, ATTEMPTS = 16.0, 4
#: What a smooth function leaves in the noise sample falls with the fourth power of the step, noise stays: samples that
#: fall by less than this from window to window are noise.
STAYS = 16.0
#: Samples of the noise that are enough to tell its level; the median size of a normal variable.
ENOUGH, MEDIAN = 3, 0.6745
#: The close pair: its step in units of the direction; what it may be off by rounding, and as a share of the terms.
CLOSE, CLOSE_DEVIATIONS, CLOSE_SHARE = 2.0**-20, 30.0, 1e-6
#: Steps of a second look at what is off: a feature may be as narrow as rounding lets it be seen.
CLOSER = CLOSE * 2.0 ** np.array([0.0, -8.0, -16.0])
#: A slope from one side takes a second step, and is so many times as uncertain as one from both.
ONE_SIDED = 8.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """The derivative of a scalar function along one direction: value ± bound.

    The bound is infinite where the function fails on all steps, or (`refused`) the budget ended. `better` is the step
    that would have suited better, `sample` what the values show of noise or of higher even terms.
    """

    value: float = np.nan
    bound: float = np.inf
    step: float = np.nan
    better: float = np.nan
    sample: float = np.nan
    refused: bool = False


@dataclass(slots=True, eq=False)
class Sight:
    """Looks along directions, with what was learnt about step and noise so far.

    Attributes
    ----------
    base : ndarray, shape (n,)
    centre : ndarray, shape (1,)
    noise : float
        Noise level of the values: at first that of rounding (of the value, and of x), after the survey what it heard.
    width, pairs : float, int
        The widest step, and the number of pairs, that suited the last direction.
    two : Seen or None
        What the best two pairs of the survey saw: enough where no more digits are asked for.
    """

    base: Array
    centre: Array
    noise: float
    width: float = float(LADDER[2])
    pairs: int = 2
    two: Seen | None = None
    samples: list[float] = field(default_factory=list)

    @property
    def heard(self) -> float:
        """Noise as a few directions show it; NaN before that. Smooth parts may be in it, so it is rather too large."""
        return float(np.median(self.samples)) / MEDIAN if len(self.samples) >= ENOUGH else np.nan

    @staticmethod
    def at(base: Array, centre: Array, wobble: float) -> "Sight":
        """Before anything was seen; `wobble` is what the rounding of x may do to the values: ε·√Σ(c·x)²."""
        largest = float(np.abs(centre[0])) or 1.0
        return Sight(base, centre, max(ROUNDING * float(np.spacing(largest)), wobble))

    def survey(self, row: Array, spread: float, goal: float) -> Inquiry[Seen]:
        """Value ± bound along `row` from a ladder of pairs, which shows the noise, and which pairs suit.

        Parameters
        ----------
        row : ndarray, shape (n,)
        spread : float
            √Σ(c·row)², c the claim: the size of the terms, whose sum cancels by chance.
        goal : float
            A bound that is small enough.
        """
        pairs = yield from measured_pairs(self.base, row[None, :], np.zeros(1, np.intp), LADDER[None, :], self.centre)
        if pairs.refused[0]:
            return Seen(refused=True)
        if not pairs.fine[0]:
            return (yield from self.along(row, goal, spread))
        samples = [self._read(pairs.part(slice(i, i + 2)), spread).sample for i in range(LADDER.size - 1)]
        self.noise = max(self.noise, _plateau(samples))
        best = {
            k: min(
                (self._read(pairs.part(slice(i, i + k)), spread) for i in range(LADDER.size - k + 1)),
                key=lambda seen: seen.bound,
            )
            for k in PAIRS
        }
        enough = max(goal, NEARLY * min(seen.bound for seen in best.values()))
        self.two = best[2]
        self.pairs = next(k for k in PAIRS if best[k].bound <= enough)
        seen = best[self.pairs]
        self.width = float(np.clip(seen.better, seen.step / 2, seen.step * 2))
        return seen

    def along(self, row: Array, goal: float, spread: float) -> Inquiry[Seen]:
        """Value ± bound along `row` (n,); other steps are tried where that may bring the bound down to `goal`.

        Offsets go up to `WIDEST` times the row on both sides.
        """
        best = Seen()
        if self.two is not None and self.pairs > 2 and self.two.bound <= goal:
            seen = yield from self._looked(row, self.two.step, 2, spread)
            if seen.refused or seen.bound <= goal:
                return seen
        width, attempts = self.width, 0
        for _ in range(TRIES + ATTEMPTS):
            seen = yield from self._looked(row, width, self.pairs, spread)
            if seen.refused:
                return seen
            better = seen.better
            if seen.bound < best.bound:
                best, self.width = seen, width
            if np.isinf(seen.bound):
                attempts += 1
                better = width / NARROWER
            if best.bound <= goal or attempts > ATTEMPTS or not _worthwhile(width, better):
                break
            width = better
        if np.isfinite(best.sample):
            self.samples.append(best.sample)
        return best

    def _looked(self, row: Array, width: float, pairs: int, spread: float) -> Inquiry[Seen]:
        steps = width * RATIO ** -np.arange(float(pairs))[None, :]
        values = yield from measured_pairs(self.base, row[None, :], np.zeros(1, np.intp), steps, self.centre)
        return Seen(refused=True) if values.refused[0] else self._read(values, spread)

    def _read(self, pairs: Pairs, spread: float) -> Seen:
        """Value ± bound from some pairs."""
        width = float(pairs.steps[0, 0])
        value, amplification = pairs.extrapolated()
        if not pairs.fine[0] or not np.isfinite(value[0, 0]):
            return Seen(step=width, better=width / NARROWER)
        bend, bend_spread = pairs.bend()
        smooth = _truncation(pairs, spread) + float(bend[0, 0]) / 2
        rounding = float(DEVIATIONS * amplification[0] * self.noise)
        flat = bool((pairs.odd == 0).all() and (pairs.even == 0).all())
        bound = float(np.spacing(pairs.largest[0, 0])) / width if flat else smooth + rounding
        # Of k pairs, truncation grows with the step to the power 2k, the bend with 2k − 1; rounding falls with it.
        power = 2 * pairs.steps.shape[1] - 0.5
        ratio = rounding / (power * smooth) if smooth > 0 else np.inf
        better = min(WIDEST, width * float(np.clip(ratio ** (1 / (power + 1)), 1 / 64, 8)))
        sample = float(bend[0, 0] / bend_spread[0])
        return Seen(value=float(value[0, 0]), bound=bound, step=width, better=better, sample=sample)

    def close_to_the_point(self, row: Array, claimed: float, terms: float) -> Inquiry[bool]:
        """Whether the slope very close to the point is what is claimed; also where nothing can be seen there.

        All other steps are wide beside a narrow feature at the point and see the slope around it.

        Parameters
        ----------
        row : ndarray, shape (n,)
        claimed : float
            Claim along the row.
        terms : float
            Sum of the sizes of its terms.
        """
        reply = yield Request(base=self.base, directions=row[None, :], offsets=np.array([[CLOSE, -CLOSE]]))
        if not reply.finite.all():
            return True
        slope = float(reply.values[0, 0, 0] - reply.values[0, 1, 0]) / (2 * CLOSE)
        rounding = CLOSE_DEVIATIONS * max(np.finfo(float).eps * (abs(self.centre[0]) + terms), self.noise) / CLOSE
        return bool(abs(slope - claimed) <= rounding + CLOSE_SHARE * terms)

    def speaks_against(self, row: Array, seen: float, terms: float, *, inward: bool) -> Inquiry[tuple[Array, Array]]:
        """Slopes along `row` at much smaller steps, and by how much more than their doubt they are off what was `seen`.

        Parameters
        ----------
        row : ndarray, shape (n,)
        seen : float
            The derivative along the row, as wide steps see it.
        terms : float
            Sum of the sizes of its terms.
        inward : bool
            Whether only positive multiples of the row stay within the bounds.

        Returns
        -------
        slopes, excess : ndarray, shape (k,)
            NaN where the function fails or the budget ended.
        """
        offsets = np.stack([CLOSER, CLOSER / 2 if inward else -CLOSER], axis=1)
        reply = yield Request(base=self.base, directions=row[None, :], offsets=offsets.reshape(1, -1))
        one, other = np.where(reply.finite[0], reply.values[0, :, 0], np.nan).reshape(-1, 2).T
        centre = float(self.centre[0])
        if inward:
            slopes, bends = (4 * other - one - 3 * centre) / CLOSER, one - 2 * other + centre
        else:
            slopes, bends = (one - other) / (2 * CLOSER), one + other - 2 * centre
        # Wide steps take for noise what is none close to the point; noise would show there, and closer, as well.
        bends = np.nan_to_num(np.abs(bends), posinf=0.0)
        bends[-1] = bends[-2:].max()
        noise = np.minimum(self.noise, np.maximum.accumulate(bends[::-1])[::-1])
        rounding = CLOSE_DEVIATIONS * np.maximum(np.finfo(float).eps * (abs(centre) + terms), noise) / CLOSER
        rounding *= ONE_SIDED if inward else 1.0
        return slopes, np.abs(slopes - seen) - rounding - CLOSE_SHARE * terms


def _truncation(pairs: Pairs, spread: float) -> float:
    """What the next odd term leaves in the value extrapolated from k pairs.

    The odd terms along a random direction cancel by chance, the even ones do not: the decay of the terms is measured by
    terms of one kind, and by the size of the first term's parts.
    """
    odd, even = (np.abs(terms[0, :, 0]) for terms in pairs.taylor())
    width = float(pairs.steps[0, 0])
    odd[0] = max(odd[0], spread * width)
    with np.errstate(divide="ignore", invalid="ignore"):
        decay = float(np.nanmax([*(odd[1:] / odd[:-1]), *(even[1:] / even[:-1]), 0.0]))
    left = np.prod((pairs.steps[0] / width) ** 2)
    return float(FORETOLD * odd[-1] * min(decay, 1.0) * left / width)


def _plateau(samples: list[float]) -> float:
    """The noise in samples from wide to narrow windows: the mean square of those that no longer fall."""
    last = len(samples) - 1
    first = last
    while first > 0 and samples[first - 1] <= STAYS * max(samples[first:]):
        first -= 1
    counted = np.array(samples[first:])
    largest = counted.max()  # squares of huge values would be infinite
    return float(largest * np.sqrt(np.mean(np.square(counted / largest)))) if largest > 0 else 0.0


def _worthwhile(width: float, better: float) -> bool:
    """Whether the bound would shrink enough: with the step while it is rounding, with its fourth power else."""
    return better > WORTHWHILE * width or better < width / WORTHWHILE**0.25
