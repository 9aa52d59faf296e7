"""Which cells between samples are clean: how large a jump could hide in each without the samples showing it.

Divided differences over windows of contiguous samples annihilate polynomials; what is left of a smooth, resolved
function is tiny, while a jump inside one cell of the window leaves its height times a known response (edge detection by
annihilation: Harten 1989; Archibald, Gelb & Yoon, SIAM J. Numer. Anal. 43, 2005). Turned round, each window bounds the
jump that may hide in each of its cells, and the smallest bound counts. Windows that end at a cell look at it from one
side only, so that a break spoils its own cell and not its neighbours.
"""

from collections.abc import Iterator

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view

from gradcheck.health.line_samples import EPSILON
from gradcheck.records.arrays import Array

ORDERS = range(4, 10)  # of the divided differences
ROUNDING = 0.3  # standard deviation of one rounding, in units of the last place
NOISE_SIGMAS = 6.0  # a difference below this many standard deviations says nothing
WEAKEST_VIEW = 300.0  # a window may amplify noise to this many standard deviations and still bear witness


def local_noise(t: Array, f: Array, sigma: float, grain: Array) -> Array:
    """(k,): standard deviation of the error of each sample.

    The measured level, but at least the rounding of the value and of the point (times the smaller of the slopes on
    either side: next to a jump the larger one is the jump).
    """
    if t.size < 2:
        return np.maximum(sigma, ROUNDING * EPSILON * np.abs(f))
    slopes = np.abs(np.diff(f) / np.diff(t))
    slope = np.minimum(np.append(slopes, slopes[-1]), np.append(slopes[0], slopes))
    return np.asarray(np.maximum(np.maximum(sigma, ROUNDING * EPSILON * np.abs(f)), 0.15 * grain * slope))


def hidden_jumps(t: Array, f: Array, noise: Array, tolerance: Array) -> Array:
    """(k-1,): the largest jump that could hide in each cell; infinite where no window can say.

    t, f, noise:  (k,) increasing abscissae, values, and the standard deviation of each value's error
    tolerance:    (k-1,) what will count as clean; windows blinder than that are not heard
    """
    bound = np.full(max(t.size - 1, 0), np.inf)
    if t.size < 2:
        return bound
    blur = np.maximum(noise[:-1], noise[1:])
    audible = _windows(np.maximum(0.3 * tolerance, WEAKEST_VIEW * blur))
    values, noises = _windows(f), _windows(noise)
    # Weights add up to zero only up to rounding; an offset of the values would be multiplied with that.
    values = values - values[:, :1]
    lower: Array | None = None
    for order, weights in difference_weights(t):
        count = weights.shape[0]
        jump, unsure = _jumps_by_window(weights, values[:count, : order + 1], noises[:count, : order + 1])
        seen = jump
        if lower is not None:
            # A difference vanishes by accident, such as an odd one on a symmetric feature; those inside it do not.
            seen = jump.copy()
            seen[:, :-1] = np.maximum(seen[:, :-1], lower[:-1])
            seen[:, 1:] = np.maximum(seen[:, 1:], lower[1:])
        seen = np.where(unsure <= audible[:count, :order], seen, np.inf)
        for column in range(order):
            part = bound[column : column + count]
            np.minimum(part, seen[:, column], out=part)
        lower = jump
    return bound


def _windows(values: Array) -> Array:
    """(k, 10): from each entry to the ninth behind it; past the end stands NaN, which no order reads."""
    return sliding_window_view(np.append(values, np.full(ORDERS.stop - 1, np.nan)), ORDERS.stop)


def _jumps_by_window(weights: Array, values: Array, noise: Array) -> tuple[Array, Array]:
    """(windows, order) twice: the jump that each window allows in each of its cells, and the noise therein."""
    weighted = weights * values
    blur = weights * noise
    amplitude = NOISE_SIGMAS * np.sqrt((blur * blur).sum(axis=1))
    amplitude += 4.0 * EPSILON * np.sqrt((weighted * weighted).sum(axis=1))
    excess = np.maximum(np.abs(weighted.sum(axis=1)) - amplitude, 0.0)
    response = np.maximum(np.abs(np.cumsum(weights, axis=1)[:, :-1]), 1e-300)
    return excess[:, None] / response, amplitude[:, None] / response


def difference_weights(t: Array) -> Iterator[tuple[int, Array]]:
    """For each order, (windows, order + 1) weights of the divided difference over each window, the largest scaled to 1.

    Each order follows from the one before: 1/Π(tᵢ − tⱼ) gains a factor, and the new node's own product is added.
    """
    nodes = _windows(t)
    weights = np.ones((t.size, 1))
    for order in range(1, min(ORDERS.stop, t.size)):
        count = t.size - order
        apart = nodes[:count, :order] - nodes[:count, order : order + 1]
        own = (-1.0) ** order / apart.prod(axis=1)
        weights = np.concatenate([weights[:count] / apart, own[:, None]], axis=1)
        if order in ORDERS:
            yield order, weights / np.abs(weights).max(axis=1, keepdims=True)
