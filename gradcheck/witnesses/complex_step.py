"""The complex-step witness, with proof that the model carries the imaginary part through.

Im f(x + ihd)/h is the derivative along d to the last digit (Lyness & Moler 1967; Squire & Trapp 1998; Martins,
Sturdza & Alonso 2003), but only where the code is analytic: an absolute value, a conjugation, a cast to float or a
look-up loses the imaginary part, mostly in silence. Hence the quotient alone proves nothing. Per direction:

1. Two quotients, h = 1e-20 and 1e-10 of the variable's size, must agree, and the real part must stay where it was.
2. Eight values on the upper half of a circle around x, mirrored by conjugation, give Fourier coefficients c_-7 … c_8
   (Lyness & Moler 1967). The circle shrinks until the outermost ones are rounding.
3. An analytic function has c_k = 0 for k < 0, c_0 = f(x) and c_1 = radius · derivative, and its power series continues
   to real points. What is found instead, also at four real points, either refutes the quotient or bounds its error.

An imaginary part of zero means nothing by itself; the circle decides.
"""

from collections.abc import Generator
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from gradcheck.evaluation.protocol import Directions, Inquiry, Reply, Request, Status
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.testimony import Testimony

SOURCE = "complex step"

#: Imaginary steps, in units of the variable's size. The second shows what drowns below some size of the imaginary part.
STEPS = (1e-20, 1e-10)
#: The two quotients agree, as shares of the derivative; the real part stays, as a share of f.
QUOTIENTS_AGREE, REAL_PART_STAYS = 1e-12, 1e-13
#: Radius of the first and of the last circle, in units of the variable's size.
WIDEST, SMALLEST = 0.03, 1e-8
CIRCLES_MOST = 12
#: The tail of the coefficients is rounding below this many floors.
RESOLVED = 16.0
#: A residual beyond this many noise levels, and this share of the first coefficient, shows a lost imaginary part.
REFUTED, NEGLIGIBLE = 8.0, 1e-10
#: A circle on which the model is not finite, or larger than this, is drawn again so much smaller.
RETREAT, LARGEST = 0.1, 1e150

NO_CIRCLE = "no circle around the point is free of noise, kinks and poles"
RAISES = "the model raises on complex numbers"
SPENT = "budget or time spent"

_U = 2.0**-53
_ANGLES = (np.arange(8) + 0.5) * np.pi / 8
_ORDERS = np.arange(-7, 9)
_TAIL = np.isin(_ORDERS, (8, -7, -6, -5))
#: Real points beside x, in radii.
_REAL = np.array([1.0, -1.0, 0.6, -0.6])


def complex_step(
    base: Array,
    directions: Directions,
    outputs: int,
    *,
    scale: Array,
    f0: Array,
    reach: Array,
) -> Inquiry[Testimony]:
    """Derivatives along `directions` by the complex step, each value ± bound.

    Parameters
    ----------
    base : ndarray, shape (n,)
    directions : ndarray
        ``(d,)`` coordinate indices or ``(d, n)`` rows.
    outputs : int
        m.
    scale : ndarray, shape (d,)
        Displacement that moves the variables by their own size, in units of the direction, > 0.
    f0 : ndarray, shape (m,)
        Values of the model at `base`, in real numbers.
    reach : ndarray, shape (d,)
        Largest displacement, both ways, that stays within the bounds.

    Returns
    -------
    Testimony
        ``bound = (8·noise + 4·worst residual)/radius + 4·u·|value|``; infinite, with a reason, where the imaginary
        part is shown to be lost, where nothing was shown, or where a bound leaves no room for a circle. ``works`` is
        False if that is so everywhere, or if the model raises on complex numbers.

    Notes
    -----
    14 evaluations a direction, 8 more for every smaller circle. Constants, and functions whose derivative is 0, are
    settled like any other; only f = 0 all over the circle stays open.
    """
    trial = _Trial(
        base=np.asarray(base, dtype=float),
        directions=directions,
        scale=np.asarray(scale, dtype=float),
        start=np.asarray(f0, dtype=float),
        # a hair less: x + displacement is rounded and must not land beyond the bound
        radius=np.minimum(WIDEST, np.asarray(reach, dtype=float) * (1 - 1e-12) / scale),
        outputs=outputs,
    )
    yield from _two_quotients(trial)
    trial.give_up(trial.waiting & (trial.radius < SMALLEST)[:, None], "a bound leaves no room to test it")
    for _ in range(CIRCLES_MOST):
        rows = np.flatnonzero(trial.waiting.any(axis=1))
        if rows.size == 0 or trial.refused:
            break
        yield from _one_circle(trial, rows)
    trial.give_up(trial.waiting, SPENT if trial.refused else NO_CIRCLE)
    return trial.testimony()


@dataclass(slots=True, kw_only=True, eq=False)
class _Trial:
    """Where each direction and output stands; arrays ``(d, m)`` if not said otherwise."""

    base: Array
    directions: Directions
    scale: Array
    start: Array  # (m,) f(x)
    radius: Array  # (d,) of the next circle, in units of scale
    outputs: int
    quotients: Array = field(init=False)  # (2, d, m)
    moves: Array = field(init=False)  # (2, d, m) of the real part
    waiting: BoolArray = field(init=False)
    bound: Array = field(init=False)
    step: Array = field(init=False)
    noise: Array = field(init=False)
    raises: BoolArray = field(init=False)  # (d,)
    reasons: dict[tuple[int, int], str] = field(default_factory=dict)
    spent: int = 0
    refused: bool = False

    def __post_init__(self) -> None:
        shape = len(self.directions), self.outputs
        self.waiting = np.ones(shape, dtype=bool)
        self.bound = np.full(shape, np.inf)
        self.step = np.full(shape, np.nan)
        self.noise = np.full(shape, np.nan)

    @property
    def value(self) -> Array:
        return np.asarray(self.quotients[0])

    def ask(
        self, rows: IntArray, offsets: NDArray[np.inexact]
    ) -> Generator[Request, Reply, tuple[NDArray[Any], BoolArray]]:
        """Values ``(k, points, m)`` along some directions, and ``(k, points)`` where the model gave any."""
        reply = yield Request(
            base=self.base,
            directions=self.directions[rows],
            offsets=offsets,
            arithmetic="complex" if np.iscomplexobj(offsets) else "real",
        )
        self.spent += reply.spent
        self.refused |= bool(reply.refused.any())
        return reply.values, reply.status <= Status.NONFINITE

    def give_up(self, where: BoolArray, reason: str) -> None:
        """No bound for these entries, and why."""
        self.waiting = self.waiting & ~where
        for k, i in np.argwhere(where):
            self.reasons.setdefault((int(k), int(i)), reason)

    def own_size(self) -> Array:
        """``(d,)``: displacement as large as the largest x that moves; rounding of x shows as u times this."""
        if self.directions.ndim == 1:
            return np.abs(self.base[self.directions])
        moves = self.directions != 0
        ratio = np.abs(self.base) / np.where(moves, np.abs(self.directions), 1.0)
        return np.asarray(np.where(moves, ratio, 0.0).max(axis=1))

    def testimony(self) -> Testimony:
        if self.refused and not np.isfinite(self.bound).any():
            return self._silent(SPENT)
        if self.raises.all():
            return self._silent(RAISES)
        if not np.isfinite(self.bound).any():
            return self._silent(next(iter(self.reasons.values())))
        return Testimony(
            value=self.value,
            bound=self.bound,
            source=SOURCE,
            step=self.step,
            noise=np.where(np.isnan(self.noise), 0.0, self.noise).max(axis=0),
            spent=self.spent,
            reasons=self.reasons,
        )

    def _silent(self, reason: str) -> Testimony:
        return Testimony(
            value=self.value,
            bound=self.bound,
            source=SOURCE,
            spent=self.spent,
            works=False,
            reason=reason,
            reasons=self.reasons,
        )


_Step: TypeAlias = Generator[Request, Reply, None]


def _two_quotients(trial: _Trial) -> _Step:
    heights = trial.scale[:, None] * np.array(STEPS)
    values, given = yield from trial.ask(np.arange(len(trial.scale)), 1j * heights)
    with np.errstate(over="ignore", invalid="ignore"):  # where it is infinite or NaN, it is given up
        quotients = np.moveaxis(values.imag / heights[:, :, None], 1, 0)
        trial.moves = np.moveaxis(values.real - trial.start, 1, 0)
    known = np.isfinite(values).all(axis=1) & np.isfinite(quotients).all(axis=0)
    trial.quotients = np.where(known, quotients, np.nan)
    trial.raises = ~np.all(given, axis=1)
    whole = np.ones(trial.outputs, dtype=bool)
    trial.give_up(trial.raises[:, None] & whole, SPENT if trial.refused else RAISES)
    trial.give_up(trial.waiting & ~known, "not finite for complex numbers")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Circle:
    """What one circle showed along k directions; arrays ``(k, m)`` if not said otherwise."""

    rows: IntArray  # (k,)
    radius: Array  # (k, 1), in units of the direction
    coefficients: Array  # (k, 16, m)
    largest: Array
    noise: Array
    resolved: BoolArray

    def coefficient(self, order: int) -> Array:
        return np.asarray(self.coefficients[:, order - int(_ORDERS[0])])

    def only(self, chosen: BoolArray) -> "_Circle":
        """The same for some of the directions ``(k,)``."""
        return _Circle(**{name: getattr(self, name)[chosen] for name in self.__dataclass_fields__})


def _one_circle(trial: _Trial, rows: IntArray) -> _Step:
    radius = trial.radius[rows] * trial.scale[rows]
    values, given = yield from trial.ask(rows, radius[:, None] * np.exp(1j * _ANGLES))
    with np.errstate(over="ignore", invalid="ignore"):  # what is not a number compares as unusable
        usable = np.all(np.abs(values) < LARGEST, axis=1) & np.all(given, axis=1, keepdims=True)
    circle, floor = _circle(trial, rows, radius, np.where(usable[:, None, :], values, 0.0), usable)
    settling: BoolArray = np.any(circle.resolved & trial.waiting[rows], axis=1)
    if settling.any():
        yield from _compare(trial, circle.only(settling))
    with np.errstate(divide="ignore", invalid="ignore"):  # noise 0: resolved, and not used
        shrink = np.minimum(0.8 * (2 * floor / circle.noise) ** (1 / 8), 0.7)
    shrink = np.where(usable, shrink, RETREAT)
    # the slowest of the outputs still waiting: a circle too small would cost the others their digits
    trial.radius[rows] *= np.where(trial.waiting[rows], shrink, 0.0).max(axis=1)
    trial.give_up(trial.waiting & (trial.radius < SMALLEST)[:, None], NO_CIRCLE)


def _circle(
    trial: _Trial, rows: IntArray, radius: Array, values: NDArray[np.complex128], usable: BoolArray
) -> tuple[_Circle, Array]:
    """Fourier coefficients of values ``(k, 8, m)`` on the upper half circle, and the floor ``(k, m)`` of rounding."""
    # The lower half is the mirror image, so the coefficients are real.
    basis = np.exp(-1j * np.outer(_ORDERS, _ANGLES)) / 8
    coefficients = np.einsum("oj,kjm->kom", basis, values).real
    largest = np.maximum(np.abs(values).max(axis=1), np.abs(trial.start))
    floor = _U * (largest + np.abs(trial.value[rows]) * trial.own_size()[rows, None])
    noise = np.maximum(np.sqrt(np.mean(coefficients[:, _TAIL] ** 2, axis=1)), floor)
    resolved = usable & (noise <= RESOLVED * floor)
    return _Circle(
        rows=rows,
        radius=radius[:, None],
        coefficients=coefficients,
        largest=largest,
        noise=noise,
        resolved=resolved,
    ), floor


def _compare(trial: _Trial, circle: _Circle) -> _Step:
    """Settles the entries whose circle is resolved: a bound, or a reason why there is none."""
    rows, radius, noise = circle.rows, circle.radius, circle.noise
    values, given = yield from trial.ask(rows, radius * _REAL)
    judged = circle.resolved & trial.waiting[rows]
    value = trial.value[rows]
    residuals = _residuals(trial, circle, np.where(given[:, :, None], values, np.nan))
    worst = np.max(list(residuals.values()), axis=0)
    allowed = np.maximum(REFUTED * noise, NEGLIGIBLE * radius * np.abs(value))
    parting, moved = _in_the_series(trial, circle)
    bound = (REFUTED * noise + 4 * worst) / radius + 4 * _U * np.abs(value)
    for k, i in np.argwhere(judged):
        entry = int(rows[k]), int(i)
        if circle.largest[k, i] == 0 and worst[k, i] == 0:
            trial.reasons[entry] = "f is 0 all over the circle, so nothing is shown"
        elif not parting[k, i] <= QUOTIENTS_AGREE * abs(value[k, i]) + noise[k, i] / radius[k, 0]:
            first, second = trial.quotients[:, entry[0], entry[1]]
            trial.reasons[entry] = f"the quotient depends on the imaginary step: {first:.6g} or {second:.6g}"
        elif not moved[k, i] <= REAL_PART_STAYS * circle.largest[k, i] + noise[k, i]:
            trial.reasons[entry] = f"the real part moves by {moved[k, i]:.3g} with an imaginary step"
        elif not worst[k, i] <= allowed[k, i]:
            trial.reasons[entry] = _showing(circle, residuals, value, int(k), int(i))
        else:
            trial.bound[entry], trial.step[entry], trial.noise[entry] = bound[k, i], radius[k, 0], noise[k, i]
    trial.waiting[rows] &= ~judged


def _in_the_series(trial: _Trial, circle: _Circle) -> tuple[Array, Array]:
    """By how much the two quotients part, and the real part moves, beyond what the series of f explains; ``(k, m)``.

    With f = Σ a_k·tᵏ: Re f(ih) = a_0 - a_2·h² and Im f(ih)/h = a_1 - a_3·h². Of a steep function, h = 1e-10 shows.
    """
    heights = np.multiply.outer(STEPS, trial.scale[circle.rows])[:, :, None] / circle.radius
    moves = trial.moves[:, circle.rows] + circle.coefficient(2) * heights**2
    quotients = trial.quotients[:, circle.rows] + circle.coefficient(3) / circle.radius * heights**2
    return np.abs(quotients[1] - quotients[0]), np.abs(moves).max(axis=0)


def _residuals(trial: _Trial, circle: _Circle, values: Array) -> dict[str, Array]:
    """By how much, in units of f, the circle fails to show an analytic function of this slope; each ``(k, m)``."""
    series = np.vander(_REAL, 9, increasing=True)  # orders 0 … 8 at the real points
    continued = np.einsum("po,kom->kpm", series, circle.coefficients[:, _ORDERS >= 0])
    return {
        "slope": np.abs(circle.coefficient(1) - circle.radius * trial.value[circle.rows]),
        "conjugate": np.max([np.abs(circle.coefficient(order)) for order in (-1, -2, -3)], axis=0),
        "centre": np.abs(circle.coefficient(0) - trial.start),
        "real": np.abs(continued - values).max(axis=1),
    }


def _showing(circle: _Circle, residuals: dict[str, Array], value: Array, k: int, i: int) -> str:
    """What shows that the imaginary part is lost."""
    radius = float(circle.radius[k, 0])
    slope = circle.coefficient(1)[k, i] / radius
    sizes = {name: float(residual[k, i]) for name, residual in residuals.items()}
    if np.isnan(sizes["real"]):
        return "no real values beside the point to compare with"
    name = max(sizes, key=lambda name: sizes[name])
    if value[k, i] == 0 and name == "slope":
        return f"the imaginary part is lost: 0 came back where a circle shows a slope of {slope:.6g}"
    return {
        "slope": f"the quotient is {value[k, i]:.6g}, but a circle shows a slope of {slope:.6g}",
        "conjugate": f"not analytic: a part that follows the conjugate, of slope {sizes['conjugate'] / radius:.3g}",
        "centre": f"the mean over a circle differs from f by {sizes['centre']:.3g}",
        "real": f"values on a circle do not continue the real ones: they differ by {sizes['real']:.3g}",
    }[name]
