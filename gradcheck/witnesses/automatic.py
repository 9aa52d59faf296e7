"""The witness of automatic differentiation: exact up to rounding, and how much rounding that is.

One mode gives the derivatives, whichever needs fewer sweeps: forward one a direction, reverse one an output. Both modes
must then give the same numbers for random mixtures of all directions and of all outputs (⟨w, J·v⟩ = ⟨Jᵀ·w, v⟩, entry by
entry). What this cannot see is rounding that all sweeps share, because it happened in the values on which they are
built (differences of large numbers, loops stopped early). It is measured instead: the derivatives are taken at five
points beside the start, so close together that a parabola takes away the smooth part and leaves the noise. (The idea
of difference tables, Hamming; Moré & Wild 2011; here with uneven places.)

Whether the program that is differentiated has a kink or a staircase at the point is judged elsewhere.
"""

from collections.abc import Generator
from dataclasses import dataclass
from typing import Literal, TypeAlias

import numpy as np

from gradcheck.evaluation.protocol import Directions, Inquiry, Reply, Request, Status
from gradcheck.problem.domain import Domain, domain_of
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.steps import room_along
from gradcheck.witnesses.testimony import Testimony

Source: TypeAlias = Literal["jax", "autograd"]
_Mode: TypeAlias = Literal["jvp", "vjp"]
_Swept: TypeAlias = Generator[Request, Reply, Array | None]

#: Rounding of one sweep through a model of ordinary length, in units of the result: each of some dozens of operations
#: leaves half a unit.
ROUNDING = 64.0
DOUBLE = 2.0**-53
SINGLE = 2.0**-24
#: Places where derivatives are taken, in steps. Three of the six values are left over to show noise.
_BOTH_SIDES = np.array([0.0, 1.0, -1.0, 2.0, -2.0, 3.0])
#: A noise level from three values; Student's t with three degrees of freedom exceeds this once in 2,000.
NOISE_MARGIN = 16.0
#: Steps between the places, in units of x; the second for models that vary too fast for the first.
SPACINGS = (1e-6, 1e-9)
#: The places are uneven: on even ones, rounding errors may follow a straight line (k·α modulo 1).
_JITTER = 0.4
#: Scatter about a parabola beyond this many times that about a cubic is not noise: something smooth is left in it.
_LEVEL = 4.0
#: A derivative that is the same at all places, and so many units of f over the size of x or less, may be a remainder.
DROWNED = 1024.0
#: With more rows than this, noise is measured on mixtures of them.
_ROWS_APART = 8
#: Where the bound is more than this share of the derivative, a reason is given.
_WIDE = 1e-3

_NAMES: dict[_Mode, str] = {"jvp": "forward", "vjp": "reverse"}


def automatic(
    base: Array,
    directions: Directions,
    outputs: int,
    source: Source,
    *,
    domain: Domain | None = None,
    seed: int = 0,
) -> Inquiry[Testimony]:
    """Derivatives along `directions` by automatic differentiation, each value ± bound.

    Parameters
    ----------
    base : ndarray, shape (n,)
    directions : ndarray
        ``(d,)`` coordinate indices or ``(d, n)`` rows.
    outputs : int
        m.
    source : "jax" or "autograd"
    domain : Domain, optional
        Keeps the points beside the start inside the bounds, and tells the size of variables that are 0. Without it no
        point is forbidden.
    seed : int
        Of the random mixtures.

    Returns
    -------
    Testimony
        ``bound = 64·u·Σ|terms| + 16·σ + gap``: u is 2⁻⁵³, or 2⁻²⁴ where the result shows single precision; the terms
        are those of the sum over variables, where reverse mode needs one, else the value alone; σ is the measured noise
        of the derivative; the gap is what sweeps were seen to differ by. Where the derivative is exactly 0, terms may
        have been lost beside larger ones: the bound is then 64·u·|f| over the size of x. Where it is tiny beside this
        and constant, it may be a remainder of such terms: the bound is then its own size. Infinite where the derivative
        is not finite at the point or beside it.
        ``works`` is False if both modes raise, or contradict each other. If one mode raises, the other speaks alone,
        and ``reason`` says so.

    Notes
    -----
    Eight passes, thirteen for models that vary fast, and the value of f at `base`.
    """
    span = _Span(np.asarray(base, dtype=float), directions, outputs)
    domain = domain or domain_of(span.base)
    rng = np.random.default_rng(seed)
    desk = _Desk(source)
    mode: _Mode = "jvp" if span.count <= outputs else "vjp"
    raw = yield from desk.sweep(span.base, mode, span.rows(mode))
    if raw is None and not desk.refused:
        mode = _other(mode)
        raw = yield from desk.sweep(span.base, mode, span.rows(mode))
    if raw is None:
        return Testimony.silent(source, span.count, outputs, desk.complaint(), desk.spent)
    value, terms = span.derivatives(mode, raw)
    mixture = span.mixture(value, rng)
    mixed = {}
    for each in (mode, _other(mode)) if desk.asked == 1 else (mode,):
        swept = yield from desk.sweep(span.base, each, mixture.rows[each])
        if swept is not None:
            mixed[each] = swept
    alone = _other(mode) not in mixed
    noise = yield from _noise(span, desk, domain, mode, mixture, apart=alone, rng=rng)
    if desk.refused:
        return Testimony.silent(source, span.count, outputs, desk.complaint(), desk.spent)
    level = yield from _resolution(span, domain, desk)
    found = _Found(value=value, terms=terms, noise=noise, unit=_unit(span, mixed), level=level)
    contradiction = _compare(found, span, mixture, mixed, mode)
    if contradiction:
        return Testimony.silent(source, span.count, outputs, contradiction, desk.spent)
    reason = f"{_NAMES[_other(mode)]} mode raises, so {_NAMES[mode]} mode speaks alone" if alone else ""
    return _testimony(found, source, reason, desk.spent)


def _other(mode: _Mode) -> _Mode:
    return "vjp" if mode == "jvp" else "jvp"


@dataclass(slots=True)
class _Desk:
    """Asks for sweeps, and keeps the account."""

    source: str
    asked: int = 0
    spent: int = 0
    refused: bool = False

    def sweep(self, point: Array, mode: _Mode, rows: Array) -> _Swept:
        """``(rows, width)``; None if the model raised or was not evaluated."""
        reply = yield Request(
            base=point, directions=rows, offsets=np.zeros((len(rows), 1)), arithmetic=mode, source=self.source
        )
        self.asked += 1
        self.spent += reply.spent
        status = Status(reply.status[0, 0])
        self.refused |= status == Status.REFUSED
        return np.asarray(reply.values[:, 0, :], dtype=float) if status <= Status.NONFINITE else None

    def complaint(self) -> str:
        if self.refused:
            return "budget or time spent"
        return f"the model raises inside {self.source}, in forward and in reverse mode"


@dataclass(slots=True, kw_only=True, eq=False)
class _Found:
    """Derivatives and what is known of their rounding; all arrays ``(d, m)``.

    Attributes
    ----------
    value, terms, noise, unit
        The derivative, the sum of its absolute terms, its measured noise, and the unit round-off of its arithmetic.
    level : ndarray
        |f| over the size of x along each direction.
    gap : ndarray or 0
        Differences that were seen between sweeps, as a share of each entry.
    """

    value: Array
    terms: Array
    noise: Array
    unit: Array
    level: Array
    gap: Array | float = 0.0

    @property
    def bound(self) -> Array:
        bound = ROUNDING * self.unit * self.terms + NOISE_MARGIN * self.noise + self.gap
        bound = np.where(bound == 0, ROUNDING * self.unit * self.level, bound)
        # tanh at x = 19, with the derivative 1 - tanh²: some units in the last place of 1, and the same ones all around
        size = np.abs(self.value)
        drowned = (size <= DROWNED * self.unit * self.level) & (self.noise <= 16 * self.unit * size)
        return np.where(drowned, np.maximum(bound, size), bound)


@dataclass(frozen=True, slots=True, eq=False)
class _Mixture:
    """Random weights of directions (d,) and outputs (m,), and the one row that each mode needs for them."""

    directions: Array
    outputs: Array
    rows: dict[_Mode, Array]


@dataclass(frozen=True, slots=True, eq=False)
class _Span:
    """What is asked: derivatives of m outputs along d directions in n variables."""

    base: Array
    directions: Directions
    outputs: int

    @property
    def count(self) -> int:
        return len(self.directions)

    def rows(self, mode: _Mode) -> Array:
        """The rows that a mode needs for everything that is asked."""
        if mode == "vjp":
            return np.eye(self.outputs)
        if self.directions.ndim == 2:
            return np.asarray(self.directions, dtype=float)
        rows = np.zeros((self.count, self.base.size))
        rows[np.arange(self.count), self.directions] = 1.0
        return rows

    def derivatives(self, mode: _Mode, raw: Array) -> tuple[Array, Array]:
        """``(d, m)`` values and sums of absolute terms, from the sweep of `rows`."""
        return (raw, np.abs(raw)) if mode == "jvp" else self.along(raw)

    def along(self, gradients: Array) -> tuple[Array, Array]:
        """``(d, k)`` derivatives along the directions, and sums of absolute terms, from gradients ``(k, n)``.

        A gradient that is not finite in a variable spoils only the directions that move this variable.
        """
        if self.directions.ndim == 1:
            picked = gradients[:, self.directions].T
            return picked, np.abs(picked)
        finite = np.isfinite(gradients)
        known = np.where(finite, gradients, 0.0)
        spoilt = ((self.directions != 0).astype(float) @ (~finite).astype(float).T) > 0
        value = self.directions @ known.T
        return np.where(spoilt, np.nan, value), np.abs(self.directions) @ np.abs(known).T

    def mixture(self, value: Array, rng: np.random.Generator) -> _Mixture:
        """Weights that bring all rows and all columns of `value` to one size, so that no entry hides behind another."""
        size = np.abs(np.where(np.isfinite(value), value, 0.0))
        directions = _weights(size.max(axis=1), rng)
        outputs = _weights((np.abs(directions)[:, None] * size).max(axis=0), rng)
        if self.directions.ndim == 2:
            moved = directions @ self.directions
        else:
            moved = np.zeros(self.base.size)
            np.add.at(moved, self.directions.astype(np.intp), directions)
        return _Mixture(directions, outputs, {"jvp": moved[None], "vjp": outputs[None]})


def _weights(size: Array, rng: np.random.Generator) -> Array:
    largest = size.max(initial=0.0) or 1.0
    random = rng.uniform(0.5, 1.0, size.size) * rng.choice([-1.0, 1.0], size.size)
    return np.asarray(random / np.where(size > 0, size, largest))


def _noise(
    span: _Span,
    desk: _Desk,
    domain: Domain,
    mode: _Mode,
    mixture: _Mixture,
    *,
    apart: bool,
    rng: np.random.Generator,
) -> Generator[Request, Reply, Array]:
    """``(d, m)`` noise level of the derivatives; NaN where they are not finite beside the point.

    With many rows, two mixtures: the noise of one entry is no more than that of the mixture of its column over its
    weight, nor than that of its row.
    """
    if apart or len(span.rows(mode)) <= _ROWS_APART:
        noise = yield from _noise_of(span, desk, domain, mode, span.rows(mode), rng)
        return noise
    by_output = yield from _noise_of(span, desk, domain, "jvp", mixture.rows["jvp"], rng)
    by_direction = yield from _noise_of(span, desk, domain, "vjp", mixture.rows["vjp"], rng)
    return np.fmin(
        by_output / np.abs(mixture.directions)[:, None],
        by_direction / np.abs(mixture.outputs)[None, :],
    )


def _noise_of(
    span: _Span, desk: _Desk, domain: Domain, mode: _Mode, rows: Array, rng: np.random.Generator
) -> Generator[Request, Reply, Array]:
    best = np.asarray(np.nan)
    for spacing in SPACINGS:
        places, step = _beside(span.base, domain, spacing, rng)
        values = []
        for place in places:
            point = np.clip(span.base + place * step, domain.lower, domain.upper)
            swept = yield from desk.sweep(point, mode, rows)
            if swept is None:
                return np.full((1, 1), np.nan)
            values.append(span.derivatives(mode, swept)[0])
        noise, settled = _level_of(places, np.array(values))
        best = np.fmin(best, noise)
        if settled.all():
            break
    return best


def _beside(base: Array, domain: Domain, spacing: float, rng: np.random.Generator) -> tuple[Array, Array]:
    """Places on a line, the start (0) first, and the step ``(n,)`` of all variables between them.

    On both sides of the start, so that a kink there shows; where a variable has no room for this, on one side, which is
    the roomier one for each variable.
    """
    size = np.where(base != 0, np.abs(base), domain.scale) * rng.uniform(0.5, 1.0, base.size)
    sign = rng.choice([-1.0, 1.0], base.size)
    below, above = base - domain.lower, domain.upper - base
    places = _BOTH_SIDES + np.where(_BOTH_SIDES == 0, 0.0, rng.uniform(-_JITTER, _JITTER, _BOTH_SIDES.size))
    if (np.minimum(below, above) < np.abs(places).max() * spacing * size).any():
        places = np.abs(places) * 2 - (places > 0)
        sign = np.where(np.where(sign > 0, above, below) < places.max() * spacing * size, _roomier(below, above), sign)
    room = np.where(sign > 0, above, below)
    return places, np.asarray(sign * np.minimum(spacing * size, room / places.max()))


def _roomier(below: Array, above: Array) -> Array:
    return np.where(above >= below, 1.0, -1.0)


def _level_of(places: Array, values: Array) -> tuple[Array, BoolArray]:
    """Noise level of values ``(k, ...)`` at `places`, and where nothing smooth is left in it."""
    known = np.where(np.isfinite(values), values, 0.0)
    parabola, cubic = (_scatter(places, known, degree) for degree in (2, 3))
    rounding = DOUBLE * np.abs(known).max(axis=0)
    level = np.where(np.isfinite(values).all(axis=0), np.maximum(parabola, cubic), np.nan)
    return level, parabola <= _LEVEL * np.maximum(cubic, 4 * rounding)


def _scatter(places: Array, values: Array, degree: int) -> Array:
    """Standard deviation of values ``(k, ...)`` about a polynomial in `places`."""
    basis, _ = np.linalg.qr(np.vander(places, degree + 1))
    with np.errstate(over="ignore", invalid="ignore"):  # derivatives of 1e160: the scatter is infinite or NaN then
        rest = values - np.tensordot(basis @ basis.T, values, axes=1)
        return np.asarray(np.sqrt((rest**2).sum(axis=0) / (places.size - degree - 1)))


def _unit(span: _Span, mixed: dict[_Mode, Array]) -> Array:
    """``(d, m)`` unit round-off of the result: of single precision where random mixtures come out as exact float32.

    By chance a double does so once in 2²⁹.
    """
    single = np.zeros((span.count, span.outputs), dtype=bool)
    if "jvp" in mixed:
        single |= _is_float32(mixed["jvp"][0])[None, :]
    if "vjp" in mixed:
        variables = _is_float32(mixed["vjp"][0])
        if span.directions.ndim == 1:
            single |= variables[span.directions][:, None]
        else:
            single |= ((span.directions != 0) & variables).any(axis=1)[:, None]
    return np.where(single, SINGLE, DOUBLE)


def _is_float32(values: Array) -> BoolArray:
    with np.errstate(over="ignore", under="ignore"):
        short = values.astype(np.float32)
    return np.asarray((values != 0) & np.isfinite(values) & (short == values))


def _compare(found: _Found, span: _Span, mixture: _Mixture, mixed: dict[_Mode, Array], mode: _Mode) -> str:
    """The contradiction between sweeps, empty if there is none; `found` learns of smaller differences.

    A difference too large for double precision but not for single shows that part of the model computes in single
    precision. Where terms cancel inside the model, sweeps differ by rounding relative to f; that widens the bound.
    """
    gaps, contradictions = [np.zeros((1, 1))], []
    for each, swept in mixed.items():
        axis = 0 if each == "jvp" else 1
        weights = np.expand_dims((mixture.directions, mixture.outputs)[axis], 1 - axis)
        got, extra = (swept[0], np.abs(swept[0])) if each == "jvp" else (part[:, 0] for part in span.along(swept))
        expected = (weights * found.value).sum(axis=axis)
        size = (np.abs(weights) * found.terms).sum(axis=axis) + extra
        rounding = DOUBLE * (size + (np.abs(weights) * found.level).sum(axis=axis))
        # what is not finite is told entry by entry, not compared
        known = np.isfinite(got) & np.isfinite(expected)
        gap = np.abs(np.where(known, got, 0.0) - np.where(known, expected, 0.0))
        own = np.nan_to_num((np.abs(weights) * NOISE_MARGIN * found.noise).sum(axis=axis), nan=np.inf)
        single = np.expand_dims(gap > own + ROUNDING * rounding, axis)
        found.unit = np.where(single, SINGLE, found.unit)
        gaps.append(np.expand_dims(gap, axis) / np.abs(weights))
        worse = gap > own + ROUNDING * np.maximum(rounding, SINGLE * size)
        if worse.any():
            worst = int(np.argmax(np.where(worse, gap, 0.0)))
            contradictions.append(_contradiction(each, mode, got[worst], expected[worst]))
    found.gap = np.max(np.broadcast_arrays(*gaps), axis=0)
    return "; ".join(contradictions)


def _contradiction(each: _Mode, mode: _Mode, got: float, expected: float) -> str:
    if each == mode:
        rows = "tangents" if each == "jvp" else "cotangents"
        return f"{_NAMES[each]} mode is not linear in its {rows}: {got:.6g} vs {expected:.6g}"
    forward, reverse = (got, expected) if each == "jvp" else (expected, got)
    return f"forward and reverse modes disagree: {forward:.6g} vs {reverse:.6g}"


def _resolution(span: _Span, domain: Domain, desk: _Desk) -> Generator[Request, Reply, Array]:
    """``(d, m)``: |f| over the size of x along each direction; a derivative of exactly 0 may hide its rounding.

    The logistic function s at x = 40, with the derivative s·(1 - s), has the derivative 0 and not 4e-18.
    """
    reply = yield Request(base=span.base, directions=np.zeros(1, dtype=np.intp), offsets=np.zeros((1, 1)))
    desk.spent += reply.spent
    level = np.nan_to_num(np.abs(reply.values[0, 0].astype(float)), nan=0.0, posinf=0.0)
    scale = room_along(span.base, span.directions, domain).scale
    # not 0 where f is 0: the smallest normal number stands for what underflows
    return np.asarray(np.maximum(level[None, :], np.finfo(float).tiny / DOUBLE) / scale[:, None])


def _testimony(found: _Found, source: str, reason: str, spent: int) -> Testimony:
    bound = found.bound
    reasons: dict[tuple[int, int], str] = {}
    for text, where in (
        ("the derivative is noisy or jumps beside the point", NOISE_MARGIN * found.noise > _WIDE * np.abs(found.value)),
        ("the derivative is not finite beside the point", ~np.isfinite(bound)),
        ("the derivative is not finite", ~np.isfinite(found.value)),
    ):
        reasons |= {(int(k), int(i)): text for k, i in np.argwhere(where)}
    bound = np.where(np.isfinite(bound) & np.isfinite(found.value), bound, np.inf)
    if (found.unit == SINGLE).any():
        reason = "; ".join(filter(None, [reason, "computed in single precision"]))
    return Testimony(value=found.value, bound=bound, source=source, reason=reason, reasons=reasons, spent=spent)
