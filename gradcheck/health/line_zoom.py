"""Zooming in on a suspicious cell: where do the predictions from its left and from its right part?

With L and R the predictions from either side and D = R − L: a kink makes D cross zero, a break of curvature makes it
touch zero, a jump keeps it away from zero. New samples must be foretold by their own side and not by the other, or the
suspicion is dropped: a steep but smooth transition is foretold by neither.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_focus import Focus
from gradcheck.health.line_predictions import SideView
from gradcheck.health.line_samples import Quest, Samples, jitter
from gradcheck.records.arrays import Array, BoolArray, IntArray

ABSCISSAE = 33
SUSPECT_WEAKER, SUSPECT_STRONGER = 3.0, 10.0  # |D| over its doubt at the two ends of a cell
JUMP_WIDTH = 1e-11  # in t; a transition narrower than this is a jump
MOST_ROUNDS = 80
MOST_CLIPPED = 2  # rounds in which the meeting zone nearly fills the bracket
CLEAR = 20.0  # |D| over its doubt
SAME_SIDE = 1e-4  # of |D|: a sample so close to a prediction is on its side
STALLED = 0.9  # of the bracket is left
DIP = 0.2  # of the largest |D|: where |D| falls below, it may touch zero between two abscissae


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Suspect:
    """Where and how two sides part.

    Attributes
    ----------
    jump : bool
        The predictions never meet inside the bracket; otherwise they do at `centre` ± `half`.
    lower, upper : float
        The last bracket; both ends are samples.
    first, clear : Parting
        Predictions over the first bracket, and over the last one at whose ends D stood out from its doubt.
    """

    jump: bool
    lower: float
    upper: float
    centre: float
    half: float
    first: "Parting"
    clear: "Parting"

    @property
    def reach(self) -> float:
        """Distance from the centre to the farther end of the first bracket."""
        return max(self.centre - float(self.first.x[0]), float(self.first.x[-1]) - self.centre)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Parting:
    """L, R, D = R − L and its doubt at abscissae x, all of shape (q,)."""

    x: Array
    left: Array
    right: Array
    left_doubt: Array
    right_doubt: Array

    @property
    def gap(self) -> Array:
        return self.right - self.left

    @property
    def doubt(self) -> Array:
        return self.left_doubt + self.right_doubt

    @property
    def clarity(self) -> float:
        """|D| over its doubt at that end of the bracket where it is larger."""
        ends = [0, -1]
        with np.errstate(divide="ignore", invalid="ignore"):
            return float(np.nanmax(np.abs(self.gap[ends]) / self.doubt[ends]))

    def meeting(self) -> BoolArray:
        """(q,) of bool: where the two sides may agree."""
        gap = self.gap
        near = np.abs(gap) <= 3.0 * self.doubt
        crossing = np.signbit(gap[1:]) != np.signbit(gap[:-1])
        near[1:] |= crossing
        near[:-1] |= crossing
        return np.asarray(near)


def suspicion(view: SideView, cell: IntArray) -> Array:
    """(c,): how strongly the two sides part at the ends of each cell; 0 where it is no ground for a suspicion."""
    ends = np.stack([view.t[cell], view.t[cell + 1]], axis=1)
    left, right = view.from_left(cell, cell + 1, ends), view.from_right(cell, cell + 1, ends)
    with np.errstate(invalid="ignore"):
        ratio = np.abs(right.value - left.value) / (left.doubt + right.doubt)
    ratio = np.nan_to_num(ratio)
    strong = (ratio.min(axis=1) >= SUSPECT_WEAKER) & (ratio.max(axis=1) >= SUSPECT_STRONGER)
    return np.where(strong, ratio.max(axis=1), 0.0)


def parting(view: SideView, lower: float, upper: float, x: Array) -> Parting:
    """L and R at x between two samples. Samples between them are on no side yet and do not speak."""
    ends = np.searchsorted(view.t, [lower]), np.searchsorted(view.t, [upper])
    left, right = view.from_left(*ends, x[None, :]), view.from_right(*ends, x[None, :])
    return Parting(
        x=x,
        left=left.value[0],
        right=right.value[0],
        left_doubt=left.doubt[0],
        right_doubt=right.doubt[0],
    )


def zoomed(
    samples: Samples, focus: Focus, piece: tuple[float, float], lower: float, upper: float
) -> Quest[tuple[Samples, Suspect | None]]:
    """Narrow the cell [lower, upper] of an unbroken piece down to a jump or a meeting of both sides.

    A sample that neither side foretold ends it. If the sides had met before, what was known then remains a suspicion:
    the noise may be larger here than where it was measured, and the confirmation looks at fresh samples anyway.
    """
    first = clear = meeting = None
    clipped, jump_width = 0, max(JUMP_WIDTH, focus.closest(upper))
    for _ in range(MOST_ROUNDS):
        view = focus.view(samples, *piece)
        seen = parting(view, lower, upper, np.linspace(lower, upper, ABSCISSAE))
        if not np.isfinite(seen.gap).all():
            return samples, meeting
        first = first or seen
        clear = seen if clear is None or seen.clarity >= CLEAR else clear
        zone = _meeting_zone(view, lower, upper, seen)
        suspect = _suspect(lower, upper, zone, first, clear)
        ends: tuple[float, float] | None = lower, upper
        if zone is not None:
            samples, ends = yield from _trimmed(samples, focus, view, lower, upper, zone)
            clipped += 5.0 * (zone[1] - zone[0]) > 1.7 * (upper - lower)
        elif upper - lower > jump_width:
            samples, ends = yield from _halved(samples, focus, view, lower, upper)
        if ends is None:
            return samples, meeting
        if clipped >= MOST_CLIPPED or ends[1] - ends[0] > STALLED * (upper - lower):
            return samples, suspect
        meeting = meeting if suspect.jump else suspect
        lower, upper = ends
    return samples, meeting


def _suspect(lower: float, upper: float, zone: tuple[float, float] | None, first: Parting, clear: Parting) -> Suspect:
    a, b = (lower, upper) if zone is None else zone
    return Suspect(
        jump=zone is None,
        lower=lower,
        upper=upper,
        centre=0.5 * (a + b),
        half=0.5 * (b - a),
        first=first,
        clear=clear,
    )


def _meeting_zone(view: SideView, lower: float, upper: float, seen: Parting) -> tuple[float, float] | None:
    """The part of a cell in which the two sides may meet, as finely as their doubts allow; None if there is none.

    Where |D| only dips, the bottom of the dip is looked at more closely: a break of curvature makes D touch zero there.
    """
    for _ in range(12):
        near = np.flatnonzero(seen.meeting())
        if near.size:
            first, last = near[0], near[-1]
        elif (bottom := _dip(seen)) is not None:
            first = last = bottom
        else:
            return None
        a = float(seen.x[max(first - 1, 0)])
        b = float(seen.x[min(last + 1, ABSCISSAE - 1)])
        if b - a > 0.4 * (seen.x[-1] - seen.x[0]) or b - a < 1e-15:
            break
        seen = parting(view, lower, upper, np.linspace(a, b, ABSCISSAE))
    return (float(seen.x[near[0]]), float(seen.x[near[-1]])) if near.size else None


def _dip(seen: Parting) -> int | None:
    """Index of an inner minimum of |D| that lies deep below the rest."""
    size = np.abs(seen.gap)
    bottom = int(size.argmin())
    if 0 < bottom < size.size - 1 and size[bottom] < DIP * size.max():
        return bottom
    return None


def _halved(
    samples: Samples, focus: Focus, view: SideView, lower: float, upper: float
) -> Quest[tuple[Samples, tuple[float, float] | None]]:
    """One sample in the middle goes to the side that foretold it."""
    aside = float(jitter(np.array([lower]), np.array([upper]))[0])
    middle = np.array([lower + (0.5 + 0.04 * aside) * (upper - lower)])
    samples = yield middle
    t, value = samples.at(middle, focus.output)
    if not lower < t[0] < upper or not np.isfinite(value[0]):
        return samples, None
    on_left, on_right = _foretold(parting(view, lower, upper, t), value, focus)
    if on_left[0] == on_right[0]:
        return samples, None
    return samples, (float(t[0]), upper) if on_left[0] else (lower, float(t[0]))


def _trimmed(
    samples: Samples, focus: Focus, view: SideView, lower: float, upper: float, zone: tuple[float, float]
) -> Quest[tuple[Samples, tuple[float, float] | None]]:
    """A sample on either side of the meeting zone cuts off what lies beyond."""
    centre, half = 0.5 * (zone[0] + zone[1]), 0.5 * (zone[1] - zone[0])
    step = max(min(2.5 * half, 0.42 * (upper - lower)), focus.closest(centre))
    asked = np.array([centre - step, centre + step])
    inside = (asked > lower + 0.02 * step) & (asked < upper - 0.02 * step)
    if not inside.any():
        return samples, (lower, upper)
    samples = yield asked[inside]
    t, value = samples.at(asked[inside], focus.output)
    if not np.isfinite(value).all():
        return samples, None
    on_left, on_right = _foretold(parting(view, lower, upper, t), value, focus)
    for place, fits_left, fits_right in zip(t, on_left, on_right, strict=True):
        if not fits_left and not fits_right:
            return samples, None
        if fits_left and not fits_right:
            lower = max(lower, float(place))
        elif fits_right and not fits_left:
            upper = min(upper, float(place))
    return samples, (lower, upper) if lower < upper else None


def _foretold(seen: Parting, value: Array, focus: Focus) -> tuple[BoolArray, BoolArray]:
    """(q,) of bool twice: whether the left, the right side foretold the values."""
    # Noise may vary along the line; what is small against the gap still tells the sides apart.
    blur = 4.0 * focus.sigma + 2e-16 * np.abs(value) + SAME_SIDE * np.abs(seen.gap)
    left = np.abs(value - seen.left) <= 3.0 * seen.left_doubt + blur
    right = np.abs(value - seen.right) <= 3.0 * seen.right_doubt + blur
    return left, right
