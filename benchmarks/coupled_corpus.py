"""Smooth models of ten variables, to measure verdicts on.

Written down before any of them was checked; never adapt an entry to what a check does with it, add new ones at the end.
As in `benchmarks.corpus`, one formula serves doubles and many digits: ``formula(m, x)`` with ten numbers in `x`.
"""

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any

import mpmath
import numpy as np

from benchmarks.corpus import FLOATS

N = 10
#: Digits of the reference, and its step: truncation leaves some 1e-40 of a function's scale.
DIGITS, STEP = 80, mpmath.mpf(10) ** -22
Sampler = Callable[[np.random.Generator], np.ndarray]


def total(terms: Any) -> Any:
    """Sum from left to right, as a loop would."""
    result: Any = 0.0
    for term in terms:
        result = result + term
    return result


def product(factors: Any) -> Any:
    """Product from left to right."""
    result: Any = 1.0
    for factor in factors:
        result = result * factor
    return result


def within(lower: float, upper: float) -> Sampler:
    """Uniform, each variable on its own."""
    return lambda rng: rng.uniform(lower, upper, N)


def scattered(low: int, high: int) -> Sampler:
    """Variables of very different size: signs at random, decades from `low` to `high`."""
    return lambda rng: rng.choice((-1.0, 1.0), N) * 10.0 ** rng.uniform(low, high, N)


def _cells(x: Any) -> Any:
    return itertools.pairwise(x)


def _layers(m: Any, x: Any) -> Any:
    hidden = [m.tanh(x[i] * 0.7 - x[i + 3] * 0.4 + 0.1 * i) for i in range(7)]
    return total((0.3 * i - 0.8) * h for i, h in enumerate(hidden)) ** 2 + 0.01 * total(xi * xi for xi in x)


def _masses(m: Any, x: Any) -> Any:
    """Potential of a chain of unequal springs with stiffening."""
    stretch = [b - a - 0.3 for a, b in _cells(x)]
    return total((1 + 0.2 * i) * s**2 / 2 + 0.1 * s**4 for i, s in enumerate(stretch)) + m.cosh(x[0])


def _march(m: Any, x: Any) -> Any:
    """Thirty explicit steps of a reservoir cascade whose inflow the variables shape."""
    level, spilled = 1.0, 0.0
    for k in range(30):
        level = level + 0.05 * (x[k % N] - 0.4 * level * m.sqrt(level))
        spilled = spilled + 0.05 * level * level
    return spilled


def _tempered(m: Any, x: Any) -> Any:
    """Rate laws in series: pre-factors and activation energies of very different size."""
    return total(m.exp(0.1 * x[i] - (3 + i) / (1 + x[i + 5] ** 2)) for i in range(5))


Row = tuple[str, Callable[[Any, Any], Any], Sampler]

ROWS: tuple[Row, ...] = (
    ("quadratic form", lambda m, x: total((i + 1) * a * b for i, (a, b) in enumerate(_cells(x))), within(-2, 2)),
    ("linear", lambda m, x: total((0.37 * i - 1.2) * a for i, a in enumerate(x)) + 5.5, within(-3, 3)),
    (
        "valley chain",
        lambda m, x: total(100 * (b - a * a) ** 2 + (1 - a) ** 2 for a, b in _cells(x)),
        within(-1.5, 1.5),
    ),
    ("log-sum-exp", lambda m, x: m.log(total(m.exp(a * (0.5 + 0.1 * i)) for i, a in enumerate(x))), within(-3, 3)),
    (
        "production function",
        lambda m, x: 2.5 * product(m.power(a, 0.03 + 0.01 * i) for i, a in enumerate(x)),
        within(0.5, 9),
    ),
    (
        "softplus loss",
        lambda m, x: total(m.log1p(m.exp(-(2 * (i % 2) - 1) * (a - b))) for i, (a, b) in enumerate(_cells(x))),
        within(-2, 2),
    ),
    ("coupled waves", lambda m, x: total(m.sin(a * b + 0.3) for a, b in _cells(x)) + m.cos(total(x)), within(-2, 2)),
    ("ratio", lambda m, x: total(x[:5]) / (1 + total(a * a for a in x[5:])), within(0.2, 3)),
    ("norm", lambda m, x: m.sqrt(total(a * a for a in x)), within(-3, 3)),
    ("bell", lambda m, x: m.exp(-total((a - 0.1 * i) ** 2 for i, a in enumerate(x)) / 8), within(-1.5, 1.5)),
    ("entropy", lambda m, x: -total(a * m.log(a) for a in x), within(0.02, 1)),
    (
        "barrier",
        lambda m, x: total(a * (i + 1) for i, a in enumerate(x)) - 0.01 * total(m.log(a) for a in x),
        within(0.05, 4),
    ),
    ("two layers", _layers, within(-2, 2)),
    ("spring chain", _masses, within(-1, 1)),
    ("reservoir cascade", _march, within(0.3, 1.2)),
    ("rates in series", _tempered, within(0.5, 3)),
    (
        "sizes apart",
        lambda m, x: m.log1p(total((a / (1 + abs(a))) ** 2 for a in x)) + total(x) * 1e-3,
        scattered(-4, 3),
    ),
    ("large offset", lambda m, x: 1e6 + total(m.sin(a) * (1 + 0.1 * i) for i, a in enumerate(x)), within(0.3, 1.2)),
    ("pressure drop", lambda m, x: total(m.power(abs(a - b) + 0.5, 1.852) for a, b in _cells(x)), within(0, 5)),
    (
        "pair energies",
        lambda m, x: total(
            m.power(1 + (x[i] - x[j]) ** 2, -3.0) - m.power(1 + (x[i] - x[j]) ** 2, -1.5)
            for i in range(N)
            for j in range(i)
        ),
        within(-2, 2),
    ),
    ("moments", lambda m, x: total(a**3 for a in x) / (1 + total(a * a for a in x)) + 1, within(-3, 3)),
    (
        "continued fraction",
        lambda m, x: x[0] + 1 / (x[1] + 1 / (x[2] + 1 / (x[3] + 1 / (x[4] + total(x[5:]) / 5)))),
        within(0.6, 3),
    ),
    ("arc lengths", lambda m, x: total(m.sqrt(1 + (b - a) ** 2) for a, b in _cells(x)), within(-2, 2)),
    ("saturation", lambda m, x: total(a**4 / (0.5**4 + a**4) for a in x) + m.erf(x[3] - x[7]), within(0.1, 2)),
    (
        "least squares of decays",
        lambda m, x: total((x[i] * m.exp(-x[i + 5] * t) - 0.4) ** 2 for i in range(5) for t in (0.2, 0.9, 2.0)),
        within(0.2, 2),
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Model:
    """One model of ten variables."""

    name: str
    formula: Callable[[Any, Any], Any]
    sample: Sampler

    def f(self, x: np.ndarray) -> float:
        """The model in double precision."""
        return float(self.formula(FLOATS, list(np.asarray(x, dtype=float))))

    def gradient(self, x: np.ndarray) -> np.ndarray:
        """The gradient at the doubles `x`, (10,), each entry correct to the last digit."""
        return np.array(_gradient(self.name, tuple(map(float, x))))

    def points(self, count: int, seed: int = 0) -> list[np.ndarray]:
        """Random points that do not depend on which other models there are."""
        rng = np.random.default_rng([seed, *self.name.encode()])
        return [self.sample(rng) for _ in range(count)]


MODELS: tuple[Model, ...] = tuple(Model(name=name, formula=f, sample=sample) for name, f, sample in ROWS)
_BY_NAME = {model.name: model for model in MODELS}


@cache
def _gradient(name: str, x: tuple[float, ...]) -> tuple[float, ...]:
    formula = _BY_NAME[name].formula
    with mpmath.workdps(DIGITS):
        exact = [mpmath.mpf(a) for a in x]
        entries = []
        for i in range(N):
            step = STEP * max(abs(exact[i]), mpmath.mpf(1) / 1000)
            up, down = (formula(mpmath.mp, [*exact[:i], exact[i] + s, *exact[i + 1 :]]) for s in (step, -step))
            entries.append(float((up - down) / (2 * step)))
    return tuple(0.0 if math.fabs(entry) < 1e-40 else entry for entry in entries)


def all_points(count: int, seed: int = 0) -> Sequence[tuple[Model, np.ndarray]]:
    """Every model with its points."""
    return [(model, x) for model in MODELS for x in model.points(count, seed)]
