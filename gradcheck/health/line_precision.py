"""How exact the values of one output are: noise, single precision, few digits, plateaus."""

from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_focus import Focus
from gradcheck.health.line_noise import STENCIL_POINTS, STENCIL_SPACING, StencilReading, read_stencil, stencil
from gradcheck.health.line_plateaus import as_staircase, levels, risers, single_step
from gradcheck.health.line_report import Irregularity
from gradcheck.health.line_samples import Quest, Samples
from gradcheck.records.arrays import Array
from gradcheck.records.finding import FindingCode
from gradcheck.witnesses import fingerprints
from gradcheck.witnesses.noise_kind import (
    SINGLE_NOISE,
    SINGLE_ROUNDING,
    SINGLE_STEP,
    UNIFORM,
    rounding_limit,
)

FINE_SPACING = 1e-11  # in t: far below the steps that single precision can tell apart
FINE_GAIN = 30.0
FEWEST_LEVELS = 8  # fewer levels of round values are a staircase
COUNTED = 1e4  # whole numbers up to here are counts rather than rounded measurements
WAVE_STEEPNESS = 30.0  # slope of a fast wave over that of the line


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Precision:
    """What is known of the exactness of an output.

    Attributes
    ----------
    sigma : float
        Standard deviation of the error of one evaluation.
    found : tuple of Irregularity
    stepped : bool
        The output is a staircase: between its risers there is nothing to look for.
    """

    sigma: float
    found: tuple[Irregularity, ...]
    stepped: bool = False


def measured(
    samples: Samples, focus: Focus, grid: Array, readings: list[StencilReading], repeatable: bool
) -> Quest[tuple[Samples, Precision]]:
    """Look at the digits and at the stencils, with a few more samples where these leave doubt."""
    _, f = samples.at(grid, focus.output)
    f = f[np.isfinite(f)]
    magnitude = float(np.abs(f).max())
    sigma = focus.sigma
    if np.ptp(f) == 0.0:
        return samples, Precision(sigma=sigma, found=())
    single = fingerprints.single_precision(f)
    lattice = fingerprints.decimal_lattice(f) if levels(f) >= FEWEST_LEVELS else fingerprints.DecimalLattice()
    if single and lattice.quantum < SINGLE_STEP * magnitude:
        # Every binary fraction is a decimal one; single precision is the coarser lattice.
        lattice = fingerprints.DecimalLattice()
    counted = lattice.whole and np.ptp(f) < COUNTED
    coarsest = 0.0 if counted else lattice.coarsest
    if all(reading.flat[focus.output] for reading in readings) and not single:
        samples, precision = yield from _plateaus(samples, focus, f, coarsest)
        if precision is not None:
            return samples, precision
    if coarsest:
        return samples, _coarse(focus, sigma, coarsest)
    if single:
        return samples, _low(focus, max(sigma, SINGLE_ROUNDING * magnitude), magnitude)
    argument = max(float(reading.argument[focus.output]) for reading in readings)
    if sigma <= float(rounding_limit(np.array(magnitude), np.array(argument))):
        return samples, Precision(sigma=sigma, found=())
    if repeatable:
        samples, fine = yield from _looked_at_finely(samples, focus)
        if fine is not None and float(fine.sigma[0]) * FINE_GAIN < sigma:
            if _is_a_wave(fine, readings, focus):
                return samples, Precision(sigma=float(fine.sigma[0]), found=())
            if SINGLE_NOISE[0] <= sigma / magnitude <= SINGLE_NOISE[1]:
                return samples, _low(focus, sigma, magnitude)
    noise = _whole_line(focus, FindingCode.NOISE, sigma, {"relative_to_values": sigma / magnitude})
    return samples, Precision(sigma=sigma, found=(noise,))


def _plateaus(samples: Samples, focus: Focus, f: Array, quantum: float) -> Quest[tuple[Samples, Precision | None]]:
    """What steps a model with flat stencils has; None if it has none that are flat on both sides."""
    samples, found = yield from risers(samples, focus)
    if not found:
        return samples, None
    if single_step(f):
        return samples, Precision(sigma=focus.sigma, found=tuple(found[:1]), stepped=True)
    highest = max(abs(riser.size) for riser in found)
    if quantum and highest <= 1.5 * quantum:
        return samples, _coarse(focus, focus.sigma, quantum)
    if all(_at_a_single(riser, focus) for riser in found):
        return samples, _low(focus, UNIFORM * highest, float(np.abs(f).max()))
    steps = tuple(as_staircase(riser, samples) for riser in found)
    return samples, Precision(sigma=focus.sigma, found=steps, stepped=True)


def _at_a_single(riser: Irregularity, focus: Focus) -> bool:
    return fingerprints.crosses_a_single(focus.line.point(riser.lower), focus.line.point(riser.upper))


def _looked_at_finely(samples: Samples, focus: Focus) -> Quest[tuple[Samples, StencilReading | None]]:
    """A reading of this output at a spacing far below that of the stencils, in a random place."""
    spacing = max(FINE_SPACING, focus.closest(1.0) / 4.0)
    t = stencil(float(focus.rng.uniform(0.1, 0.9)), spacing, focus.rng)
    samples = yield t
    at, values = samples.at(t, focus.output)
    if not np.isfinite(values).all() or np.unique(at).size < at.size:
        return samples, None
    return samples, read_stencil(at, values[:, None], 0.0)


def _is_a_wave(fine: StencilReading, readings: list[StencilReading], focus: Focus) -> bool:
    """Whether what looks like noise is a wave: smooth from close by, and there far steeper than the line as a whole.

    Values that are constant from step to step are smooth from close by too, but not steep.
    """
    sigma = max(float(reading.sigma[focus.output]) for reading in readings)
    slope = abs(float(fine.slope[0]))
    return slope > WAVE_STEEPNESS * focus.slope and slope * STENCIL_POINTS * STENCIL_SPACING > sigma


def _coarse(focus: Focus, sigma: float, quantum: float) -> Precision:
    found = _whole_line(focus, FindingCode.COARSE_OUTPUT, quantum, {"quantum": quantum})
    return Precision(sigma=max(sigma, UNIFORM * quantum), found=(found,))


def _low(focus: Focus, sigma: float, magnitude: float) -> Precision:
    evidence = {"relative_to_values": sigma / magnitude}
    return Precision(sigma=sigma, found=(_whole_line(focus, FindingCode.LOW_PRECISION, sigma, evidence),))


def _whole_line(focus: Focus, kind: FindingCode, size: float, evidence: dict[str, float]) -> Irregularity:
    return Irregularity(
        kind=kind,
        output=focus.output,
        lower=0.0,
        upper=1.0,
        size=size,
        relative=size / focus.scale,
        evidence=evidence,
    )
