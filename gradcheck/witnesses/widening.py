"""How wide an interval may be so that a larger stencil still ends in rounding.

Rounding enters a second derivative divided by the width squared, so the widest interval that is still resolved is the
best. Coefficients that fall geometrically belong to a function with a singularity at a certain distance (S. Bernstein
1912; Trefethen, "Approximation Theory and Approximation Practice", 2013, chapter 8): from their rate on one interval
follows that on another.
"""

import numpy as np

from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.polynomial_fit import Fit

#: Orders in which the larger stencil should reach the floor; the others are its noise sample.
ORDERS = 17
#: Share of the promised width that is taken.
SAFETY = 0.9
#: The variation is taken for so many floors at least.
_LEAST_HEIGHT = 10.0


def promised_ratio(fits: Fit, i: int, settled: BoolArray, level: Array) -> float:
    """The width, in units of that of fit `i`, on which `ORDERS` orders promise to reach the floor.

    Parameters
    ----------
    fits : Fit
    i : int
        Direction; the smallest ratio of all outputs counts.
    settled : ndarray of bool, shape (m,)
        Outputs whose coefficients end at `level`: their number tells the rate. Else the last halves of them do.
    level : ndarray, shape (m,)
        Rounding or noise of one value.

    Returns
    -------
    float
        0 where nothing can be said.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        height = np.log(np.maximum(fits.variation[i] / level, _LEAST_HEIGHT))
        by_order = height / np.maximum(fits.order[i] - 1, 2)
        # root mean squares of three coefficients each, three orders apart
        by_halves = np.log(fits.before[i] / fits.tail[i]) / 3
        now, then = np.exp(np.where(settled, by_order, by_halves)), np.exp(height / ORDERS)
        # half the difference of rate and inverse: the distance of a singularity across the interval
        ratio = (now - 1 / now) / (then - 1 / then)
    return SAFETY * float(np.maximum(np.nan_to_num(ratio), 0.0).min())


def narrower_share(fits: Fit, i: int, missed: BoolArray, level: Array) -> float:
    """The share of its width to try next where the coefficients of fit `i` have not reached the level."""
    ratio = level / np.maximum(fits.tail[i], level)
    return SAFETY * float(np.min(ratio[missed], initial=1.0) ** (1 / ORDERS))
