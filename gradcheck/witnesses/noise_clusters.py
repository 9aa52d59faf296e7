"""What polynomials leave over of the values on a cluster of points: the noise sample of one scale.

As in `polynomial_fit`, values are expanded in polynomials that are orthonormal on the points; coefficients that do not
decay any more are noise, or a break that no polynomial follows. Here the points may lie anywhere, each direction at its
own, and what counts is the noise rather than the derivative.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev

from gradcheck.records.arrays import Array, BoolArray, IntArray

#: Multiples of the tail that count as "surely no noise".
SIGNIFICANT = 3.0
#: Coefficients left over that make a sample.
SAMPLE_LEAST = 6
#: Left-over coefficients of noise do not decay by more than this from their first half to their second.
DECAY = 3.0
#: Standard deviation of a correctly rounded value, in units of the spacing of floating-point numbers at its size.
ROUNDED = 0.29
#: What one jump or one kink leaves of the noise that it explains.
ONE_BREAK = 0.15
#: Polynomials that are taken away before a break is looked for.
BEFORE_BREAK = 8


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ClusterReading:
    """Arrays (d, m), per direction and output.

    Attributes
    ----------
    level : ndarray
        Standard deviation of one value, from the coefficients left over; at least that of a correct rounding.
    sample : ndarray of int
        Coefficients left over.
    settled : ndarray of bool
        The coefficients end in a sample that does not decay and that no single break explains.
    slope : ndarray
        Of the fitted polynomial at the place asked for, per half-width.
    variation : ndarray
        Largest minus smallest value.
    largest : ndarray
        Largest size of a value.
    tail : ndarray
        Root mean square of the last four coefficients.
    """

    level: Array
    sample: IntArray
    settled: BoolArray
    slope: Array
    variation: Array
    largest: Array
    tail: Array


def read_cluster(t: Array, values: Array, place: Array) -> ClusterReading:
    """Read the noise of values on clusters of points.

    Parameters
    ----------
    t : ndarray, shape (d, k)
        Points in units of the half-width, about in [-1, 1], all different; k ≥ 12.
    values : ndarray, shape (d, k, m)
        Finite.
    place : ndarray, shape (d,)
        Where the slope is asked for, in units of the half-width.
    """
    k = t.shape[1]
    largest = np.abs(values).max(axis=1)
    # Squares of tiny or huge values would leave the range of floating-point numbers; powers of two lose nothing.
    unit = 2.0 ** np.clip(np.floor(np.log2(np.where(largest > 0, largest, 1.0))), -1000, 1000)
    with np.errstate(over="ignore", invalid="ignore"):
        centred = (values - values[:, -1:]) / unit[:, None]
    basis, triangle = np.linalg.qr(chebyshev.chebvander(t, k - 1))
    a = np.einsum("dki,dkm->dim", basis, centred)
    floor = ROUNDED * np.spacing(largest / unit)
    tail = np.sqrt(np.mean(a[:, -4:] ** 2, axis=1))
    significant = np.abs(a) > SIGNIFICANT * np.maximum(tail, floor)[:, None]
    significant[:, 0] = True
    order = k - np.argmax(significant[:, ::-1], axis=1)
    sample = k - order
    index = np.arange(k)[None, :, None]
    left = np.where(index >= order[:, None], a, 0.0)
    level = np.sqrt((left**2).sum(axis=1) / np.maximum(sample, 1))
    sooner, later = _halves(left, order, index)
    settled = (sample >= SAMPLE_LEAST) & (sooner <= DECAY * np.maximum(later, floor))
    settled &= ~_is_one_break(t, basis, centred, floor)
    return ClusterReading(
        level=np.maximum(level, floor) * unit,
        sample=sample,
        settled=settled,
        slope=_slope(place, triangle, np.where(index < order[:, None], a, 0.0)) * unit,
        variation=np.ptp(values, axis=1),
        largest=largest,
        tail=tail * unit,
    )


def _halves(left: Array, order: IntArray, index: IntArray) -> tuple[Array, Array]:
    """(d, m) each: root mean square of the first and of the second half of the coefficients left over."""
    middle = (order + (left.shape[1] - order) // 2)[:, None]
    first = (index >= order[:, None]) & (index < middle)
    parts = (first, index >= middle)
    sooner, later = (np.sqrt(np.where(p, left**2, 0.0).sum(axis=1) / np.maximum(p.sum(axis=1), 1)) for p in parts)
    return sooner, later


def _slope(place: Array, triangle: Array, kept: Array) -> Array:
    """(d, m): derivative at t = `place` of what is kept of the coefficients."""
    slopes = chebyshev.chebval(place, chebyshev.chebder(np.eye(kept.shape[1]), axis=0)).T
    weights = np.linalg.solve(np.swapaxes(triangle, 1, 2), slopes[..., None])
    return np.asarray((weights * kept).sum(axis=1))


def _is_one_break(t: Array, basis: Array, values: Array, floor: Array) -> BoolArray:
    """(d, m): whether one jump or one kink between two points explains nearly all that low polynomials leave."""
    k = t.shape[1]
    between = np.sort(t, axis=1)
    between = (between[:, 1:] + between[:, :-1]) / 2
    away = t[:, :, None] - between[:, None, :]
    breaks = np.concatenate([(away > 0).astype(float), np.maximum(away, 0.0)], axis=2)
    beyond = basis[:, :, BEFORE_BREAK:]
    parts = np.einsum("dki,dkb->dib", beyond, breaks)
    size = np.sqrt((parts**2).sum(axis=1))
    parts = parts / np.where(size > 1e-9, size, np.inf)[:, None]
    rest = np.einsum("dki,dkm->dim", beyond, values)
    whole = (rest**2).sum(axis=1)
    explained = (np.einsum("dib,dim->dbm", parts, rest) ** 2).max(axis=1)
    remaining = np.sqrt(np.maximum(whole - explained, 0.0))
    large = np.sqrt(whole / (k - BEFORE_BREAK)) > 100 * floor
    return np.asarray(large & (remaining < ONE_BREAK * np.sqrt(whole)))


def beyond_cubic(t: Array, values: Array) -> tuple[Array, Array]:
    """What a cubic leaves of few values close together, as a level (m,), and the slope (m,) in their middle.

    Parameters
    ----------
    t : ndarray, shape (k,)
        k ≥ 6, all different.
    values : ndarray, shape (k, m)
    """
    middle, width = t.mean(), np.ptp(t) / 2
    basis, triangle = np.linalg.qr(np.vander((t - middle) / width, 4, increasing=True))
    centred = values - values[0]
    parts = basis.T @ centred
    rest = centred - basis @ parts
    slope = np.linalg.solve(triangle, parts)[1] / width
    return np.sqrt((rest**2).sum(axis=0) / (t.size - 4)), np.asarray(slope)
