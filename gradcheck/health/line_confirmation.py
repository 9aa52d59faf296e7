"""A suspicion is believed only if fresh samples at ever smaller distances show the same break.

A rounded corner such as sqrt(x² + 1e-10) looks like a kink from afar: the change of its slope fades once the
distance falls below the rounding. So the change of slope (or of curvature) must keep its size down to the distance
at which noise drowns it.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_focus import Focus
from gradcheck.health.line_one_sided import one_sided
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import EPSILON, Quest, Samples
from gradcheck.health.line_zoom import Suspect
from gradcheck.records.arrays import Array
from gradcheck.records.finding import FindingCode

PLACES = np.array([1.0, 2.1, 3.2])  # in units of the distance; uneven, so that no wave hits all of them alike
KINK_SIGMAS = 200.0  # distance at which a change of slope is this many times the noise
CURVATURE_SIGMAS = 400.0
SLOPE_KEEPS = (0.7, 1.45)
CURVATURE_KEEPS = (0.6, 1.6)
KINK_EXPONENTS = (0.6, 1.7)  # of |D| over the distance; a cusp has less
CURVATURE_EXPONENTS = (1.3, 2.8)  # the third derivative of a C2 spline breaks with 3
ROUNDING = 1.0  # units in the last place: several roundings, alike within a stencil, differ from place to place
CLOSER = 30.0
APART = 4.0  # least ratio of two distances at which the change is compared, where there is room for both
JUMP_SIGMAS = 30.0
SURER = 0.01  # doubt over change; the nearest samples know it to a few per cent
JUMP_SHARE = 0.5  # of the gap between the predictions


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TwoSides:
    """Value, slope and second derivative at `centre`, from three samples on either side."""

    centre: float
    distance: float
    left: Array
    right: Array

    @property
    def change(self) -> Array:
        """(3,): change of value, slope, second derivative from left to right."""
        return np.asarray(self.right - self.left)


def confirmed(
    samples: Samples, focus: Focus, piece: tuple[float, float], suspect: Suspect
) -> Quest[tuple[Samples, Irregularity | None]]:
    """The irregularity that a suspicion turns out to be, or None."""
    if suspect.jump:
        return (yield from _jump(samples, focus, piece, suspect))
    gap = suspect.clear.gap
    crossing = np.signbit(gap[0]) != np.signbit(gap[-1])
    attempts = (_kink, _curvature_break) if crossing else (_curvature_break, _kink)
    for attempt in attempts:
        samples, found = yield from attempt(samples, focus, piece, suspect)
        if found is not None:
            return samples, found
    return samples, None


def _jump(
    samples: Samples, focus: Focus, piece: tuple[float, float], suspect: Suspect
) -> Quest[tuple[Samples, Irregularity | None]]:
    _, (before, after) = samples.at(np.array([suspect.lower, suspect.upper]), focus.output)
    height = float(after - before)
    noise = max(focus.sigma, ROUNDING * EPSILON * max(abs(before), abs(after)))
    if abs(height) < max(JUMP_SHARE * float(np.abs(suspect.clear.gap).min()), JUMP_SIGMAS * noise):
        return samples, None
    distance = 4.0 * max(suspect.upper - suspect.lower, focus.closest(suspect.upper))
    asked = np.concatenate([suspect.lower - distance * PLACES, suspect.upper + distance * PLACES])
    if asked.min() < piece[0] or asked.max() > piece[1]:
        return samples, None
    samples = yield asked
    _, values = samples.at(asked, focus.output)
    spread = np.abs(values - np.repeat([before, after], 3))
    if not (spread <= 0.25 * abs(height)).all():
        return samples, None
    flat = bool((spread == 0.0).all())
    return samples, Irregularity(
        kind=FindingCode.JUMP,
        output=focus.output,
        lower=suspect.lower,
        upper=suspect.upper,
        size=height,
        left=float(before),
        right=float(after),
        relative=abs(height) / focus.scale,
        evidence={"flat_on_both_sides": float(flat), "noise": noise},
    )


def _kink(
    samples: Samples, focus: Focus, piece: tuple[float, float], suspect: Suspect
) -> Quest[tuple[Samples, Irregularity | None]]:
    clear = suspect.clear
    expected = float((clear.gap[-1] - clear.gap[0]) / (clear.x[-1] - clear.x[0]))
    samples, sides = yield from _traced(
        samples, focus, piece, suspect, order=1, expected=expected, keeps=SLOPE_KEEPS, nearest=_kink_distance
    )
    if sides is None or not _exponent_within(suspect, sides, KINK_EXPONENTS):
        return samples, None
    change = float(sides.change[1])
    noise = _noise_at(focus, sides)
    half = max(20.0 * noise / abs(change), 0.05 * sides.distance, focus.closest(sides.centre))
    measured = _measured(samples, focus, piece, sides, half, order=1)
    return samples, _confirmed(FindingCode.KINK, focus, sides, half, measured, typical=focus.slope)


def _confirmed(
    kind: FindingCode, focus: Focus, sides: TwoSides, half: float, measured: tuple[float, float], *, typical: float
) -> Irregularity:
    """The irregularity at the centre of two sides whose slopes, or curvatures, were measured."""
    left, right = measured
    return Irregularity(
        kind=kind,
        output=focus.output,
        lower=sides.centre - half,
        upper=sides.centre + half,
        size=right - left,
        left=left,
        right=right,
        relative=abs(right - left) / typical,
        evidence={"confirmed_at_distance": sides.distance, "noise": _noise_at(focus, sides)},
    )


def _curvature_break(
    samples: Samples, focus: Focus, piece: tuple[float, float], suspect: Suspect
) -> Quest[tuple[Samples, Irregularity | None]]:
    away = suspect.clear.x - suspect.centre
    end = 0 if -away[0] > away[-1] else -1
    expected = float(2.0 * suspect.clear.gap[end] / away[end] ** 2)
    samples, sides = yield from _traced(
        samples,
        focus,
        piece,
        suspect,
        order=2,
        expected=expected,
        keeps=CURVATURE_KEEPS,
        nearest=_curvature_distance,
    )
    if sides is None or not _exponent_within(suspect, sides, CURVATURE_EXPONENTS):
        return samples, None
    half = max(0.05 * sides.distance, 0.5 * focus.closest(sides.centre))
    measured = _measured(samples, focus, piece, sides, half, order=2)
    return samples, _confirmed(FindingCode.CURVATURE_BREAK, focus, sides, half, measured, typical=focus.scale)


def _measured(
    samples: Samples, focus: Focus, piece: tuple[float, float], sides: TwoSides, half: float, order: int
) -> tuple[float, float]:
    """The derivative on either side: from all samples there, if they are surer than the nearest three."""
    nearby = one_sided(focus.view(samples, *piece), sides.centre - half, sides.centre + half)
    change, doubt = nearby.change(order)
    if doubt < SURER * abs(change):
        return float(nearby.value[0, order - 1]), float(nearby.value[1, order - 1])
    return float(sides.left[order]), float(sides.right[order])


def _kink_distance(noise: float, change: float) -> float:
    return KINK_SIGMAS * noise / abs(change)


def _curvature_distance(noise: float, change: float) -> float:
    return float(np.sqrt(CURVATURE_SIGMAS * noise / abs(change)))


def _traced(
    samples: Samples,
    focus: Focus,
    piece: tuple[float, float],
    suspect: Suspect,
    *,
    order: int,
    expected: float,
    keeps: tuple[float, float],
    nearest: Callable[[float, float], float],
) -> Quest[tuple[Samples, TwoSides | None]]:
    """Follow the change of a derivative from the suspect's scale down to the noise; None if it does not keep its size.

    `expected` is the derivative of this order of D = right − left.
    """
    centre, sides = suspect.centre, None
    if expected == 0.0 or not np.isfinite(expected):
        return samples, None
    noise = max(focus.sigma, _rounding_at(samples, focus, centre))
    least = max(nearest(noise, expected), 8.0 * focus.closest(centre))
    distance = max(2.5 * suspect.half, APART * least)
    room = min(centre - piece[0], piece[1] - centre) / float(PLACES[-1])
    if distance > room:
        distance = max(2.5 * suspect.half, least)
    while True:
        asked = np.concatenate([centre - distance * PLACES, centre + distance * PLACES])
        if asked.min() < piece[0] or asked.max() > piece[1]:
            return samples, None
        samples = yield asked
        t, values = samples.at(asked, focus.output)
        if not np.isfinite(values).all() or np.unique(t).size < t.size:
            return samples, None
        sides = _two_sides(t, values, centre, distance)
        change = float(sides.change[order])
        if not keeps[0] <= change / expected <= keeps[1]:
            return samples, None
        move = _centre_move(sides, order)
        if abs(move) > distance:
            return samples, None
        centre, expected = centre + move, change
        least = max(nearest(noise, expected), 8.0 * focus.closest(centre))
        if distance <= 0.7 * APART * least:
            return samples, _two_sides(t, values, centre, distance)
        distance = max(distance / CLOSER, least)


def _centre_move(sides: TwoSides, order: int) -> float:
    """From the centre to where the quadratics cross (kink) or touch (curvature break)."""
    value, slope, second = sides.change
    if order == 2:
        return float(-slope / second)
    move = -value / slope
    return float(-(value - 0.5 * second * move * move) / (slope + second * move))


def _two_sides(t: Array, values: Array, centre: float, distance: float) -> TwoSides:
    return TwoSides(
        centre=centre,
        distance=distance,
        left=_quadratic(t[:3] - centre, values[:3]),
        right=_quadratic(t[3:] - centre, values[3:]),
    )


def _quadratic(t: Array, f: Array) -> Array:
    """(3,): value, slope and second derivative at 0 of the quadratic through three samples."""
    first = (f[1] - f[0]) / (t[1] - t[0])
    second = ((f[2] - f[1]) / (t[2] - t[1]) - first) / (t[2] - t[0])
    value = f[0] - first * t[0] + second * t[0] * t[1]
    return np.array([value, first - second * (t[0] + t[1]), 2.0 * second])


def _exponent_within(suspect: Suspect, sides: TwoSides, limits: tuple[float, float]) -> bool:
    """Whether |D| shrank from the first bracket to the last distance with an admissible power of the distance."""
    _, slope, second = sides.change
    d = sides.distance
    gap = max(abs(sign * slope * d + 0.5 * second * d * d) for sign in (-1.0, 1.0))
    span = suspect.reach / d
    if span < 2.0 or gap == 0.0:
        return True
    exponent = float(np.log(float(np.abs(suspect.first.gap).max()) / gap) / np.log(span))
    return limits[0] <= exponent <= limits[1]


def _rounding_at(samples: Samples, focus: Focus, t: float) -> float:
    _, value = samples.at(np.array([t]), focus.output)
    grain = float(focus.line.grain(np.array([t]))[0])
    return float(max(ROUNDING * EPSILON * abs(float(value[0])), 0.15 * grain * focus.slope))


def _noise_at(focus: Focus, sides: TwoSides) -> float:
    slope = max(abs(sides.left[1]), abs(sides.right[1]))
    grain = float(focus.line.grain(np.array([sides.centre]))[0])
    return float(max(focus.sigma, ROUNDING * EPSILON * abs(sides.left[0]), 0.15 * grain * slope))
