"""Smooth functions of several variables with exact Hessians, to measure second derivatives on.

Written down before the estimator was tuned on any of them; every third one is kept aside. Never adapt an entry to what
an estimator does with it; add new ones at the end.

One formula serves both arithmetics, as in `benchmarks.corpus`. Hessians are mixed differences in so many digits that 25
of them are right; the models whose Hessian has a well-known closed form are compared with it in the tests.
"""

import itertools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np

from benchmarks.corpus import FLOATS, KEPT_ASIDE_EVERY
from benchmarks.reference import AGREEMENT
from gradcheck.records.arrays import Array

VectorFormula = Callable[[Any, Any], Any]
VectorSampler = Callable[[np.random.Generator], Array]

FIRST_DIGITS = 120
MOST_DIGITS = 1920
#: Smaller than this, beside max|f| / (size of x_i · size of x_j) or 1, and still shrinking with more digits: a zero.
ZERO = mpmath.mpf(10) ** -50


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HessianCase:
    """One model of several variables.

    Attributes
    ----------
    name : str
    formula : callable
        ``formula(m, x)`` with m the arithmetic and x a sequence of numbers.
    sample : callable
        A random point from a `numpy.random.Generator`.
    size : int
        Number of variables.
    kept_aside : bool
        Not to be looked at while a method is tuned.
    """

    name: str
    formula: VectorFormula
    sample: VectorSampler
    size: int
    kept_aside: bool

    def f(self, x: Array) -> float:
        """The function in double precision; NaN or infinite where it is not defined, silently."""
        with np.errstate(all="ignore"):
            return float(self.formula(FLOATS, x))

    def points(self, count: int, seed: int = 0) -> list[Array]:
        """At most `count` different random points."""
        rng = np.random.default_rng([seed, *self.name.encode()])
        return [np.array(x) for x in dict.fromkeys(tuple(self.sample(rng).tolist()) for _ in range(count))]


def exact_hessian(case: HessianCase, x: Array) -> dict[tuple[int, int], Any]:
    """The upper triangle at the doubles `x`, each entry good to 25 digits, 0 where it is zero.

    Raises
    ------
    ArithmeticError
        If an entry still changes at 1,920 digits.
    """
    n = x.size
    return {(i, j): _settled(case, x, i, j) for i in range(n) for j in range(i, n)}


def _settled(case: HessianCase, x: Array, i: int, j: int) -> Any:
    digits = FIRST_DIGITS
    before, scale = _mixed(case, x, i, j, digits)
    while digits < MOST_DIGITS:
        now, scale = _mixed(case, x, i, j, 2 * digits)
        shrinks = abs(now) < AGREEMENT * abs(before) or before == now == 0
        if shrinks and max(abs(before), abs(now)) <= ZERO * max(scale, 1):
            return mpmath.mpf(0)
        if abs(now - before) <= AGREEMENT * abs(now):
            return now
        digits, before = 2 * digits, now
    raise ArithmeticError(f"entry {i}, {j} of the Hessian of {case.name!r} at {x!r} does not settle: {before}")


def _mixed(case: HessianCase, x: Array, i: int, j: int, digits: int) -> tuple[Any, Any]:
    """The entry from four values, and max|f| / (size of x_i · size of x_j)."""
    with mpmath.workdps(digits):
        share = mpmath.mpf(10) ** (-(digits // 4))
        steps = [share * (min(abs(mpmath.mpf(float(x[k]))), 1) or mpmath.mpf(1)) for k in (i, j)]
        values = []
        for first, second in itertools.product((1, -1), repeat=2):
            point = [mpmath.mpf(float(entry)) for entry in x]
            point[i] += first * steps[0]
            point[j] += second * steps[1]
            values.append(mpmath.mpf(case.formula(mpmath.mp, point)))
        entry = (values[0] - values[1] - values[2] + values[3]) / (4 * steps[0] * steps[1])
        return entry, max(map(abs, values)) * share**2 / (steps[0] * steps[1])


def around(*centre: float) -> VectorSampler:
    """Each entry times a factor between 0.7 and 1.4; zeros stay zero."""
    return lambda rng: np.array(centre) * rng.uniform(0.7, 1.4, len(centre))


def within(lower: float, upper: float, size: int) -> VectorSampler:
    """Uniform in a cube."""
    return lambda rng: rng.uniform(lower, upper, size)


def at(*point: float) -> VectorSampler:
    """The point itself."""
    return lambda rng: np.array(point, dtype=float)


def _total(terms: Any) -> Any:
    return sum(terms, start=0)


def _product(factors: Any) -> Any:
    result = 1
    for factor in factors:
        result = result * factor
    return result


def _rosenbrock(m: Any, x: Any) -> Any:
    return _total(100 * (x[k + 1] - x[k] ** 2) ** 2 + (1 - x[k]) ** 2 for k in range(len(x) - 1))


def _pairs_of_particles(m: Any, x: Any) -> Any:
    """Three particles on a line with a Lennard-Jones potential."""
    gaps = [x[1] - x[0], x[2] - x[1], x[2] - x[0]]
    return _total(4 * (gap**-12 - gap**-6) for gap in gaps)


def _mixing(m: Any, x: Any) -> Any:
    """Gibbs energy of mixing of three amounts, with one interaction."""
    total = x[0] + x[1] + x[2]
    return _total(part * m.log(part / total) for part in x) + 1.3 * x[0] * x[1] / total


def _soft_maximum(m: Any, x: Any) -> Any:
    return m.log(_total(m.exp(entry) for entry in x))


def _least_squares(m: Any, x: Any) -> Any:
    """Fit of an exponential decay with offset to eight values."""
    values = (2.9, 2.3, 1.95, 1.62, 1.4, 1.25, 1.17, 1.1)
    return _total((x[0] * m.exp(-x[1] * t) + x[2] - y) ** 2 for t, y in enumerate(values))


def _likelihood(m: Any, x: Any) -> Any:
    """Negative log-likelihood of a logistic regression with six observations."""
    rows = ((1, 0.5, -1.2), (1, -0.3, 0.4), (1, 1.7, 0.9), (1, -2.1, -0.6), (1, 0.8, 2.2), (1, -1.1, 1.3))
    chosen = (1, 0, 1, 0, 1, 1)
    scores = [row[0] * x[0] + row[1] * x[1] + row[2] * x[2] for row in rows]
    return _total(m.log(1 + m.exp(score)) - y * score for score, y in zip(scores, chosen, strict=True))


def _network(m: Any, x: Any) -> Any:
    """Two hidden units, one output, one sample: ten weights."""
    first = m.tanh(0.7 * x[0] - 1.1 * x[1] + 0.4 * x[2] + x[3])
    second = m.tanh(0.7 * x[4] - 1.1 * x[5] + 0.4 * x[6] + x[7])
    return (x[8] * first + x[9] * second - 0.3) ** 2


def _beam(m: Any, x: Any) -> Any:
    """Tip deflection of a cantilever: load (N), length (m), modulus (Pa), width and height (m)."""
    return 4 * x[0] * x[1] ** 3 / (x[2] * x[3] * x[4] ** 3)


def _reactor(m: Any, x: Any) -> Any:
    """Rate with an activation energy (J/mol), a temperature (K), a pre-factor and a concentration (mol/m³)."""
    return x[2] * m.exp(-x[0] / (8.314 * x[1])) * x[3] ** 1.5


Row = tuple[str, VectorFormula, VectorSampler]

ROWS: tuple[Row, ...] = (
    ("saddle", lambda m, x: x[0] * x[1], around(0.7, -1.9)),
    ("quadratic form", lambda m, x: 2 * x[0] ** 2 - 3 * x[0] * x[1] + 0.5 * x[1] ** 2 + x[0], around(1.3, 0.4)),
    ("Rosenbrock, 5", _rosenbrock, around(1.3, 0.7, 0.8, 1.9, 1.2)),
    ("linear", lambda m, x: 3 * x[0] - 7 * x[1] + 0.01 * x[2], around(2.0, -5.0, 300.0)),
    ("exp times square", lambda m, x: m.exp(x[0]) * x[1] ** 2, within(-2, 2, 2)),
    ("sum of separate terms", lambda m, x: m.sin(x[0]) + m.exp(x[1]) + x[2] ** 3, within(-2, 2, 3)),
    ("wave of a product", lambda m, x: m.sin(x[0] * x[1]), within(-3, 3, 2)),
    ("sizes 1e-6 and 1e6", lambda m, x: m.sin(1e6 * x[0]) * m.exp(1e-6 * x[1]), around(2e-6, -1e6)),
    ("ideal gas", lambda m, x: 8.314 * x[0] * x[1] / x[2], around(2e-8, 300.0, 1e-8)),
    ("cantilever", _beam, around(1200.0, 2.5, 2.1e11, 0.04, 0.09)),
    ("Arrhenius rate", _reactor, around(8e4, 600.0, 1e8, 40.0)),
    ("logarithm of a sum of exponentials", _soft_maximum, within(-4, 4, 6)),
    ("Gibbs energy of mixing", _mixing, around(0.4, 1.2, 2.5)),
    ("three particles", _pairs_of_particles, lambda rng: np.array([0.3, 1.5, 2.7]) + rng.uniform(-0.1, 0.1, 3)),
    ("fit of a decay", _least_squares, around(2.0, 0.35, 0.9)),
    ("logistic regression", _likelihood, within(-1.5, 1.5, 3)),
    ("small network", _network, within(-1.2, 1.2, 10)),
    ("product of eight", lambda m, x: _product(x), within(0.5, 1.8, 8)),
    ("rational", lambda m, x: (x[0] - x[1]) / (1 + x[0] ** 2 + x[2] ** 2), within(-2, 2, 3)),
    ("norm", lambda m, x: m.sqrt(_total(entry * entry for entry in x)), within(-2, 2, 4)),
    ("bell in six dimensions", lambda m, x: m.exp(-_total(entry * entry for entry in x)), within(-0.8, 0.8, 6)),
    ("1e12 + product", lambda m, x: 1e12 + 1e3 * x[0] * m.exp(x[1]), within(-2, 2, 2)),
    ("1e6 + waves", lambda m, x: 1e6 + m.sin(x[0]) * m.cos(x[1]), within(-3, 3, 2)),
    ("difference of large squares", lambda m, x: (1e4 + x[0]) ** 2 - (1e4 - x[1]) ** 2, within(-2, 2, 2)),
    ("cancelling: squares of a sum", lambda m, x: (x[0] + x[1]) ** 2 - x[0] ** 2 - x[1] ** 2, within(-3, 3, 2)),
    ("weak coupling", lambda m, x: m.exp(x[0]) + m.exp(x[1]) + 1e-6 * m.sin(x[0] * x[1]), within(-2, 2, 2)),
    ("strong diagonal", lambda m, x: 1e6 * x[0] ** 2 + 1e6 * x[1] ** 2 + x[0] * x[1], around(1.1, -0.6)),
    ("zeros among ordinary numbers", lambda m, x: m.exp(x[0] + 2 * x[1]) * m.cos(x[2]), around(0.0, 0.6, 0.0)),
    ("all zero", lambda m, x: m.exp(x[0] - x[1]) + x[0] * x[2] ** 2 + x[1] * x[2], at(0.0, 0.0, 0.0)),
    ("monkey saddle at zero", lambda m, x: x[0] ** 3 - 3 * x[0] * x[1] ** 2, at(0.0, 0.0)),
    ("vertex of a valley", lambda m, x: (x[0] - x[1]) ** 4 + (x[0] - 1) ** 2, at(1.0, 1.0)),
    ("fast wave of a sum", lambda m, x: m.sin(200 * x[0] + 90 * x[1]), within(-1, 1, 2)),
    ("near a pole", lambda m, x: 1 / (x[0] - x[1]), lambda rng: np.array([1.0, 1.0 - rng.uniform(0.002, 0.2)])),
    ("near a branch point", lambda m, x: m.sqrt(x[0] - x[1]) * x[2], lambda rng: np.array([2.01, 2.0, 3.0])),
    ("power law of ten", lambda m, x: _product(x[k] ** (0.2 * k - 0.9) for k in range(10)), within(0.3, 3, 10)),
    ("chain of springs", lambda m, x: _total((x[k + 1] - x[k] - 0.2) ** 4 for k in range(7)), within(-1, 1, 8)),
    ("gamma and Bessel", lambda m, x: m.gamma(x[0]) * m.besselj(0, x[1]), within(1, 5, 2)),
    ("layer across", lambda m, x: m.tanh(40 * (x[0] + x[1])) + x[0] * x[1], within(-0.05, 0.05, 2)),
    ("price of an option", lambda m, x: _option(m, x), around(49.0, 0.2, 0.3846, 0.05)),
    ("Helmholtz-like volume", lambda m, x: -8 * x[1] / 3 * m.log(3 * x[0] - 1) - 3 / x[0], around(1.5, 1.1)),
)


def _option(m: Any, x: Any) -> Any:
    """European call of strike 50: price of the share, volatility, years left, rate (Black & Scholes 1973)."""
    spread = x[1] * m.sqrt(x[2])
    first = (m.log(x[0] / 50) + (x[3] + x[1] ** 2 / 2) * x[2]) / spread
    normal = [(1 + m.erf(d / m.sqrt(2))) / 2 for d in (first, first - spread)]
    return x[0] * normal[0] - 50 * m.exp(-x[3] * x[2]) * normal[1]


def _cases() -> tuple[HessianCase, ...]:
    size = [row[2](np.random.default_rng(0)).size for row in ROWS]
    return tuple(
        HessianCase(
            name=name,
            formula=formula,
            sample=sample,
            size=size[index],
            kept_aside=index % KEPT_ASIDE_EVERY == KEPT_ASIDE_EVERY - 1,
        )
        for index, (name, formula, sample) in enumerate(ROWS)
    )


HESSIAN_CASES: tuple[HessianCase, ...] = _cases()
