"""Breaks that no polynomial foretells from either side: sqrt|x|, x·log x, max(0, x)^1.5.

Second differences at spacing h shrink like h² where a function is smooth. Follow the place where they are largest,
halving h each time: if they keep shrinking with a smaller power, that power is the nature of the break. Below 0
the values are infinite, below 1 the slope (reported as a kink), below 2 the second derivative (a curvature break).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_cells import ROUNDING
from gradcheck.health.line_focus import Focus
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import EPSILON, Quest, Samples
from gradcheck.records.arrays import Array
from gradcheck.records.finding import FindingCode

FINEST = 1e-9  # in t
AUDIBLE = 50.0  # standard deviations of the noise
WIDEST = 2e-5  # in t: a descent that begins at least here has levels enough
LEVELS = 12  # that a power has to hold for
SCATTER = 1.0  # of the second differences about their power law, in powers of two
DRIFT = 0.4  # of the power from the first half of the levels to the second
STEADY = 0.15  # drift of a power that all levels agree on
CUSP = (0.1, 1.2)
FINITE_SLOPES = 0.9  # with this power and more the slopes stay finite: a kink that a zoom has missed
INFINITE_CURVATURE = (1.2, 1.9)
UNBOUNDED = 1e3  # times the variation along the line: no jump is so high, these are values next to a pole
SMOOTH = 1.85  # over four levels: no break here
JUMP = 0.1  # over six levels: a jump, which a zoom finds more precisely
EVEN = np.arange(-3.0, 4.0)  # of which every level knows three already


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Descent:
    """Where the largest second differences led, and how they shrank."""

    centre: float
    spacing: float
    values: Array
    sizes: Array


def descended(
    samples: Samples, focus: Focus, piece: tuple[float, float], lower: float, upper: float
) -> Quest[tuple[Samples, Irregularity | None]]:
    """A break with a fractional power inside the cell [lower, upper] of an unbroken piece, or None."""
    samples, path = yield from _followed(samples, focus, piece, lower, upper)
    if path is None or path.sizes.size <= LEVELS:
        return samples, None
    power, scatter, drift = _power_law(path.sizes[-LEVELS - 1 :])
    kind: FindingCode | None
    if np.ptp(path.values) > UNBOUNDED * focus.scale and not _smooth(path.sizes):
        # Next to a pole the second differences scatter wildly; what counts is that the values leave all bounds.
        kind = FindingCode.NON_FINITE
    elif scatter > SCATTER or drift > DRIFT or _smooth(path.sizes):
        return samples, None
    else:
        kind = _kind_of(power)
    if kind is None:
        return samples, None
    slopes = np.diff(path.values)[[0, -1]] / path.spacing
    size = float(slopes[1] - slopes[0]) if kind == FindingCode.KINK and power > FINITE_SLOPES else np.inf
    kink = kind == FindingCode.KINK
    return samples, Irregularity(
        kind=kind,
        output=focus.output,
        lower=max(path.centre - 3.0 * path.spacing, piece[0]),
        upper=min(path.centre + 3.0 * path.spacing, piece[1]),
        size=np.nan if kind == FindingCode.NON_FINITE else size,
        left=float(slopes[0]) if kink else np.nan,
        right=float(slopes[1]) if kink else np.nan,
        relative=abs(size) / focus.slope,
        evidence={"power": power, "distance": path.spacing},
    )


def _kind_of(power: float) -> FindingCode | None:
    """What second differences that shrink with this power of the spacing show; None if nothing is broken."""
    if CUSP[0] < power < CUSP[1]:
        return FindingCode.KINK
    if INFINITE_CURVATURE[0] < power < INFINITE_CURVATURE[1]:
        return FindingCode.CURVATURE_BREAK
    return None


def _power_law(sizes: Array) -> tuple[float, float, float]:
    """Power of the spacing that sizes at halved spacings follow, their scatter about one power, and its drift.

    The drift is the change of the power from the coarser half to the finer one, which counts if they differ; the
    scatter is the largest deviation in powers of two.
    """
    level, logs = np.arange(sizes.size), np.log2(sizes)
    slope, offset = np.polyfit(level, logs, 1)
    half = sizes.size // 2
    first, second = (logs[0] - logs[half]) / half, (logs[half] - logs[-1]) / (sizes.size - 1 - half)
    drift = float(abs(second - first))
    power = float(second) if drift > STEADY else float(-slope)
    return power, float(np.abs(logs - offset - slope * level).max()), drift


def _followed(
    samples: Samples, focus: Focus, piece: tuple[float, float], lower: float, upper: float
) -> Quest[tuple[Samples, Descent | None]]:
    centre, spacing = 0.5 * (lower + upper), max(upper - lower, WIDEST)
    sizes: list[float] = []
    finest = max(FINEST, 16.0 * focus.closest(upper))
    while True:
        centre, free = _inside(centre, 3.0 * spacing, piece, samples)
        if not free:
            return samples, None
        asked = np.clip(centre + spacing * EVEN, *piece)
        samples = yield asked
        t, f = samples.at(asked, focus.output)
        if not np.isfinite(f).all() or np.unique(t).size < t.size:
            return samples, None
        second = np.abs(f[2:] - 2.0 * f[1:-1] + f[:-2])
        largest = int(second.argmax())
        noise = max(focus.sigma, ROUNDING * EPSILON * float(np.abs(f).max()))
        if second[largest] <= AUDIBLE * noise:
            break
        # All five together depend less than the largest on where between two samples the break lies.
        sizes.append(float(np.sqrt((second**2).sum())))
        if spacing < finest or _smooth(sizes) or _jumps(sizes, f, focus):
            break
        centre, spacing = float(asked[largest + 1]), 0.5 * spacing
    return samples, Descent(centre=centre, spacing=spacing, values=f, sizes=np.array(sizes))


def _inside(centre: float, reach: float, piece: tuple[float, float], samples: Samples) -> tuple[float, bool]:
    """The centre of a window that keeps within the piece, and whether no earlier break was in its way.

    At the ends of the line the window is moved inwards: a root may begin at a bound.
    """
    moved = min(max(centre, piece[0] + reach), piece[1] - reach)
    end = samples.t[-1] == piece[1] if moved < centre else samples.t[0] == piece[0]
    return moved, bool(end) or moved == centre


def _smooth(sizes: Sequence[float] | Array) -> bool:
    """Whether the last levels shrank as those of a smooth function do."""
    return len(sizes) > 4 and float(np.log2(sizes[-5] / sizes[-1])) / 4.0 > SMOOTH


def _jumps(sizes: list[float], values: Array, focus: Focus) -> bool:
    """Whether the last levels neither shrank nor grew, as at a jump between values of the line's own size."""
    steady = len(sizes) > 6 and abs(float(np.log2(sizes[-7] / sizes[-1]))) / 6.0 < JUMP
    return steady and bool(np.ptp(values) < UNBOUNDED * focus.scale)
