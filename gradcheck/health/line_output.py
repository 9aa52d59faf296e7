"""The examination of one output along one line, from the first samples to what is known in the end."""

from dataclasses import dataclass, field

import numpy as np

from gradcheck.health.line_edges import edges_located, finite_stretches, stretches
from gradcheck.health.line_focus import NARROWEST, Focus, Ledger
from gradcheck.health.line_noise import StencilReading
from gradcheck.health.line_precision import Precision, measured
from gradcheck.health.line_refinement import looked_at_to_the_noise, refined
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import Line, Quest, Samples
from gradcheck.health.line_survey import surveyed
from gradcheck.health.line_zoom import suspicion
from gradcheck.records.arrays import Array
from gradcheck.records.finding import FindingCode

EDGE_DISTANCE = 1e-3  # of a stretch without values: nothing is refined closer


@dataclass(slots=True, kw_only=True, eq=False)
class OutputExamination:
    """What is known of one output while its quest is on its way; the budget may end the quest at any point.

    Attributes
    ----------
    grid : ndarray
        Abscissae of the grid, which are spread evenly enough for statements on the whole line.
    readings : list of StencilReading
    repeat_gap : float
        Largest difference between two evaluations of the same point; 0 if they agree.
    """

    line: Line
    output: int
    grid: Array
    readings: list[StencilReading]
    repeat_gap: float
    seed: int
    focus: Focus | None = None
    precision: Precision | None = None
    ledger: Ledger = field(default_factory=Ledger)

    def begun(self, samples: Samples) -> float:
        """Take in the first samples; how strongly they make some cell a suspect."""
        rng = np.random.default_rng(self.seed)
        focus = self.focus = focused(samples, self.line, self.output, self.grid, self.readings, rng)
        if focus is None:
            return 0.0
        strength = [0.0]
        for lower, upper in finite_stretches(samples, self.output):
            survey = surveyed(samples, focus, self.ledger, lower, upper)
            rough = survey.cell[survey.hidden > survey.tolerance]
            if rough.size:
                strength.append(float(suspicion(survey.view, rough).max()))
        return max(strength)

    def quest(self, samples: Samples) -> Quest[None]:
        """Edges, precision, then every finite stretch; what has `begun` before."""
        samples = yield from edges_located(samples, self.output, self.line)
        if self.focus is None:
            return
        focus = self.focus
        samples, precision = yield from measured(samples, focus, self.grid, self.readings, self.repeat_gap == 0.0)
        self.precision = precision
        self.focus = focus = focus.with_noise(precision.sigma)
        if precision.stepped or focus.scale == 0.0:
            return
        regions = self._regions(samples)
        samples = yield np.array(regions).ravel()
        for look in (refined, looked_at_to_the_noise):
            for region in regions:
                self.ledger.stretch = region
                samples = yield from look(samples, focus, self.ledger, *region)

    def _regions(self, samples: Samples) -> list[tuple[float, float]]:
        """Finite stretches without the neighbourhood of their edges."""
        regions = []
        for lower, upper in finite_stretches(samples, self.output):
            a = lower if lower == samples.t[0] else lower + EDGE_DISTANCE
            b = upper if upper == samples.t[-1] else upper - EDGE_DISTANCE
            if b - a > EDGE_DISTANCE:
                regions.append((a, b))
        return regions

    @property
    def noise(self) -> float:
        """Noise level of the output; NaN if nothing is known."""
        if self.precision is not None:
            return self.precision.sigma
        return np.nan if self.focus is None else self.focus.sigma

    def irregularities(self, samples: Samples) -> list[Irregularity]:
        """All that was found, along the line."""
        found = [*stretches(samples, self.output), *self.ledger.findings]
        if self.precision is not None:
            found += self.precision.found
        if self.repeat_gap > 0.0:
            found.append(self._unrepeatable())
        return sorted(found, key=lambda irregularity: irregularity.lower)

    def _unrepeatable(self) -> Irregularity:
        scale = self.focus.scale if self.focus is not None else np.nan
        return Irregularity(
            kind=FindingCode.UNREPEATABLE,
            output=self.output,
            lower=0.0,
            upper=1.0,
            size=self.repeat_gap,
            relative=self.repeat_gap / scale if scale > 0.0 else np.nan,
        )

    def unresolved(self, samples: Samples) -> float:
        """Share of the finite stretches on which the cells are not clean."""
        if self.focus is None or self.focus.scale == 0.0:
            return 0.0
        total = rough = 0.0
        for lower, upper in finite_stretches(samples, self.output):
            survey = surveyed(samples, self.focus, self.ledger, lower, upper)
            total += upper - lower
            # What is narrower than any cell that is looked into is the place of a break, not an unknown.
            rough += float(survey.width[(survey.hidden > survey.tolerance) & (survey.width > NARROWEST)].sum())
        return rough / total if total else 0.0


def focused(
    samples: Samples,
    line: Line,
    output: int,
    grid: Array,
    readings: list[StencilReading],
    rng: np.random.Generator,
) -> Focus | None:
    """Scales of an output, or None if it is finite almost nowhere."""
    t, f = samples.at(grid, output)
    t, f = t[np.isfinite(f)], f[np.isfinite(f)]
    if f.size < 4:
        return None
    low, high = np.percentile(f, [10.0, 90.0])
    scale = max(float(high - low), 0.02 * float(np.ptp(f)))
    slopes = np.abs(np.diff(f) / np.diff(t))
    sigmas = [float(reading.sigma[output]) for reading in readings]
    return Focus(
        line=line,
        output=output,
        sigma=max((sigma for sigma in sigmas if np.isfinite(sigma)), default=0.0),
        scale=scale,
        slope=max(float(np.median(slopes)), scale),
        cell=1.0 / (grid.size - 1),
        rng=rng,
    )
