"""Lines with known irregularities: what a smoothness examination must name, and what it must leave alone.

Each family makes a random member from a seed. Every third member of a family is *aside*: not looked at while thresholds
were chosen. The truth is a kind and the places t in [0, 1]; `anywhere` stands for irregularities that are too many to
list. Functions are textbook shapes; no external source.
"""

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline, PchipInterpolator
from scipy.optimize import brentq

from gradcheck.health.line_report import Irregularity

Scalar = Callable[[float], float]
Random = np.random.Generator


@dataclass(frozen=True, kw_only=True)
class LineCase:
    """A line and the truth about it.

    `kinds` are the right names (any of them does), empty for a smooth line; `places` the true places; `needed` how many
    must be found; `tolerated` kinds are neither asked for nor wrong, and neither is what is smaller than `trifle`,
    relative to what is typical of the line.
    """

    family: str
    function: Callable[[Any], Any]
    kinds: tuple[str, ...] = ()
    places: tuple[float, ...] = ()
    anywhere: bool = False
    needed: int = 1
    tolerated: tuple[str, ...] = ()
    trifle: float = 0.0
    start: Any = field(default_factory=lambda: np.zeros(1))
    direction: Any = field(default_factory=lambda: np.ones(1))


@dataclass(frozen=True, kw_only=True)
class Judgement:
    """What an examination got right; `error` is the worst location error of the right finds, NaN without any."""

    right: bool
    false_alarms: tuple[str, ...]
    missed: int
    error: float


def judge(case: LineCase, irregularities: Sequence[Irregularity]) -> Judgement:
    """Compare what was found with the truth. A find counts if its bracket is within 1e-5 of a place."""
    found = [(str(i.kind), i.lower, i.upper) for i in irregularities if not i.relative < case.trifle]
    alarms, errors, hits = [], [], set()
    for kind, lower, upper in itertools.chain.from_iterable(map(_ends, found)):
        if kind in case.tolerated:
            continue
        if kind not in case.kinds:
            alarms.append(kind)
        elif case.anywhere:
            hits.add(lower)
        else:
            misses = [max(lower - place, place - upper, 0.5 * (upper - lower)) for place in case.places]
            nearest = int(np.argmin(misses))
            if misses[nearest] < 1e-5:
                hits.add(case.places[nearest])
                errors.append(misses[nearest])
            else:
                alarms.append(f"{kind} at a wrong place")
    wanted = 0 if not case.kinds else case.needed
    missed = max(0, wanted - len(hits))
    return Judgement(
        right=not alarms and not missed,
        false_alarms=tuple(alarms),
        missed=missed,
        error=max(errors, default=math.nan),
    )


def _ends(find: tuple[str, float, float]) -> list[tuple[str, float, float]]:
    """A stretch outside the domain is judged by those of its ends that lie on the line."""
    kind, lower, upper = find
    if kind not in ("non-finite", "crash", "timeout"):
        return [find]
    return [(kind, end, end) for end in (lower, upper) if 0.0 < end < 1.0]


def background(rng: Random) -> Scalar:
    """A random smooth function with a variation of order one (sometimes scaled, sometimes offset)."""
    a, b, c, d = rng.normal(size=4)
    rate, wave, phase = rng.uniform(-2.0, 2.0), rng.uniform(1.0, 9.0), rng.uniform(0.0, 6.0)
    scale, offset = 10.0 ** rng.uniform(-3.0, 3.0), rng.choice([0.0, 0.0, 1.0, 30.0])

    def smooth(t: float) -> float:
        bowl = a * t + b * (t - 0.4) ** 2 + c * math.exp(rate * t)
        return float(scale * (offset + bowl + (0.3 + abs(d)) * math.sin(wave * t + phase)))

    return smooth


def variation(function: Scalar) -> float:
    values = [function(t) for t in np.linspace(0.0, 1.0, 41)]
    return max(values) - min(values)


def place(rng: Random) -> float:
    return float(rng.uniform(0.08, 0.92))


def on_line(function: Scalar) -> Callable[[Any], float]:
    return lambda x: function(float(x[0]))


def roots(function: Scalar) -> tuple[float, ...]:
    """Zeros in [0, 1] that a grid of 400 cells separates."""
    grid = np.linspace(0.0, 1.0, 401) + 1e-5
    return tuple(
        float(brentq(function, a, b, xtol=1e-14))
        for a, b in itertools.pairwise(grid)
        if function(a) * function(b) < 0.0
    )


def plus(base: Scalar, extra: Scalar, relative: float) -> Callable[[Any], float]:
    """`base` + `extra`, the latter sized relative to the former's variation."""
    size = relative * variation(base)
    return on_line(lambda t: base(t) + size * extra(t))


# ------------------------------------------------------------------ smooth


def plain(rng: Random) -> LineCase:
    return LineCase(family="plain", function=on_line(background(rng)))


def elementary(rng: Random) -> LineCase:
    a = place(rng)
    choices: list[Scalar] = [
        lambda t: 1.0 / (1.0 + 25.0 * (t - a) ** 2),
        lambda t: math.exp(8.0 * t),
        lambda t: math.exp(-9.0 * t) + 1e-3 * t,
        lambda t: 3.0 - 2.0 * t,
        lambda t: (t - a) ** 2,
        lambda t: 4.25,
        lambda t: math.log(1.0 + 50.0 * t),
        lambda t: math.sqrt(0.01 + t),
        lambda t: float(np.log(np.exp(np.array([20.0 * t, 20.0 * a, 9.0])).sum())),
        lambda t: float(sum(k * (t - a) ** k for k in range(9))),
        lambda t: t**7 - 7 * t**6 + 21 * t**5 - 35 * t**4 + 35 * t**3 - 21 * t**2 + 7 * t - 1,
    ]
    return LineCase(family="elementary", function=on_line(choices[rng.integers(len(choices))]))


def many_variables(rng: Random) -> LineCase:
    n = 6
    matrix, weights = rng.normal(size=(n, n)), 10.0 ** rng.uniform(-3.0, 3.0, n)
    start = weights * rng.normal(size=n)

    def function(x: Any) -> float:
        y = matrix @ (x / weights)
        return float(y @ y + np.sin(y).sum() + np.exp(0.1 * y[0]))

    return LineCase(family="many variables", function=function, start=start, direction=weights * rng.normal(size=n))


def linear_solve(rng: Random) -> LineCase:
    a, b = rng.normal(size=(5, 5)), rng.normal(size=5)
    spd = a @ a.T + np.eye(5)
    return LineCase(
        family="linear solve",
        function=on_line(lambda t: float(b @ np.linalg.solve(spd + 3.0 * t * np.diag(np.arange(5.0)), b))),
    )


def fixed_step_integration(rng: Random) -> LineCase:
    stiffness = rng.uniform(0.5, 2.0)

    def slope(y: Any, t: float) -> Any:
        return np.array([y[1], (0.5 + t) * stiffness * (1.0 - y[0] ** 2) * y[1] - y[0]])

    def function(t: float) -> float:
        y, h = np.array([1.0, 0.3]), 0.05
        for _ in range(60):
            k1 = slope(y, t)
            k2 = slope(y + 0.5 * h * k1, t)
            k3 = slope(y + 0.5 * h * k2, t)
            k4 = slope(y + h * k3, t)
            y = y + h / 6.0 * (k1 + 2.0 * k2 + 2.0 * k3 + k4)
        return float(y[0])

    return LineCase(family="fixed-step integration", function=on_line(function))


def adaptive_integration(rng: Random) -> LineCase:
    rate, rtol = rng.uniform(0.5, 1.5), 10.0 ** rng.uniform(-9.0, -6.0)

    def function(t: float) -> float:
        answer = solve_ivp(
            lambda s, y: [y[1], -(1.0 + t) * math.sin(y[0]) - 0.1 * rate * y[1]],
            (0.0, 4.0),
            [1.0, rate],
            rtol=rtol,
            atol=1e-3 * rtol,
        )
        return float(answer.y[0, -1])

    # Where a step is rejected the result jumps by less than the tolerance: a remark, not a break.
    return LineCase(family="adaptive integration", function=on_line(function), trifle=1e-6)


def steep(rng: Random) -> LineCase:
    a, phase = place(rng), rng.uniform(0.0, 6.0)
    sharp, rounding = 10.0 ** rng.uniform(2.0, 5.0), 10.0 ** rng.uniform(-10.0, -6.0)
    width = 10.0 ** rng.uniform(-3.0, -1.5)
    knots = np.linspace(0.0, 1.0, 13)
    spline = CubicSpline(knots, rng.normal(size=13), bc_type="natural")
    base = background(rng)

    def blend(t: float) -> float:
        s = min(max((t - a) / 0.05, 0.0), 1.0)
        return s**3 * (10.0 - 15.0 * s + 6.0 * s * s)  # twice continuously differentiable

    choices: list[Callable[[Any], float]] = [
        plus(base, lambda t: math.tanh(400.0 * (t - a)), 1.0),
        plus(base, lambda t: math.sqrt((t - a) ** 2 + rounding), 1.0),
        plus(base, lambda t: math.sin(300.0 * t + phase), 1.0),
        plus(base, lambda t: math.sin(300.0 * t + phase), 1e-3),
        on_line(lambda t: math.sin(3000.0 * t + phase)),
        on_line(lambda t: float(spline(t))),
        on_line(lambda t: 1e12 + base(t)),
        plus(base, lambda t: float(np.logaddexp(0.0, sharp * (t - a))) / sharp, 1.0),
        plus(base, lambda t: math.exp(-(((t - a) / width) ** 2)), 1.0),
        plus(base, lambda t: math.exp(-1000.0 * t), 1.0),
        plus(base, lambda t: 1.0 / (1.0 + math.exp(min(-sharp * (t - a), 700.0))), 1.0),
        plus(base, lambda t: math.atan2(0.01, t - a), 1.0),
        plus(base, blend, 1.0),
        on_line(lambda t: math.tanh(400.0 * (t - a))),
        on_line(lambda t: math.sqrt((t - a) ** 2 + 1e-8)),
    ]
    return LineCase(family="steep", function=choices[rng.integers(len(choices))])


# ------------------------------------------------------------------ breaks


def kink(rng: Random) -> LineCase:
    a, base, other = place(rng), background(rng), background(rng)
    relative = 10.0 ** rng.uniform(-4.0, 0.0)
    crossing = float(rng.uniform(0.1, 0.9))

    def gap(t: float) -> float:
        return base(t) - other(t) - (base(crossing) - other(crossing))

    choices: list[Callable[[Any], float]] = [
        plus(base, lambda t: abs(t - a), relative),
        plus(base, lambda t: max(0.0, t - a), relative),
        plus(base, lambda t: min(t, a), relative),
        plus(base, lambda t: math.sin(4.0 * max(t, a)), relative),
        plus(lambda t: math.tanh(20.0 * (t - 0.5)), lambda t: abs(t - a), 0.1),
        on_line(lambda t: base(t) - min(gap(t), 0.0)),
        on_line(lambda t: float(np.linalg.eigvalsh(np.diag([t + 1.0, 1.0 + 2.0 * a - t, 5.0]))[0])),
        on_line(lambda t: 1e-3 * abs(t - a) + math.sin(3.0 * t)),
    ]
    which = int(rng.integers(len(choices)))
    places = roots(gap) if which == 5 else (a,)
    return LineCase(family="kink", function=choices[which], kinds=("kink",), places=places, needed=len(places))


def absolute_sum(rng: Random) -> LineCase:
    n = 5
    weights = 10.0 ** rng.uniform(-2.0, 2.0, n)
    start, direction = weights * rng.normal(size=n), weights * rng.normal(size=n)
    places = np.sort(rng.uniform(0.1, 0.9, 2))
    centre = start[:2] + places * direction[:2]

    def function(x: Any) -> float:
        smooth = np.sin(x[2:] / weights[2:]).sum()
        return float(np.abs((x[:2] - centre) / weights[:2]).sum() + smooth)

    return LineCase(
        family="absolute sum",
        function=function,
        kinds=("kink",),
        places=tuple(places),
        needed=2,
        start=start,
        direction=direction,
    )


def table(rng: Random) -> LineCase:
    count = int(rng.integers(5, 40))
    knots = np.linspace(0.0, 1.0, count + 1)
    values = np.sin(4.0 * knots + rng.uniform(0.0, 6.0)) + 0.1 * rng.normal(size=count + 1)
    return LineCase(
        family="table",
        function=on_line(lambda t: float(np.interp(t, knots, values))),
        kinds=("kink",),
        places=tuple(knots[1:-1]),
        needed=3,
    )


def jump(rng: Random) -> LineCase:
    a, base, other = place(rng), background(rng), background(rng)
    large, small = 10.0 ** rng.uniform(-4.0, 0.0), 10.0 ** rng.uniform(-6.5, -4.0)
    size = 0.1 * variation(base)
    choices: list[Callable[[Any], float]] = [
        plus(base, lambda t: float(t > a), large),
        plus(base, lambda t: float(t > a), small),
        on_line(lambda t: base(t) if t < a else other(t) + base(a) - other(a) + size),
        on_line(lambda t: float(t >= a)),
        on_line(lambda t: math.sin(2.0 * t) + 1e-4 * (t >= a)),
    ]
    return LineCase(family="jump", function=choices[rng.integers(len(choices))], kinds=("jump",), places=(a,))


def far_from_the_origin(rng: Random) -> LineCase:
    a, base = place(rng), background(rng)
    start, length = 10.0 ** rng.uniform(2.0, 5.0), 10.0 ** rng.uniform(-1.0, 2.0)
    edge = start + a * length
    size = 0.3 * variation(base)
    return LineCase(
        family="far from the origin",
        function=lambda x: base((x[0] - start) / length) + size * (x[0] > edge),
        kinds=("jump",),
        places=(a,),
        start=np.array([start]),
        direction=np.array([length]),
    )


def staircase(rng: Random) -> LineCase:
    treads = int(rng.integers(3, 20)) if rng.random() < 0.6 else int(rng.integers(50, 3000))
    base, factor = background(rng), rng.uniform(0.3, 3.0)
    choices: list[Scalar] = [
        lambda t: factor * math.floor(treads * t),
        lambda t: float(math.ceil(treads * t)),
        lambda t: base(math.floor(treads * t) / treads),
        lambda t: base(round(treads * t) / treads),
    ]
    which = int(rng.integers(len(choices)))
    shift = 0.5 if which == 3 else 0.0
    return LineCase(
        family="staircase",
        function=on_line(choices[which]),
        kinds=("staircase",),
        anywhere=True,
        places=tuple((np.arange(1, treads) + shift) / treads),
    )


def curvature_break(rng: Random) -> LineCase:
    a, base = place(rng), background(rng)
    relative = 10.0 ** rng.uniform(-2.0, 0.5)
    width = rng.uniform(0.05, 0.2)
    low, high = max(a - width, -1.0), a + width

    def huber(t: float) -> float:
        return 0.5 * (t - a) ** 2 / width if abs(t - a) < width else abs(t - a) - 0.5 * width

    choices: list[tuple[Callable[[Any], float], tuple[float, ...]]] = [
        (plus(base, lambda t: max(0.0, t - a) ** 2, relative), (a,)),
        (plus(base, lambda t: (t - a) * abs(t - a), relative), (a,)),
        (plus(base, huber, 1.0), tuple(p for p in (low, high) if 0.0 < p < 1.0)),
    ]
    function, places = choices[rng.integers(len(choices))]
    return LineCase(family="curvature break", function=function, kinds=("curvature-break",), places=places)


def monotone_cubic(rng: Random) -> LineCase:
    knots = np.linspace(0.0, 1.0, 9)
    curve = PchipInterpolator(knots, np.cumsum(rng.uniform(0.1, 1.0, 9)))
    return LineCase(
        family="monotone cubic",
        function=on_line(lambda t: float(curve(t))),
        kinds=("curvature-break",),
        places=tuple(knots[1:-1]),
        needed=3,
    )


def several_breaks(rng: Random) -> LineCase:
    base = background(rng)
    first, second = sorted(rng.uniform(0.1, 0.9, 2))
    size = variation(base)
    return LineCase(
        family="several breaks",
        function=on_line(lambda t: base(t) + size * (abs(t - first) + 0.1 * (t > second))),
        kinds=("kink", "jump"),
        places=(first, second),
        needed=2,
    )


def cusp(rng: Random) -> LineCase:
    a, base = place(rng), background(rng)
    choices: list[Scalar] = [
        lambda t: math.sqrt(abs(t - a)),
        lambda t: math.sqrt(max(0.0, t - a)),
        lambda t: math.copysign(math.sqrt(abs(t - a)), t - a),
        lambda t: abs(t - a) ** 0.75,
        lambda t: (t - a) * math.log(abs(t - a) + 1e-300),
    ]
    return LineCase(
        family="cusp",
        function=plus(base, choices[rng.integers(len(choices))], 1.0),
        kinds=("kink",),
        places=(a,),
    )


def contact(rng: Random) -> LineCase:
    a, base = place(rng), background(rng)
    return LineCase(
        family="contact",
        function=plus(base, lambda t: max(0.0, t - a) ** 1.5, 1.0),
        kinds=("curvature-break",),
        places=(a,),
    )


# ------------------------------------------------------------------ precision


def scrambled(t: float) -> float:
    """A deterministic number in [-1, 1] without any pattern in t (a 64-bit mix of its digits)."""
    bits = int(np.float64(t).view(np.uint64))
    for factor in (0xBF58476D1CE4E5B9, 0x94D049BB133111EB):
        bits = ((bits ^ (bits >> 30)) * factor) & 0xFFFFFFFFFFFFFFFF
    return (bits >> 11) / 2.0**52 - 1.0


def noise(rng: Random) -> LineCase:
    base, relative = background(rng), 10.0 ** rng.uniform(-9.0, -2.0)
    size = relative * max(abs(base(t)) for t in np.linspace(0.0, 1.0, 21))
    return LineCase(
        family="noise",
        function=on_line(lambda t: base(t) + size * scrambled(t)),
        kinds=("noise",),
        anywhere=True,
    )


def kink_under_noise(rng: Random) -> LineCase:
    a, base = place(rng), background(rng)
    size = variation(base)
    return LineCase(
        family="kink under noise",
        function=on_line(lambda t: base(t) + size * (abs(t - a) + 1e-9 * scrambled(t))),
        kinds=("kink",),
        places=(a,),
        tolerated=("noise",),
    )


def unrepeatable(rng: Random) -> LineCase:
    base, dice = background(rng), np.random.default_rng(int(rng.integers(2**31)))
    size = 10.0 ** rng.uniform(-8.0, -2.0) * variation(base)
    return LineCase(
        family="unrepeatable",
        function=on_line(lambda t: base(t) + size * float(dice.normal())),
        kinds=("unrepeatable",),
        anywhere=True,
        tolerated=("noise",),
    )


def single_precision(rng: Random) -> LineCase:
    base, wave = background(rng), rng.uniform(2.0, 9.0)
    single = np.float32

    def inside(t: float) -> float:
        return float(np.sin(single(wave) * single(t)) + single(0.5) * np.exp(single(t)))

    choices: list[Scalar] = [
        lambda t: float(single(base(t))),
        inside,
        lambda t: inside(t) * math.pi + 0.1 * t,
        lambda t: base(float(single(t))),
    ]
    return LineCase(
        family="single precision",
        function=on_line(choices[rng.integers(len(choices))]),
        kinds=("low-precision",),
        anywhere=True,
    )


def coarse_output(rng: Random) -> LineCase:
    base, digits = background(rng), int(rng.integers(4, 9))
    spread = variation(base)
    decimals = int(digits - math.ceil(math.log10(spread)))
    choices: list[Scalar] = [
        lambda t: float(f"{base(t):.{digits}g}"),
        lambda t: round(base(t), decimals),
        lambda t: float(f"{base(t):.{digits - 1}e}"),
    ]
    # Rounding to whole numbers and counting are the same thing.
    kinds = ("coarse-output", "staircase") if decimals == 0 else ("coarse-output",)
    return LineCase(
        family="coarse output",
        function=on_line(choices[rng.integers(len(choices))]),
        kinds=kinds,
        anywhere=True,
    )


def bisection(function: Scalar, tolerance: float) -> float:
    low, high = 0.0, 4.0
    while high - low > tolerance:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if function(middle) < 0.0 else (low, middle)
    return 0.5 * (low + high)


def simpson(f: Scalar, a: float, b: float, tolerance: float) -> float:
    def part(a: float, b: float) -> float:
        return (b - a) / 6.0 * (f(a) + 4.0 * f(0.5 * (a + b)) + f(b))

    middle = 0.5 * (a + b)
    whole, halves = part(a, b), part(a, middle) + part(middle, b)
    if abs(whole - halves) < 15.0 * tolerance or b - a < 1e-4:
        return halves
    return simpson(f, a, middle, tolerance / 2.0) + simpson(f, middle, b, tolerance / 2.0)


def inner_iteration(rng: Random) -> LineCase:
    rate, base = rng.uniform(0.3, 0.95), background(rng)
    size = variation(base)
    tolerance = 10.0 ** rng.uniform(-6.0, -4.0)

    def contraction(t: float) -> float:
        y = 0.0
        for _ in range(2000):
            new = rate * math.cos(y) + 0.3 * t
            if abs(new - y) < tolerance:
                break
            y = new
        return new

    choices: list[Scalar] = [
        lambda t: base(t) + size * contraction(t),
        lambda t: bisection(lambda y: y**3 + y - 1.0 - 2.0 * t, tolerance) * (1.0 + 0.2 * t),
    ]
    return LineCase(
        family="inner iteration",
        function=on_line(choices[rng.integers(len(choices))]),
        kinds=("jump",),
        anywhere=True,
    )


def adaptive_quadrature(rng: Random) -> LineCase:
    tolerance, wave = 10.0 ** rng.uniform(-6.0, -3.0), rng.uniform(3.0, 9.0)
    return LineCase(
        family="adaptive quadrature",
        function=on_line(lambda t: simpson(lambda s: math.exp(-((wave * (s - t)) ** 2)), 0.0, 1.0, tolerance)),
        kinds=("jump",),
        anywhere=True,
    )


# ------------------------------------------------------------------ domain


def fails_below(t: float, a: float) -> float:
    if t < a:
        raise ValueError("no solution")
    return math.sqrt(1.0 + t)


def fails_between(t: float, low: float, high: float) -> float:
    return math.nan if low < t < high else math.sin(3.0 * t)


def domain(rng: Random) -> LineCase:
    a, base = place(rng), background(rng)
    low, high = sorted(rng.uniform(0.1, 0.9, 2))
    high = max(high, low + 0.05)
    choices: list[tuple[Callable[[Any], float], str, tuple[float, ...]]] = [
        (lambda x: float(np.log(x[0] - a)), "non-finite", (a,)),
        (lambda x: float(np.sqrt(a - x[0]) + base(x[0])), "non-finite", (a,)),
        (on_line(partial(fails_below, a=a)), "crash", (a,)),
        (on_line(partial(fails_between, low=low, high=high)), "non-finite", (low, high)),
    ]
    function, kind, places = choices[rng.integers(len(choices))]
    return LineCase(family="domain", function=function, kinds=(kind,), places=places, needed=len(places))


def domain_and_kink(rng: Random) -> LineCase:
    a, edge = rng.uniform(0.1, 0.5), rng.uniform(0.6, 0.9)
    return LineCase(
        family="domain and kink",
        function=on_line(lambda t: abs(t - a) + math.exp(t) if t < edge else math.inf),
        kinds=("kink", "non-finite"),
        places=(a, edge),
        needed=2,
    )


FAMILIES: dict[Callable[[Random], LineCase], int] = {
    plain: 6,
    elementary: 9,
    many_variables: 3,
    linear_solve: 3,
    fixed_step_integration: 3,
    adaptive_integration: 3,
    steep: 21,
    kink: 12,
    absolute_sum: 3,
    table: 3,
    jump: 9,
    far_from_the_origin: 3,
    staircase: 9,
    curvature_break: 6,
    monotone_cubic: 3,
    several_breaks: 3,
    cusp: 6,
    contact: 3,
    noise: 6,
    kink_under_noise: 3,
    unrepeatable: 3,
    single_precision: 6,
    coarse_output: 6,
    inner_iteration: 6,
    adaptive_quadrature: 3,
    domain: 6,
    domain_and_kink: 3,
}


def corpus(seed: int) -> tuple[list[LineCase], list[LineCase]]:
    """The lines of a seed: those for tuning, and every third one, kept aside."""
    rng = np.random.default_rng(seed)
    tuning: list[LineCase] = []
    aside: list[LineCase] = []
    for family, count in FAMILIES.items():
        for member in range(count):
            (aside if member % 3 == 2 else tuning).append(family(rng))
    return tuning, aside
