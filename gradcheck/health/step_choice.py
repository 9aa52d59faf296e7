"""Steps for the user's own solver: chosen by the published formulas, then tried.

The formulas know the derivatives at the point only. Where these change over the step, vanish, or are drowned by noise,
the formulas promise too much; so each difference is taken, held against the witness, and its step shortened until what
is seen is what was promised. The error told is never less than the one seen.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.health import step_formulas as formulas
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.polynomial_fit import ROUNDING
from gradcheck.witnesses.steps import Room
from gradcheck.witnesses.testimony import Testimony

#: A step is never larger than this share of the variable's size: derivatives are only known near the point.
LARGEST = 0.1
#: An error seen beyond so many times the expected one sends a step back ...
EXCESS = 3.0
#: ... to this share of it ...
SHORTER = 0.25
#: ... at most so many times.
TRIALS_MOST = 8
#: Share of a bound that the error is not likely to exceed: a bound holds 999 times in 1,000, and a step that
#: is right in the worst case only would be short nearly always. What is seen in the trial covers the rest.
LIKELY = 1 / 15
#: A witness is blurred where it says this much less than a forward difference with a step of common practice would.
BLURRED = 10.0
#: Where noise hides the derivative, longer steps are tried, by this factor, ...
LONGER = 3.0
#: ... as long as the error seen falls by this one ...
CLEARLY = 1.5
#: ... and at most so many times.
LONGER_MOST = 3
#: The second step at which a difference is tried, in units of the first: rounding may favour one of them.
BESIDE = 0.729
#: Steps among which several outputs settle on one.
COMPROMISES = 48


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepChoice:
    """Steps along d variables, each (d,); NaN where differences approximate no derivative.

    Attributes
    ----------
    forward, central : ndarray
        Steps of the two difference formulas, in units of the variable.
    forward_error, central_error : ndarray
        Error that each leaves; of several outputs the largest.
    forward_side : ndarray
        1 for a forward difference; -1 where the bounds leave room for a backward one only.
    central_side : ndarray
        0 for a central difference; 1 or -1 for three values above or below the point, where there is no room for it.
    noise : float
        Noise level; of several outputs the largest.
    """

    forward: Array
    forward_error: Array
    forward_side: Array
    central: Array
    central_error: Array
    central_side: Array
    noise: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Known:
    """What the witness knows: arrays (d, m) but for `noise`, `centre` (m,) and `largest` (d,).

    `hidden` (d,) tells by order where the second and third derivative are likely to be smaller than they are taken for.
    """

    slope: Array
    bound: Array
    second: Array
    third: Array
    noise: Array
    centre: Array
    weight: Array
    largest: Array
    hidden: dict[int, BoolArray]


def step_choice(
    base: Array,
    columns: IntArray,
    room: Room,
    centre: Array,
    first: Testimony,
    second: Testimony,
    third: Testimony,
) -> Inquiry[StepChoice]:
    """Steps along coordinates, tried on the model.

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : ndarray of int, shape (d,)
    room : Room
        Along the same coordinates.
    centre : ndarray, shape (m,)
        Values at `base`.
    first, second, third : Testimony
        Derivatives along the coordinates.

    Returns
    -------
    StepChoice
    """
    known = _known(room, centre, first, second, third)
    above, below = (np.minimum(side, known.largest) for side in (room.above, room.below))
    h = _settled(known, _forward_steps(known), _forward_error)
    roomier = np.where(above >= below, 1.0, -1.0)
    side = np.where(above >= h, 1.0, np.where(below >= h, -1.0, roomier))
    limit = np.where(side > 0, above, below)
    trial = _Trial(base, columns, known)
    forward, forward_error = yield from trial.run(_FORWARD, np.minimum(h, limit), side, limit)
    central, central_error, central_side = yield from _central(trial, above, below, roomier)
    return StepChoice(
        forward=forward,
        forward_error=forward_error,
        forward_side=side,
        central=central,
        central_error=central_error,
        central_side=central_side,
        noise=float(known.noise.max()),
    )


def _central(trial: "_Trial", above: Array, below: Array, roomier: Array) -> Inquiry[tuple[Array, Array, Array]]:
    """Step, error and side of a difference of second order: central, or on one side where that has the better room."""
    known = trial.known
    narrow, wide = np.minimum(above, below), np.maximum(above, below) / 2
    h = _settled(known, formulas.central_step(known.noise, known.third), _central_error)
    one = np.minimum(_settled(known, formulas.one_sided_step(known.noise, known.third), _one_sided_error), wide)
    capped = np.minimum(h, narrow)
    with np.errstate(divide="ignore", invalid="ignore"):
        alone = (capped < h) & ~(_worst(known, capped, _central_error) <= _worst(known, one, _one_sided_error))
    central = yield from trial.run(_CENTRAL, capped, np.zeros_like(h), narrow, ~alone)
    one_sided = yield from trial.run(_ONE_SIDED, one, roomier, wide, alone)
    step, error = (np.where(alone, *pair) for pair in zip(one_sided, central, strict=True))
    return step, error, np.where(alone, roomier, 0.0)


def _known(room: Room, centre: Array, first: Testimony, second: Testimony, third: Testimony) -> _Known:
    floor = ROUNDING * np.spacing(np.maximum(np.abs(centre), np.finfo(float).tiny))
    noise = np.where(np.isfinite(first.noise), first.noise, floor)
    size = room.typical[:, None]
    value = np.where(np.isfinite(first.bound), first.value, np.nan)
    weight = np.fmax(np.abs(value), np.abs(centre) / size)
    guess = np.abs(centre) / size**2
    # A bound that covers slopes of several scales (ripples, cut-off digits) comes with derivatives of the finest of
    # them; the guess gives steps of the variable's own scale.
    blurred = first.bound > np.maximum(np.abs(first.value), BLURRED * np.sqrt(noise * guess))
    return _Known(
        slope=value,
        bound=first.bound,
        second=np.where(blurred, guess, _at_most(second, guess)),
        third=np.where(blurred, guess / size, _at_most(third, guess / size)),
        noise=noise,
        centre=centre,
        # An output that is zero and does not move shows no size; whatever it suffers does not count beside others.
        weight=np.where(weight > 0, weight, 1.0 if centre.size == 1 else np.inf),
        largest=LARGEST * room.typical,
        hidden={2: _hidden(second), 3: _hidden(third)},
    )


def _at_most(testimony: Testimony, guess: Array) -> Array:
    """(d, m): how large the derivative may be; where nothing is known, a guess that the trial will mend."""
    limit = np.abs(testimony.value) + LIKELY * testimony.bound
    return np.asarray(np.where(np.isfinite(limit), limit, guess))


def _hidden(testimony: Testimony) -> BoolArray:
    """(d,): where noise hides the derivative of some output."""
    return np.asarray((LIKELY * testimony.bound > np.abs(testimony.value)).any(axis=1))


# --- one step for all outputs ---------------------------------------------------------------------------------------

_Error = Callable[[_Known, Array], Array]


def _forward_error(known: _Known, h: Array) -> Array:
    return formulas.forward_error(h, known.noise, known.second, known.third)


def _central_error(known: _Known, h: Array) -> Array:
    return formulas.central_error(h, known.noise, known.third)


def _one_sided_error(known: _Known, h: Array) -> Array:
    return formulas.one_sided_error(h, known.noise, known.third)


def _forward_steps(known: _Known) -> Array:
    inflection = formulas.forward_step_at_inflection(known.noise, known.third)
    return np.minimum(formulas.forward_step(known.noise, known.second), inflection)


def _settled(known: _Known, steps: Array, error: _Error) -> Array:
    """(d,): of the best steps (d, m) of several outputs one: that whose largest error, relative to the size of each
    output's derivative, is smallest."""
    steps = np.minimum(steps, known.largest[:, None])
    if steps.shape[1] == 1:
        return np.asarray(steps[:, 0])
    low, high = np.log(steps.min(axis=1)), np.log(steps.max(axis=1))
    tried = np.exp(low[:, None] + (high - low)[:, None] * np.linspace(0, 1, COMPROMISES))
    worst = np.stack([_worst(known, h, error) for h in tried.T], axis=1)
    return np.asarray(tried[np.arange(len(tried)), np.argmin(worst, axis=1)])


def _worst(known: _Known, h: Array, error: _Error) -> Array:
    """(d,): largest relative error of all outputs."""
    return np.asarray((error(known, h[:, None]) / known.weight).max(axis=1))


# --- trial ----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Formula:
    """A difference: its displacements in units of the step, the slope it gives, the error expected of it, and the order
    of the derivative that rules its truncation."""

    nodes: tuple[float, ...]
    slope: Callable[[Array, Array, Array], Array]
    error: _Error
    order: int


def _two_values(near: Array, values: Array, centre: Array) -> Array:
    return np.asarray((values[:, 0] - centre) / near[:, 0, None])


def _pair(near: Array, values: Array, centre: Array) -> Array:
    return np.asarray((values[:, 0] - values[:, 1]) / (near[:, 0] - near[:, 1])[:, None])


def _three_values(near: Array, values: Array, centre: Array) -> Array:
    a, b = near[:, 0, None], near[:, 1, None]
    return np.asarray((values[:, 0] - centre) / a * b / (b - a) - (values[:, 1] - centre) / b * a / (b - a))


_FORWARD = _Formula((1.0,), _two_values, _forward_error, 2)
_CENTRAL = _Formula((1.0, -1.0), _pair, _central_error, 3)
_ONE_SIDED = _Formula((1.0, 2.0), _three_values, _one_sided_error, 3)


@dataclass(frozen=True, slots=True, eq=False)
class _Trial:
    """Takes differences on the model and holds them against the witness."""

    base: Array
    columns: IntArray
    known: _Known

    def run(
        self, formula: _Formula, h: Array, side: Array, limit: Array, wanted: BoolArray | None = None
    ) -> Inquiry[tuple[Array, Array]]:
        """Steps (d,) whose error was seen to be the one expected, and that error (d,).

        `h` is where to begin, `limit` what no step exceeds. NaN where nothing is `wanted`, or where no witness speaks.
        """
        judgeable = np.isfinite(self.known.slope).any(axis=1) & (h > 0)
        found = _Found(*(np.full(h.size, start) for start in (np.nan, np.nan, np.inf)))
        waiting = judgeable if wanted is None else judgeable & wanted
        yield from self._shorten(formula, np.array(h), side, waiting, found)
        yield from self._lengthen(formula, side, limit, found)
        return found.step, found.told

    def _shorten(self, formula: _Formula, h: Array, side: Array, waiting: BoolArray, found: "_Found") -> Inquiry[None]:
        """Truncation beyond what the formula expects, and failures of the model, send a step back."""
        for _ in range(TRIALS_MOST):
            rows = np.flatnonzero(waiting)
            if rows.size == 0:
                return
            seen = yield from self._seen(formula, h, side, rows)
            expected = self._expected(formula, h, rows)
            excess = seen > EXCESS * (expected + np.nan_to_num(self.known.bound[rows], posinf=0.0))
            worst = self._worst(seen, rows)
            # What does not get better with a shorter step is no truncation: noise that was not heard before.
            better = worst < found.worst[rows]
            found.take(rows, h, seen, expected, worst, better)
            waiting[rows] = ~np.isfinite(worst) | (excess.any(axis=1) & better)
            h[waiting] *= SHORTER

    def _lengthen(self, formula: _Formula, side: Array, limit: Array, found: "_Found") -> Inquiry[None]:
        """Where noise hides the derivative in the formula, its step is rather too short: try longer ones."""
        waiting = np.isfinite(found.step) & self.known.hidden[formula.order]
        for _ in range(LONGER_MOST):
            with np.errstate(invalid="ignore"):
                waiting &= found.step * LONGER <= limit
            rows = np.flatnonzero(waiting)
            if rows.size == 0:
                return
            h = found.step * LONGER
            seen = yield from self._seen(formula, h, side, rows)
            worst = self._worst(seen, rows)
            better = worst * CLEARLY < found.worst[rows]
            found.take(rows, h, seen, self._expected(formula, h, rows), worst, better)
            waiting[rows[~better]] = False

    def _expected(self, formula: _Formula, h: Array, rows: IntArray) -> Array:
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(formula.error(self.known, h[:, None])[rows])

    def _worst(self, seen: Array, rows: IntArray) -> Array:
        """(rows,): largest error seen, relative to the size of each output's derivative; infinite for a failure."""
        relative = np.nanmax(seen / self.known.weight[rows], axis=1, initial=0.0)
        return np.asarray(np.nan_to_num(relative, nan=np.inf, posinf=np.inf))

    def _seen(self, formula: _Formula, h: Array, side: Array, rows: IntArray) -> Inquiry[Array]:
        """(rows, m): the larger error of two differences; infinite where the model failed, NaN without a witness."""
        direction = np.where(side == 0, 1.0, side)[rows, None]
        nodes = np.array(formula.nodes)
        displacements = direction * h[rows, None] * np.concatenate([nodes, BESIDE * nodes])
        x = self.base[self.columns[rows]][:, None]
        offsets = (x + displacements) - x
        reply = yield Request(base=self.base, directions=self.columns[rows], offsets=offsets)
        errors = []
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            for part in (slice(0, nodes.size), slice(nodes.size, 2 * nodes.size)):
                slopes = formula.slope(offsets[:, part], reply.values[:, part], self.known.centre)
                errors.append(np.where(np.isfinite(slopes), np.abs(slopes - self.known.slope[rows]), np.inf))
        return np.maximum(*errors)


@dataclass(frozen=True, slots=True, eq=False)
class _Found:
    """The best steps so far, the errors to tell, and the largest relative error seen: arrays (d,), written in place."""

    step: Array
    told: Array
    worst: Array

    def take(self, rows: IntArray, h: Array, seen: Array, expected: Array, worst: Array, better: BoolArray) -> None:
        """Keep the steps `h` of those `rows` where they are better."""
        at = rows[better]
        self.step[at] = h[at]
        self.told[at] = np.nanmax(np.maximum(expected, seen)[better], axis=1, initial=0.0)
        self.worst[at] = worst[better]
