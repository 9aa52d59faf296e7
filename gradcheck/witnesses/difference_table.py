"""Difference tables: the noise of equally spaced values, from differences in which the smooth part has vanished.

Sources: R. W. Hamming, Introduction to Applied Numerical Analysis (1971); J. J. Moré & S. M. Wild, Estimating
computational noise, SIAM J. Sci. Comput. 33 (2011) 1292-1314, from which the rule of acceptance is taken.
"""

import math
from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, BoolArray

#: So many successive levels must agree ...
SUCCESSIVE = 3
#: ... within this factor.
WITHIN = 4.0


def gamma(order: int) -> float:
    """γ_k = (k!)²/(2k)!: the variance of independent errors over that of their k-th differences."""
    return 1.0 / math.comb(2 * order, order)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DifferenceTable:
    """The noise that each column of the table shows.

    Attributes
    ----------
    levels : ndarray, shape (k - 1, ...)
        σ_j of the differences of order j = 1 ... k - 1.
    alternates : ndarray of bool, shape (k - 1, ...)
        Whether differences of that order change sign: those of noise do, those of a smooth function do not.
    level : ndarray, shape (...)
        Where the levels settle; NaN where they do not.
    settled : ndarray of bool, shape (...)
    """

    levels: Array
    alternates: BoolArray
    level: Array
    settled: BoolArray


def difference_table(values: Array) -> DifferenceTable:
    """The table of equally spaced values.

    Parameters
    ----------
    values : ndarray, shape (k, ...)
        k ≥ 4 finite values in order; further axes are tables of their own.

    Returns
    -------
    DifferenceTable
        The level is the root mean square of the first three successive levels that agree within a factor of 4, at
        the first of which the differences change sign. NaN where a value is not finite.

    Notes
    -----
    σ_k² = γ_k · mean((Δᵏf)²) (Moré & Wild 2011). One table of seven values is good to a factor of 2 or 3.

    Examples
    --------
    >>> import numpy as np
    >>> noisy = np.arange(9.0) + np.random.default_rng(0).normal(0.0, 0.1, 9)
    >>> bool(0.05 < difference_table(noisy).level < 0.2)
    True
    """
    levels, alternates = [], []
    values = np.asarray(values, dtype=float)
    # Squares of tiny or huge values would leave the range of floating-point numbers; powers of two lose nothing.
    largest = np.abs(values).max(axis=0)
    usual = np.isfinite(largest) & (largest > 0)
    unit = 2.0 ** np.clip(np.floor(np.log2(np.where(usual, largest, 1.0))), -1000, 1000)
    difference = values / unit
    for order in range(1, difference.shape[0]):
        difference = np.diff(difference, axis=0)
        levels.append(np.sqrt(gamma(order) * np.mean(difference**2, axis=0)))
        alternates.append((difference.min(axis=0) < 0) & (difference.max(axis=0) > 0))
    sigma, turning = np.array(levels), np.array(alternates)
    windows = np.lib.stride_tricks.sliding_window_view(sigma, SUCCESSIVE, axis=0)
    with np.errstate(invalid="ignore"):
        agree = (windows.max(axis=-1) <= WITHIN * windows.min(axis=-1)) & turning[: windows.shape[0]]
    settled = agree.any(axis=0)
    first = np.argmax(agree, axis=0)
    chosen = np.take_along_axis(windows, first[None, ..., None], axis=0)[0]
    level = np.where(settled, np.sqrt(np.mean(chosen**2, axis=-1)), np.nan)
    return DifferenceTable(levels=sigma * unit, alternates=turning, level=level * unit, settled=settled)
