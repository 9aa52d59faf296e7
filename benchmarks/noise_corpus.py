"""Functions of one variable whose values carry errors of a known level and a known kind.

A case is a smooth background, which is evaluated a second time in extended precision, and a way to spoil its values.
The true level is the standard deviation of spoilt minus exact values on a window around the point, once a polynomial of
degree five (a bias that is smooth is no noise) has been taken away. This file was written down before the inquiry that
is measured on it; every third member of a family is kept aside.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import numpy as np
from numpy.random import Generator

from tests.quality.line_corpus import simpson

Scalar = Callable[[float], float]
Background = Callable[[Any], Any]

TRUTH_POINTS = 600
TRUTH_SEED = 20260301
QUANTA = 20.0
WINDOW = 0.02  # half-width on which the truth is taken, in units of the variable's size
ROUNDING, SINGLE, INNER, DIGITS, UNREPEATABLE = (
    "rounding",
    "single precision",
    "inner tolerance",
    "few digits",
    "unrepeatable",
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NoiseCase:
    """One spoilt function at one point.

    Attributes
    ----------
    family, background : str
    make : callable
        Gives the function, with fresh hidden state.
    exact : callable
        The background in extended precision.
    x, size : float
        The point, and the size of the variable there.
    kinds : tuple of str
        Kinds that are right.
    kept_aside : bool
    """

    family: str
    background: str
    make: Callable[[], Scalar]
    exact: Callable[[Any], Any]
    x: float
    size: float
    kinds: tuple[str, ...]
    kept_aside: bool
    truth: list[float] = field(default_factory=list)

    @property
    def magnitude(self) -> float:
        """Size of the function at the point."""
        return abs(float(self.exact(np.longdouble(self.x))))

    def level(self) -> float:
        """Standard deviation of one value's error around the point."""
        if not self.truth:
            self.truth.append(self._level())
        return self.truth[0]

    def _level(self) -> float:
        rng = np.random.default_rng(TRUTH_SEED)
        t = rng.uniform(-1.0, 1.0, TRUTH_POINTS)
        x = self.x + WINDOW * self.size * t
        function = self.make()
        spoilt = np.array([function(float(v)) for v in x])
        error = np.asarray(spoilt.astype(np.longdouble) - self.exact(x.astype(np.longdouble)), dtype=float)
        basis = np.linalg.qr(np.polynomial.legendre.legvander(t, 5))[0]
        # Twice: the first one may be swamped by the bias.
        for _ in range(2):
            error = error - basis @ (basis.T @ error)
        return float(np.sqrt((error**2).sum() / (TRUTH_POINTS - 6)))


# ------------------------------------------------------------------ backgrounds, in units of the variable's size

BACKGROUNDS: dict[str, Background] = {
    "waves": lambda u: np.sin(3 * u + 1) + np.cos(7 * u) / 2 + 2,
    "fast wave": lambda u: np.sin(40 * u) + 3,
    "exponential": lambda u: np.exp(1.25 * u),
    "steep exponential": lambda u: np.exp(-8 * u) + 0.5,
    "cubic": lambda u: 1 + 2 * u - 3 * u**2 + 0.75 * u**3 + 4,
    "rational": lambda u: (u + 2) / (u * u + 3),
    "pole": lambda u: 1 / (u + 0.75),
    "layer": lambda u: np.tanh(30 * (u - 0.9)) + 2.5,
    "line": lambda u: 4 * u + 3,
    "offset": lambda u: 1000 + np.sin(2 * u),
    "root": lambda u: np.sqrt(u + 1.5),
    "logarithm": lambda u: np.log(u + 2.5) * 5,
}


def scrambled(x: float, salt: int = 0) -> float:
    """A deterministic number in [-1, 1] without any pattern in x (a 64-bit mix of its digits)."""
    bits = int(np.float64(x).view(np.uint64)) ^ (salt * 0x9E3779B97F4A7C15 & 0xFFFFFFFFFFFFFFFF)
    for factor in (0xBF58476D1CE4E5B9, 0x94D049BB133111EB):
        bits = ((bits ^ (bits >> 30)) * factor) & 0xFFFFFFFFFFFFFFFF
    bits ^= bits >> 31
    return (bits >> 11) / 2.0**52 - 1.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Place:
    """A background at a point: `g` of u = x/unit."""

    name: str
    g: Background
    unit: float
    x: float
    size: float

    def smooth(self, x: float) -> float:
        return float(self.g(np.float64(x) / self.unit))

    def exact(self, x: Any) -> Any:
        return self.g(x / np.longdouble(self.unit))

    @property
    def magnitude(self) -> float:
        return abs(self.smooth(self.x))


def place(rng: Generator) -> Place:
    """A random background at an ordinary, a huge, a tiny or a zero x."""
    name = str(rng.choice(list(BACKGROUNDS)))
    where = int(rng.integers(8))
    ordinary = float(rng.uniform(0.5, 1.5))
    if where == 0:
        unit, x, size = 1e8, ordinary * 1e8, ordinary * 1e8
    elif where == 1:
        unit, x, size = 1e-8, ordinary * 1e-8, ordinary * 1e-8
    elif where == 2:
        unit, x, size = 1.0, 0.0, 1.0
    elif where == 3:
        unit, x, size = 1.0, ordinary * 1e-8, 1.0
    elif where == 4:
        unit, x, size = 1.0, -0.3 * ordinary, 0.3 * ordinary
    else:
        unit, x, size = 1.0, ordinary, ordinary
    return Place(name=name, g=BACKGROUNDS[name], unit=unit, x=x, size=size)


def moving_place(rng: Generator, quantum: Callable[[Place], float]) -> Place:
    """A place whose background changes by many quanta on the window: others show nothing of them."""
    while True:
        where = place(rng)
        ends = [where.smooth(where.x + side * WINDOW * where.size) for side in (-1.0, 1.0)]
        if abs(ends[1] - ends[0]) > QUANTA * quantum(where):
            return where


# ------------------------------------------------------------------ ways to spoil values


def level_kinds(relative: float) -> tuple[str, ...]:
    """Right kinds of deterministic noise: below about 100 units in the last place it is called rounding."""
    if relative < 7e-15:
        return (ROUNDING,)
    return (ROUNDING, INNER) if relative < 7e-14 else (INNER,)


def rounding(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    where = place(rng)
    return where, lambda: where.smooth, (ROUNDING,)


def cancelled(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    large = 10.0 ** rng.uniform(2.0, 9.0)
    where = moving_place(rng, lambda _: float(np.spacing(large)))
    return where, lambda: lambda x: (where.smooth(x) + large) - large, (ROUNDING,)


def uniform(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    where, relative, salt = place(rng), 10.0 ** rng.uniform(-15.0, -2.0), int(rng.integers(1 << 30))
    size = math.sqrt(3.0) * relative * where.magnitude
    return where, lambda: lambda x: where.smooth(x) + size * scrambled(x, salt), level_kinds(relative)


def bell(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    where, relative, salt = place(rng), 10.0 ** rng.uniform(-13.0, -2.0), int(rng.integers(1 << 30))

    def normal(x: float) -> float:
        u, v = (scrambled(x, salt + k) / 2 + 0.5 for k in (1, 2))
        return math.sqrt(-2.0 * math.log(max(u, 1e-300))) * math.cos(2 * math.pi * v)

    return where, lambda: lambda x: where.smooth(x) * (1.0 + relative * normal(x)), level_kinds(relative)


def cells(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """An error that stays the same on cells of x, as after remeshing."""
    where, relative, salt = place(rng), 10.0 ** rng.uniform(-12.0, -2.0), int(rng.integers(1 << 30))
    width = where.size * 10.0 ** rng.uniform(-9.0, -4.0)
    size = math.sqrt(3.0) * relative * where.magnitude
    return (
        where,
        lambda: lambda x: where.smooth(x) + size * scrambled(math.floor(x / width), salt),
        level_kinds(relative),
    )


def relaxation(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """A slow relaxation whose rate depends on x, stopped when it hardly moves."""
    where, tolerance = place(rng), 10.0 ** rng.uniform(-9.0, -3.0)
    rate = rng.uniform(0.1, 0.5)

    def solved(x: float) -> float:
        goal = where.smooth(x)
        damping = rate * (1.0 + 0.5 * math.sin(900.0 * x / where.size))
        start = 5.0 * where.magnitude
        # Closed form of y <- y + damping (goal - y), stopped at the first step below the tolerance.
        steps = math.ceil(math.log(tolerance * where.magnitude / abs(goal - start) / damping) / math.log1p(-damping))
        return goal + (start - goal) * (1.0 - damping) ** max(steps, 1)

    return where, lambda: solved, (INNER,)


def halving(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """Bisection for the value, stopped at a loose tolerance, and a smooth factor behind it."""
    tolerance = 10.0 ** rng.uniform(-11.0, -4.0)
    where = moving_place(rng, lambda at: tolerance * at.magnitude)
    low, high = -0.3137 * where.magnitude, 13.713 * where.magnitude

    def solved(x: float) -> float:
        goal, a, b = where.smooth(x) / (1.0 + 0.2 * math.sin(x / where.size)), low, high
        while b - a > tolerance * where.magnitude:
            middle = 0.5 * (a + b)
            a, b = (middle, b) if middle < goal else (a, middle)
        return 0.5 * (a + b) * (1.0 + 0.2 * math.sin(x / where.size))

    return where, lambda: solved, (INNER,)


def quadrature(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """Adaptive quadrature of a wave of many periods, whose error is added to the background."""
    where, tolerance = place(rng), 10.0 ** rng.uniform(-6.0, -3.0)
    waves = rng.uniform(250.0, 500.0)

    def error(x: float) -> float:
        phase = waves * x / where.size
        found = simpson(lambda s: math.sin(12.0 * s + phase), 0.0, 1.0, tolerance)
        return found - (math.cos(phase) - math.cos(12.0 + phase)) / 12.0

    return where, lambda: lambda x: where.smooth(x) + where.magnitude * error(x), (INNER,)


def significant(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    digits = int(rng.integers(4, 10))
    where = moving_place(rng, lambda at: at.magnitude * 10.0 ** (1 - digits))
    return where, lambda: lambda x: float(f"{where.smooth(x):.{digits}g}"), (DIGITS,)


def decimals(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    digits = int(rng.integers(4, 10))
    where = moving_place(rng, lambda _: 10.0**-digits)
    return where, lambda: lambda x: round(where.smooth(x), digits), (DIGITS,)


def single_output(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    where = moving_place(rng, lambda at: 1.2e-7 * at.magnitude)
    return where, lambda: lambda x: float(np.float32(where.smooth(x))), (SINGLE,)


def single_inside(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """The whole background in single precision, with or without double precision behind it."""
    where, behind = place(rng), float(rng.choice([0.0, 0.1]))

    def spoilt(x: float) -> float:
        u = np.float32(x / where.unit)
        inner = float(where.g(u))
        return inner + behind * math.pi * (inner - where.smooth(x))

    return where, lambda: spoilt, (SINGLE,)


def single_intermediate(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """A factor that passes through single precision."""
    where = place(rng)

    def spoilt(x: float) -> float:
        u = x / where.size
        factor = math.cos(u + 0.3) + 2.0
        return where.smooth(x) * (float(np.float32(factor)) / factor)

    return where, lambda: spoilt, (SINGLE,)


def random_values(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    where, relative, seed = place(rng), 10.0 ** rng.uniform(-13.0, -2.0), int(rng.integers(1 << 30))

    def make() -> Scalar:
        dice = np.random.default_rng(seed)
        return lambda x: where.smooth(x) * (1.0 + relative * float(dice.normal()))

    return where, make, (UNREPEATABLE,)


def warm_start(rng: Generator) -> tuple[Place, Callable[[], Scalar], tuple[str, ...]]:
    """An inner iteration that starts where the last call ended, and stops after three steps."""
    where, left = place(rng), 10.0 ** rng.uniform(-7.0, -2.0)

    def make() -> Scalar:
        memory = [0.0, where.magnitude]

        def solved(x: float) -> float:
            goal, memory[0] = where.smooth(x), memory[0] + 1.0
            answer = goal + left * where.magnitude * (math.sin(37.0 * memory[0] ** 2) + (memory[1] - goal))
            memory[1] = answer
            return answer

        return solved

    return where, make, (UNREPEATABLE,)


FAMILIES: dict[Callable[[Generator], tuple[Place, Callable[[], Scalar], tuple[str, ...]]], int] = {
    rounding: 12,
    cancelled: 6,
    uniform: 18,
    bell: 9,
    cells: 9,
    relaxation: 6,
    halving: 6,
    quadrature: 6,
    significant: 9,
    decimals: 9,
    single_output: 6,
    single_inside: 6,
    single_intermediate: 6,
    random_values: 9,
    warm_start: 3,
}


def corpus(seed: int) -> list[NoiseCase]:
    """The cases of a seed; every third of a family is kept aside."""
    rng = np.random.default_rng(seed)
    found = []
    for family, count in FAMILIES.items():
        for member in range(count):
            where, make, kinds = family(rng)
            found.append(
                NoiseCase(
                    family=family.__name__,
                    background=where.name,
                    make=make,
                    exact=partial(Place.exact, where),
                    x=where.x,
                    size=where.size,
                    kinds=kinds,
                    kept_aside=member % 3 == 2,
                )
            )
    return found
