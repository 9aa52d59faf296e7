"""The second derivative at a point where each side is smooth on its own and both together are not."""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.polynomial_fit import Fit

#: Slopes, and second derivatives, of both sides differ if they are apart by so many times the sum of their bounds.
MARGIN = 3.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Sides:
    """Fits to the values on each side of the point alone: second derivatives, and slopes."""

    left: Fit
    right: Fit
    left_slope: Fit
    right_slope: Fit


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Meeting:
    """What both sides say together; arrays (m,).

    Attributes
    ----------
    value, bound : ndarray
        Where the second derivatives are apart, the bound covers both.
    apart : ndarray of bool
        A curvature break.
    one_slope : ndarray of bool
        The slopes are the same; else it is a kink, and the rest means nothing.
    """

    value: Array
    bound: Array
    apart: BoolArray
    one_slope: BoolArray


def meeting(sides: Sides, i: int) -> Meeting:
    """Both sides of direction `i` compared."""
    left, right, slope, other_slope = sides.left, sides.right, sides.left_slope, sides.right_slope
    gap, error = np.abs(right.value[i] - left.value[i]), left.bound[i] + right.bound[i]
    apart = gap > MARGIN * error
    bend = np.abs(other_slope.value[i] - slope.value[i])
    return Meeting(
        value=left.value[i] / 2 + right.value[i] / 2,
        bound=gap / 2 + np.where(apart, error, error / 2),
        apart=apart,
        one_slope=bend <= MARGIN * (slope.bound[i] + other_slope.bound[i]),
    )
