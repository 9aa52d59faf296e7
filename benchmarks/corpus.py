"""Smooth scalar functions of one variable, to measure derivative estimates on.

The list was written down before there was an estimator to run on it, and every third function is kept aside: a
method is tuned on the others only. Never adapt an entry to what an estimator does with it; add new ones at the end.

One formula serves both arithmetics: ``formula(m, x)`` takes its functions from `FLOATS` (numpy and scipy) or from an
mpmath context. Constants are doubles in both, hence both are the same real function and differ by rounding only.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import reduce
from types import SimpleNamespace
from typing import Any

import numpy as np
from scipy import special

Formula = Callable[[Any, Any], Any]
Sampler = Callable[[np.random.Generator], float]

KEPT_ASIDE_EVERY = 3

# mpmath's names for what numpy and scipy compute in double precision
FLOATS = SimpleNamespace(
    exp=np.exp,
    expm1=np.expm1,
    log=np.log,
    log1p=np.log1p,
    log10=np.log10,
    sqrt=np.sqrt,
    cbrt=np.cbrt,
    power=np.power,
    sin=np.sin,
    cos=np.cos,
    tan=np.tan,
    asin=np.arcsin,
    atan=np.arctan,
    sinh=np.sinh,
    cosh=np.cosh,
    tanh=np.tanh,
    asinh=np.arcsinh,
    erf=special.erf,
    erfc=special.erfc,
    gamma=special.gamma,
    loggamma=special.gammaln,
    digamma=special.digamma,
    besselj=special.jv,
    besseli=special.iv,
    besselk=special.kv,
    airyai=lambda x: special.airy(x)[0],
    ellipk=special.ellipk,
    lambertw=lambda x: special.lambertw(x).real,
)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Case:
    """One function of the corpus.

    Attributes
    ----------
    name, group : str
    formula : callable
        ``formula(m, x)`` with m the arithmetic.
    sample : callable
        A random point from a `numpy.random.Generator`; always a double.
    kept_aside : bool
        Not to be looked at while a method is tuned.
    """

    name: str
    group: str
    formula: Formula
    sample: Sampler
    kept_aside: bool

    def f(self, x: float) -> float:
        """The function in double precision; NaN or infinite where it is not defined, silently."""
        with np.errstate(all="ignore"):
            return float(self.formula(FLOATS, x))

    def exact(self, mp: Any, x: Any) -> Any:
        """The same function in the digits that `mp` works with at the moment."""
        return mp.mpf(self.formula(mp, x))

    def points(self, count: int, seed: int = 0) -> list[float]:
        """At most `count` different random points; they do not depend on which other cases there are.

        Fewer where the case is about one or two points: counting those again would only inflate their weight.
        """
        rng = np.random.default_rng([seed, *self.name.encode()])
        return list(dict.fromkeys(self.sample(rng) for _ in range(count)))


def between(lower: float, upper: float) -> Sampler:
    """Uniform."""
    return lambda rng: float(rng.uniform(lower, upper))


def decades(lower: float, upper: float) -> Sampler:
    """Log-uniform, for 0 < lower < upper."""
    return lambda rng: math.exp(rng.uniform(math.log(lower), math.log(upper)))


def either_side(centre: float, lower: float, upper: float) -> Sampler:
    """A log-uniform distance from `centre`, left or right of it."""
    away = decades(lower, upper)
    return lambda rng: centre + float(rng.choice((-1.0, 1.0))) * away(rng)


def above(centre: float, lower: float, upper: float) -> Sampler:
    """A log-uniform distance right of `centre`."""
    away = decades(lower, upper)
    return lambda rng: centre + away(rng)


def below(centre: float, lower: float, upper: float) -> Sampler:
    """A log-uniform distance left of `centre`."""
    away = decades(lower, upper)
    return lambda rng: centre - away(rng)


def exactly(*values: float) -> Sampler:
    """One of a few points that matter by themselves."""
    return lambda rng: float(rng.choice(values))


def repeated(step: Callable[[Any], Any], times: int, start: Any) -> Any:
    """``step`` applied `times` times."""
    return reduce(lambda value, _: step(value), range(times), start)


def horner(coefficients: tuple[float, ...], x: Any) -> Any:
    """Polynomial with the highest power first."""
    return reduce(lambda value, coefficient: value * x + coefficient, coefficients)


def trapezoid(integrand: Callable[[Any], Any], upper: Any, cells: int) -> Any:
    """The trapezoidal rule on [0, upper] with a fixed number of cells."""
    inner = sum(integrand(upper * k / cells) for k in range(1, cells))
    return (integrand(upper * 0) / 2 + inner + integrand(upper) / 2) * upper / cells


Row = tuple[str, Formula, Sampler]

ORDINARY: tuple[Row, ...] = (
    ("exp", lambda m, x: m.exp(x), between(-3, 3)),
    ("sin", lambda m, x: m.sin(x), between(-6, 6)),
    ("atan", lambda m, x: m.atan(x), between(-5, 5)),
    ("log", lambda m, x: m.log(x), decades(1e-3, 1e3)),
    ("sqrt", lambda m, x: m.sqrt(x), decades(1e-4, 1e4)),
    ("rational", lambda m, x: (3 * x * x - x + 2) / (x * x + 1), between(-4, 4)),
    ("power 1.7", lambda m, x: m.power(x, 1.7), decades(1e-2, 1e2)),
    ("x to the x", lambda m, x: m.exp(x * m.log(x)), between(0.1, 4)),
    ("logistic", lambda m, x: 1 / (1 + m.exp(-x)), between(-5, 5)),
    ("softplus", lambda m, x: m.log1p(m.exp(x)), between(-4, 4)),
    ("x times bell", lambda m, x: x * m.exp(-x * x), between(-2, 2)),
)

LOW_DEGREE: tuple[Row, ...] = (
    ("line", lambda m, x: 3 * x - 7, between(-10, 10)),
    ("line, small slope", lambda m, x: 5 + 1e-6 * x, between(-10, 10)),
    ("line, far from zero", lambda m, x: 0.3 * x + 11, between(1e3, 2e3)),
    ("parabola", lambda m, x: 2 * x * x - 3 * x + 1, between(-5, 5)),
    ("parabola near its vertex", lambda m, x: (x - 1) ** 2, either_side(1, 1e-9, 1e-1)),
    ("parabola on a plateau", lambda m, x: 1e6 + 0.5 * x * x, between(-3, 3)),
    ("parabola, steep", lambda m, x: 1e4 * (x - 0.2) ** 2 + x, between(-1, 1)),
)

POLYNOMIAL: tuple[Row, ...] = (
    ("cubic", lambda m, x: x**3 - 2 * x + 5, between(-3, 3)),
    ("cubic near its inflection", lambda m, x: x**3, either_side(0, 1e-6, 1)),
    ("quartic", lambda m, x: x**4 - 3 * x**2 + 0.7 * x, between(-2, 2)),
    ("sextic", lambda m, x: horner((0.3, 0, -1.1, 0.4, 2, -1, 0.6), x), between(-2, 2)),
    ("Chebyshev of degree 20", lambda m, x: _chebyshev(20, x), between(-0.95, 0.95)),
)


def _chebyshev(degree: int, x: Any) -> Any:
    return repeated(lambda pair: (pair[1], 2 * x * pair[1] - pair[0]), degree - 1, (x * 0 + 1, x))[1]


CONSTANT: tuple[Row, ...] = (
    ("constant", lambda m, x: 4.2 + 0 * x, between(-3, 3)),
    ("zero", lambda m, x: 0 * x, between(-3, 3)),
    ("one, with rounding", lambda m, x: m.sin(x) ** 2 + m.cos(x) ** 2, between(-3, 3)),
    ("constant, large", lambda m, x: -7.5e9 + 0 * x, decades(1e-3, 1e3)),
)

ZERO_DERIVATIVE: tuple[Row, ...] = (
    ("cos at 0", lambda m, x: m.cos(x), exactly(0)),
    ("bell at 0", lambda m, x: m.exp(-x * x), exactly(0)),
    ("parabola at its vertex", lambda m, x: (x - 3) ** 2 + 2, exactly(3)),
    ("fourth power at 0", lambda m, x: x**4, exactly(0)),
    ("critical isotherm at 1", lambda m, x: 8 / (3 * x - 1) - 3 / (x * x), exactly(1)),
    ("x + 1/x at 1", lambda m, x: x + 1 / x, exactly(1, -1)),
    ("fast wave's crest", lambda m, x: 2 + m.cos(300 * (x - 0.25)), exactly(0.25)),
)

ORIGIN: tuple[Row, ...] = (
    ("exp at 0", lambda m, x: m.exp(x), exactly(0)),
    ("sin + x at 0", lambda m, x: m.sin(x) + x, exactly(0)),
    ("steep exp at 0", lambda m, x: m.exp(50 * x), exactly(0)),
    ("bell on a slope at 0", lambda m, x: 1 / (1 + 25 * x * x) + x, exactly(0)),
    ("line at 0", lambda m, x: 0.1 * x - 2, exactly(0)),
)

WAVE: tuple[Row, ...] = (
    ("sin 300x", lambda m, x: m.sin(300 * x), between(-1, 1)),
    ("sin 1e5x", lambda m, x: m.sin(1e5 * x), between(-1, 1)),
    ("growing wave", lambda m, x: m.cos(40 * x) * m.exp(x), between(0, 2)),
    ("two waves", lambda m, x: m.sin(x) + 0.01 * m.sin(77 * x), between(-4, 4)),
    ("chirp", lambda m, x: m.sin(x * x), between(1, 50)),
    ("exp of a wave", lambda m, x: m.exp(m.sin(30 * x)), between(-2, 2)),
    ("faint fast wave", lambda m, x: x * x + 1e-6 * m.sin(1e3 * x), between(-2, 2)),
    ("sin 40x far out", lambda m, x: m.sin(40 * x), between(90, 110)),
)

POLE: tuple[Row, ...] = (
    ("1/(x-1)", lambda m, x: 1 / (x - 1), either_side(1, 1e-4, 1)),
    ("poles off the axis", lambda m, x: 1 / (x * x + 1e-4), between(-0.1, 0.1)),
    ("tan", lambda m, x: m.tan(x), below(1.5707963267948966, 1e-3, 1)),
    ("log(1-x)", lambda m, x: m.log(1 - x), below(1, 1e-5, 1)),
    ("sqrt(x-2)", lambda m, x: m.sqrt(x - 2), above(2, 1e-5, 1)),
    ("asin", lambda m, x: m.asin(x), below(1, 1e-4, 0.9)),
    ("cube root", lambda m, x: m.cbrt(x), decades(1e-6, 1)),
    ("1/x^2", lambda m, x: 1 / (x * x), either_side(0, 1e-3, 1e3)),
    ("log of a small gap", lambda m, x: m.log(x - 100), above(100, 1e-3, 10)),
)

LAYER: tuple[Row, ...] = (
    ("tanh 400x", lambda m, x: m.tanh(400 * x), between(-0.02, 0.02)),
    ("rounded kink", lambda m, x: m.sqrt(x * x + 1e-8), either_side(0, 1e-6, 1)),
    ("steep front", lambda m, x: x + m.atan(1e3 * (x - 0.5)), either_side(0.5, 1e-5, 0.3)),
    ("boundary layer", lambda m, x: 1 - m.exp(-1e3 * x) + x, between(0, 0.02)),
    ("narrow bump", lambda m, x: m.exp(-(((x - 0.3) / 0.002) ** 2)) + x, either_side(0.3, 1e-5, 0.1)),
    ("smooth step", lambda m, x: 1 / (1 + m.exp(-200 * (x - 1.5))), between(1.4, 1.6)),
)

OFFSET: tuple[Row, ...] = (
    ("1e12 + sin", lambda m, x: 1e12 + m.sin(x), between(-3, 3)),
    ("1e12 + line", lambda m, x: 1e12 + 3 * x, between(-3, 3)),
    ("1e8 + small exp", lambda m, x: 1e8 + 1e-3 * m.exp(x), between(-2, 2)),
    ("-3e5 + log", lambda m, x: m.log(x) - 3e5, decades(1e-2, 1e2)),
    ("1e12 + wave", lambda m, x: 1e12 + 1e3 * m.sin(50 * x), between(0, 1)),
)

CANCELLING: tuple[Row, ...] = (
    ("expanded (x-1)^7", lambda m, x: horner((1, -7, 21, -35, 35, -21, 7, -1), x), between(0.8, 1.2)),
    ("expanded (x-2)^5", lambda m, x: horner((1, -10, 40, -80, 80, -32), x), either_side(2, 1e-3, 1)),
    ("(1-cos x)/x^2", lambda m, x: (1 - m.cos(x)) / (x * x), either_side(0, 1e-4, 1)),
    ("sqrt(x+1)-sqrt(x)", lambda m, x: m.sqrt(x + 1) - m.sqrt(x), decades(1e1, 1e7)),
    ("(exp x - 1)/x", lambda m, x: (m.exp(x) - 1) / x, either_side(0, 1e-6, 1)),
    ("difference of large squares", lambda m, x: (1e5 + x) ** 2 - 1e10, between(-2, 2)),
)

RATE_LAW: tuple[Row, ...] = (
    ("Arrhenius", lambda m, x: 1e13 * m.exp(-8e4 / (8.314 * x)), between(250, 1500)),
    ("Hill", lambda m, x: 2 * x**4 / (0.5**4 + x**4), decades(0.05, 5)),
    ("Michaelis-Menten", lambda m, x: 2 * x / (0.5 + x), decades(1e-3, 1e3)),
    ("substrate inhibition", lambda m, x: 3 * x / (0.2 + x + x * x / 4), decades(1e-2, 1e2)),
    ("Hill, broken order", lambda m, x: m.power(x, 2.7) / (1 + m.power(x, 2.7)), decades(0.05, 20)),
    ("cooling", lambda m, x: 20 + 75 * m.exp(-x / 340), between(1, 2000)),
)

THERMODYNAMICS: tuple[Row, ...] = (
    ("Antoine", lambda m, x: m.power(10, 8.07131 - 1730.63 / (233.426 + x)), between(1, 100)),
    ("van der Waals", lambda m, x: 8 * 0.9 / (3 * x - 1) - 3 / (x * x), between(0.45, 5)),
    ("Planck", lambda m, x: x**3 / (m.exp(x) - 1), between(0.1, 15)),
    ("Lennard-Jones", lambda m, x: 4 * (x**-12 - x**-6), between(0.85, 3)),
    ("entropy of mixing", lambda m, x: x * m.log(x) + (1 - x) * m.log(1 - x), between(0.01, 0.99)),
    ("Redlich-Kwong", lambda m, x: 83.14 * x / 60 - 1.4e8 / (m.sqrt(x) * 95 * 85), between(250, 900)),
    ("Mach-area", lambda m, x: m.power((1 + 0.2 * x * x) / 1.2, 3) / x, between(0.1, 4)),
    ("Debye-Huckel", lambda m, x: -1.17 * m.sqrt(x) / (1 + 1.5 * m.sqrt(x)), decades(1e-4, 1)),
)

SCALE: tuple[Row, ...] = (
    ("sin in nanometres", lambda m, x: m.sin(x / 1e-8), between(1e-9, 5e-8)),
    ("decay over 1e8", lambda m, x: m.exp(-x / 1e8), between(1e7, 5e8)),
    ("resonance of a capacitor", lambda m, x: 1 / m.sqrt(2e-3 * x), decades(1e-10, 1e-6)),
    ("x log x at 1e8", lambda m, x: x * m.log(x), decades(1e7, 1e9)),
    ("tiny values", lambda m, x: 1e-120 * m.exp(m.sin(x)), between(-3, 3)),
    ("huge values", lambda m, x: 1e150 * m.cos(x), between(-3, 3)),
    ("parabola at 1e-8", lambda m, x: 1 + (x / 1e-8) ** 2, between(-3e-8, 3e-8)),
)

FLAT: tuple[Row, ...] = (
    ("logistic far out", lambda m, x: 1 / (1 + m.exp(-x)), between(15, 40)),
    ("softplus far left", lambda m, x: m.log1p(m.exp(x)), between(-40, -15)),
    ("tanh far out", lambda m, x: m.tanh(x), between(6, 25)),
    ("bell's foot", lambda m, x: m.exp(-x * x), between(3, 7)),
    ("softplus, plain, far left", lambda m, x: m.log(1 + m.exp(x)), between(-45, -20)),
    ("saturation", lambda m, x: 1 - m.exp(-x), between(20, 60)),
)

POWER: tuple[Row, ...] = (
    ("x^40", lambda m, x: x**40, between(0.5, 2)),
    ("x^-12", lambda m, x: x**-12, either_side(0, 0.1, 10)),
    ("(1+x)^100", lambda m, x: (1 + x) ** 100, between(-0.5, 0.5)),
    ("x^25 - x^24", lambda m, x: x**25 - x**24, between(0.5, 1.5)),
)

DECAY: tuple[Row, ...] = (
    ("ringing", lambda m, x: m.exp(-x / 2) * m.sin(10 * x), between(0, 10)),
    ("sin(50x)/x", lambda m, x: m.sin(50 * x) / x, between(0.2, 5)),
    ("wave packet", lambda m, x: m.exp(-x * x) * m.cos(20 * x), between(-3, 3)),
    ("two modes", lambda m, x: m.exp(-x) * m.cos(3 * x) + 0.2 * m.exp(-x / 8) * m.sin(19 * x), between(0, 6)),
)

SPECIAL: tuple[Row, ...] = (
    ("erf", lambda m, x: m.erf(x), between(-3, 3)),
    ("gamma", lambda m, x: m.gamma(x), between(0.2, 8)),
    ("Bessel J0", lambda m, x: m.besselj(0, x), between(0.1, 20)),
    ("log gamma", lambda m, x: m.loggamma(x), decades(0.1, 100)),
    ("erfc far out", lambda m, x: m.erfc(x), between(2, 6)),
    ("Bessel J2.5", lambda m, x: m.besselj(2.5, x), between(0.5, 15)),
    ("digamma", lambda m, x: m.digamma(x), between(0.2, 10)),
    ("Bessel I1", lambda m, x: m.besseli(1, x), between(0.1, 10)),
    ("Bessel K0", lambda m, x: m.besselk(0, x), between(0.1, 10)),
    ("Airy", lambda m, x: m.airyai(x), between(-6, 4)),
    ("elliptic K", lambda m, x: m.ellipk(x), between(0.01, 0.98)),
    ("Lambert W", lambda m, x: m.lambertw(x), decades(0.05, 50)),
)

COMPOSITION: tuple[Row, ...] = (
    ("softplus of a wave", lambda m, x: m.log(1 + m.exp(m.sin(3 * x))), between(-3, 3)),
    ("sqrt(1+tanh^2)", lambda m, x: m.sqrt(1 + m.tanh(x) ** 2), between(-3, 3)),
    ("exp exp sin", lambda m, x: m.exp(m.exp(m.sin(x))), between(-4, 4)),
    ("sin exp", lambda m, x: m.sin(m.exp(x)), between(0, 5)),
    ("atan(x^3)/(1+x^2)", lambda m, x: m.atan(x**3) / (1 + x * x), between(-3, 3)),
    ("logistic map", lambda m, x: repeated(lambda y: 3.7 * y * (1 - y), 6, x), between(0.1, 0.9)),
    (
        "Newton iteration for a root",
        lambda m, x: repeated(lambda y: y - (y**3 - x) / (3 * y * y), 8, x),
        between(0.5, 4),
    ),
    (
        "continued fraction",
        lambda m, x: repeated(lambda y: 1 + x / (2 + y), 25, x * 0),
        between(0.1, 5),
    ),
    ("fixed quadrature", lambda m, x: trapezoid(lambda t: m.exp(-t * t), x, 40), between(0.1, 3)),
    (
        "explicit Euler",
        lambda m, x: repeated(lambda y: y + 0.05 * (m.sin(x) - y * y), 60, x * 0 + 0.5),
        between(0.1, 3),
    ),
    ("Blasius-like profile", lambda m, x: m.tanh(x) ** 2 * m.exp(-0.3 * x) + m.asinh(x), between(0.1, 6)),
    ("ship speed to power", lambda m, x: 0.08 * x**3 * (1 + 0.4 * m.exp((x - 12) / 2)), between(2, 20)),
)

GROUPS: dict[str, tuple[Row, ...]] = {
    "ordinary": ORDINARY,
    "linear and quadratic": LOW_DEGREE,
    "polynomial": POLYNOMIAL,
    "constant": CONSTANT,
    "zero derivative": ZERO_DERIVATIVE,
    "origin": ORIGIN,
    "wave": WAVE,
    "pole": POLE,
    "layer": LAYER,
    "offset": OFFSET,
    "cancelling": CANCELLING,
    "rate law": RATE_LAW,
    "thermodynamics": THERMODYNAMICS,
    "scale": SCALE,
    "flat": FLAT,
    "power": POWER,
    "decay": DECAY,
    "special": SPECIAL,
    "composition": COMPOSITION,
}


def _cases() -> tuple[Case, ...]:
    rows = [(group, *row) for group, members in GROUPS.items() for row in members]
    return tuple(
        Case(
            name=name,
            group=group,
            formula=formula,
            sample=sample,
            # a rule fixed beforehand, so that nobody chooses what is seen while tuning
            kept_aside=index % KEPT_ASIDE_EVERY == KEPT_ASIDE_EVERY - 1,
        )
        for index, (group, name, formula, sample) in enumerate(rows)
    )


CASES: tuple[Case, ...] = _cases()
