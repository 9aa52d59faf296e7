"""What the examination of one output of one line keeps in hand, and what it has found so far."""

from dataclasses import dataclass, field, replace

import numpy as np

from gradcheck.health.line_cells import local_noise
from gradcheck.health.line_predictions import SideView, whole
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import Line, Samples
from gradcheck.records.arrays import Array, BoolArray

CLEAN = 1e-7  # of the variation: a jump that may hide in a cell as wide as the grid's
NARROWEST = 1e-9  # cells in t that are not halved any more
GRAINS_BETWEEN_SAMPLES = 8.0  # what is closer than this many roundings of the point says nothing
STILL_THE_SAME = 0.6  # of a dismissed cell: halving it makes a new one
MUCH_NARROWER = 1.0 / 64.0  # cells that deserve a descent of their own
MOST_DESCENTS = 4
SHADOW = 1e-3  # in t, on either side of a break with a fractional power
SAME_KIND = 4  # findings of one kind that are enough for a line


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Focus:
    """One output on one line.

    Attributes
    ----------
    output : int
    sigma : float
        Noise level of the output.
    scale : float
        Its variation along the line.
    slope : float
        Its typical slope, per unit of t.
    cell : float
        Width of a cell of the grid.
    """

    line: Line
    output: int
    sigma: float
    scale: float
    slope: float
    cell: float
    rng: np.random.Generator

    def with_noise(self, sigma: float) -> "Focus":
        """The same with another noise level."""
        return replace(self, sigma=sigma)

    def closest(self, t: float) -> float:
        """Least useful distance between samples at t."""
        return GRAINS_BETWEEN_SAMPLES * float(self.line.grain(np.array([t]))[0])

    def view(self, samples: Samples, lower: float, upper: float) -> SideView:
        """The samples of an unbroken piece."""
        t, f = samples.within(self.output, lower, upper)
        return whole(t, f, local_noise(t, f, self.sigma, self.line.grain(t)))

    def tolerance(self, widths: Array) -> Array:
        """What may hide in clean cells of these widths; it shrinks with them: a kink is as visible at every scale."""
        return np.asarray(CLEAN * self.scale * np.minimum(1.0, widths / self.cell))


@dataclass(slots=True, kw_only=True, eq=False)
class Ledger:
    """Findings on one output, kept while its quest is on its way: the budget may end it at any point.

    Attributes
    ----------
    stretch : (float, float)
        The finite stretch of the line that is being refined.
    dismissed, descents : lists of (float, float)
        Cells in which a zoom found nothing, and cells where a descent began.
    """

    stretch: tuple[float, float] = (0.0, 1.0)
    findings: list[Irregularity] = field(default_factory=list)
    dismissed: list[tuple[float, float]] = field(default_factory=list)
    descents: list[tuple[float, float]] = field(default_factory=list)

    @property
    def full(self) -> bool:
        kinds = [finding.kind for finding in self.findings]
        return any(kinds.count(kind) >= SAME_KIND for kind in kinds)

    def worth_a_zoom(self, lower: float, upper: float) -> bool:
        """Whether a cell is none, and not nearly all, of a cell that was dismissed."""
        return not any(
            a <= lower and upper <= b and upper - lower > STILL_THE_SAME * (b - a) for a, b in self.dismissed
        )

    def worth_a_descent(self, lower: float, upper: float) -> bool:
        """Whether no descent began near this cell, or only one from a much wider cell."""
        width = upper - lower
        return len(self.descents) < MOST_DESCENTS and not any(
            a - (b - a) < upper and lower < b + (b - a) and width > MUCH_NARROWER * (b - a) for a, b in self.descents
        )

    def in_a_shadow(self, t: Array) -> BoolArray:
        """(k,): close to a break with a fractional power, where no polynomial ever fits."""
        shadow = np.zeros(t.size, dtype=bool)
        for found in self.findings:
            if "power" in found.evidence:
                shadow |= (t > found.lower - SHADOW) & (t < found.upper + SHADOW)
        return shadow

    def pieces(self, lower: float, upper: float) -> list[tuple[float, float]]:
        """[lower, upper] cut at the breaks that were found."""
        breaks = sorted((f.lower, f.upper) for f in self.findings if lower < f.upper and f.lower < upper)
        starts = [lower, *(b for _, b in breaks)]
        ends = [*(a for a, _ in breaks), upper]
        return [(a, b) for a, b in zip(starts, ends, strict=True) if a < b]

    def piece_around(self, cell: tuple[float, float]) -> tuple[float, float]:
        """The unbroken piece that holds a cell."""
        return next((a, b) for a, b in self.pieces(*self.stretch) if a <= cell[0] and cell[1] <= b)
