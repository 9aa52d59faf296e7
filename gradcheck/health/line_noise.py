"""The error of a single evaluation, from a few samples so close together that the model is a cubic there."""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, BoolArray

STENCIL_POINTS = 7
STENCIL_SPACING = 6e-8  # in t
WAVE_GAIN = 0.02  # two more degrees explain a wave this well, never noise

JUMP_GAIN = 0.01  # one step explains a jump inside a stencil this well, seldom noise


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StencilReading:
    """What one stencil shows of each output.

    Attributes
    ----------
    sigma : ndarray, shape (m,)
        Standard deviation of the error of one evaluation; NaN where a value is missing.
    argument : ndarray, shape (m,)
        That part of it which the rounding of the point alone explains (slope × grain).
    slope : ndarray, shape (m,)
        Slope of the cubic in the middle.
    flat : ndarray of bool, shape (m,)
        All values equal.
    """

    sigma: Array
    argument: Array
    slope: Array
    flat: BoolArray


def stencil(centre: float, spacing: float, rng: np.random.Generator) -> Array:
    """(7,): abscissae around `centre`, off any lattice so that rounding errors are independent."""
    steps = np.arange(STENCIL_POINTS) - 0.5 * (STENCIL_POINTS - 1) + rng.uniform(-0.2, 0.2, STENCIL_POINTS)
    return np.asarray(np.clip(centre + spacing * steps, 0.0, 1.0))


def read_stencil(t: Array, values: Array, grain: float) -> StencilReading:
    """Noise of each output from what a cubic leaves.

    t:       (k,) abscissae, k ≥ 7
    values:  (k, m)
    grain:   rounding of the point, in units of t

    A wave too fast for a cubic is no noise: the two degrees above the cubic then explain nearly all of the rest.
    """
    away = t - t[t.size // 2]
    centred = values - values[t.size // 2]
    powers = np.vander(away / (np.abs(away).max() or 1.0), 6, increasing=True)
    basis, triangle = np.linalg.qr(powers)
    parts = basis.T @ centred
    rest = centred - basis @ parts
    beyond_quintic = np.sqrt((rest**2).sum(axis=0) / (t.size - 6))
    beyond_cubic = np.sqrt(((rest**2).sum(axis=0) + (parts[4:] ** 2).sum(axis=0)) / (t.size - 4))
    wave = beyond_quintic < WAVE_GAIN * beyond_cubic
    sigma = np.where(wave, beyond_quintic, beyond_cubic)
    slope = _slope(triangle[:4, :4], parts[:4]) / (np.abs(away).max() or 1.0)
    return StencilReading(
        sigma=np.fmin(sigma, _beside_one_jump(basis[:, :4], centred, sigma)),
        argument=0.3 * grain * np.abs(slope),
        slope=slope,
        flat=(values == values[0]).all(axis=0),
    )


def _slope(triangle: Array, parts: Array) -> Array:
    """(m,): the linear coefficient of the cubic; NaN where the abscissae coincide."""
    if not np.abs(np.diag(triangle)).min() > 0.0:
        return np.full(parts.shape[1], np.nan)
    return np.asarray(np.linalg.solve(triangle, parts)[1])


def _beside_one_jump(cubic: Array, values: Array, sigma: Array) -> Array:
    """(m,): noise if a single jump between two samples explains nearly all that a cubic leaves; else `sigma`."""
    size = values.shape[0]
    rest = values - cubic @ (cubic.T @ values)
    steps = np.tri(size, size - 1, -1)
    steps -= cubic @ (cubic.T @ steps)
    steps /= np.sqrt((steps**2).sum(axis=0))
    left = rest[:, None, :] - steps[:, :, None] * (steps.T @ rest)[None, :, :]
    beside = np.sqrt((left**2).sum(axis=0).min(axis=0) / (size - 5))
    return np.where(beside < JUMP_GAIN * sigma, beside, sigma)
