"""Breaks that no polynomial foretells from either side: sqrt|x|, x·log x, max(0, x)^1.5.

Second differences at spacing h shrink like h² where a function is smooth. Follow the place where they are largest,
halving h each time: if they keep shrinking with a smaller power, that power is the nature of the break. Below 1 the
slope is infinite there (reported as a kink), between 1 and 2 the second derivative is (reported as a curvature break).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_focus import Focus
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import EPSILON, Quest, Samples
from gradcheck.records.arrays import Array
from gradcheck.records.finding import FindingCode

FINEST = 1e-9  # in t
AUDIBLE = 50.0  # standard deviations of the noise
LEVELS = 10  # that a power has to hold for
SCATTER = 1.0  # of the second differences about their power law, in powers of two
DRIFT = 0.4  # of the power from the first half of the levels to the second
CUSP = (0.1, 1.05)
FINITE_SLOPES = 0.975  # with this power and more the slopes stay finite
INFINITE_CURVATURE = (1.05, 1.9)
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
    if scatter > SCATTER or drift > DRIFT or _settled(path.sizes):
        return samples, None
    if CUSP[0] < power < CUSP[1]:
        kind = FindingCode.KINK
    elif INFINITE_CURVATURE[0] < power < INFINITE_CURVATURE[1]:
        kind = FindingCode.CURVATURE_BREAK
    else:
        return samples, None
    slopes = np.diff(path.values)[[0, -1]] / path.spacing
    size = float(slopes[1] - slopes[0]) if power > FINITE_SLOPES and kind == FindingCode.KINK else np.inf
    return samples, Irregularity(
        kind=kind,
        output=focus.output,
        lower=path.centre - 2.0 * path.spacing,
        upper=path.centre + 2.0 * path.spacing,
        size=size,
        left=float(slopes[0]) if kind == FindingCode.KINK else np.nan,
        right=float(slopes[1]) if kind == FindingCode.KINK else np.nan,
        relative=abs(size) / focus.slope,
        evidence={"power": power, "distance": path.spacing},
    )


def _power_law(sizes: Array) -> tuple[float, float, float]:
    """Power of the spacing that sizes at halved spacings follow, their scatter about it, and its drift.

    The scatter is the largest deviation in powers of two; the drift is the change of the power between both halves.
    """
    level, logs = np.arange(sizes.size), np.log2(sizes)
    slope, offset = np.polyfit(level, logs, 1)
    half = sizes.size // 2
    first, second = (logs[0] - logs[half]) / half, (logs[half] - logs[-1]) / (sizes.size - 1 - half)
    return float(-slope), float(np.abs(logs - offset - slope * level).max()), float(abs(second - first))


def _followed(
    samples: Samples, focus: Focus, piece: tuple[float, float], lower: float, upper: float
) -> Quest[tuple[Samples, Descent | None]]:
    centre, spacing = 0.5 * (lower + upper), upper - lower
    sizes: list[float] = []
    finest = max(FINEST, 16.0 * focus.closest(centre))
    while True:
        asked = centre + spacing * EVEN
        if asked[0] < piece[0] or asked[-1] > piece[1]:
            return samples, None
        samples = yield asked
        t, f = samples.at(asked, focus.output)
        if not np.isfinite(f).all() or np.unique(t).size < t.size:
            return samples, None
        second = np.abs(f[2:] - 2.0 * f[1:-1] + f[:-2])
        largest = int(second.argmax())
        noise = max(focus.sigma, 0.3 * EPSILON * float(np.abs(f).max()))
        if second[largest] <= AUDIBLE * noise:
            break
        sizes.append(float(second[largest]))
        if spacing < finest or _settled(sizes):
            break
        centre, spacing = float(asked[largest + 1]), 0.5 * spacing
    return samples, Descent(centre=centre, spacing=spacing, values=f, sizes=np.array(sizes))


def _settled(sizes: Sequence[float] | Array) -> bool:
    """Whether the last levels shrank as those of a smooth function do, or not at all as at a jump."""
    if len(sizes) > 4 and float(np.log2(sizes[-5] / sizes[-1])) / 4.0 > SMOOTH:
        return True
    return len(sizes) > 6 and float(np.log2(sizes[-7] / sizes[-1])) / 6.0 < JUMP
