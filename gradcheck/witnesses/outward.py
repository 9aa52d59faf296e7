"""From a narrow interval on which the values settled outwards again: what made the wide interval fail?

A wide interval whose coefficients neither decay nor end in rounding may hold a fast wave, a kink beside the point, or
many small jumps: an inner iteration, a table, the last digits of a cancelled sum. Between two jumps the values are as
smooth as any, but the slope there is not what the function is about. Intervals that grow by a factor tell: a wave stays
resolved until its coefficients decay too slowly, which they do gradually; a kink shows at once and grows with the
interval; a jump shows at once and stays as large as it is.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.polynomial_fit import Fit

#: Each interval is wider than the one before by this factor; so many are tried.
FACTOR, ROUNDS_MOST = 4.0, 8
#: What is left over behind a kink grows with this power of the width or a higher one, behind jumps with a lower one.
KINK_POWER = 0.7
#: A wave that is just resolved leaves less than this share of its variation.
RESOLVED = 0.01


@dataclass(slots=True, eq=False)
class Outward:
    """The course outwards of one direction.

    Attributes
    ----------
    inner : float
        Half-width from which it began.
    limit : float
        Half-width of the interval that failed.
    asked : ndarray of bool, shape (m,)
        Outputs of which nothing is known yet.
    left_over : ndarray, shape (m,)
        What the interval that failed left over.
    contacts : ndarray of int, shape (m,)
        How many intervals were no longer smooth.
    smooth, jumps : ndarray of bool, shape (m,)
        Outputs that are smooth but for a kink beside the point, or a wave; outputs that jump.
    """

    inner: float
    limit: float
    left_over: Array
    asked: BoolArray
    contacts: IntArray
    smooth: BoolArray
    jumps: BoolArray
    rounds: int = 0

    @staticmethod
    def begin(inner: float, limit: float, left_over: Array, asked: BoolArray) -> "Outward":
        """Before the first interval; what jumps is not known of any output."""
        nothing = np.zeros(asked.size, bool)
        contacts = np.zeros(asked.size, dtype=np.intp)
        return Outward(inner, limit, left_over, asked.copy(), contacts, nothing.copy(), nothing.copy())

    def hear(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        """Take in fit `i` of the interval just measured.

        A break at the edge of the first interval that meets it shows little; the second one is judged, against the
        interval that failed.
        """
        self.rounds += 1
        tail, flat = fits.tail[i], fits.flat[i]
        wave = ~flat & (fits.before[i] > 3 * tail) & (tail < RESOLVED * fits.variation[i])
        self.smooth |= self.asked & ~at_floor & wave & (self.contacts == 0)
        self.contacts += self.asked & ~at_floor
        with np.errstate(divide="ignore", invalid="ignore"):
            power = np.log(self.left_over / tail) / np.log(self.limit / half)
        judged = self.asked & (self.contacts == 2) & (self.limit >= FACTOR * half)
        kink = judged & (power > KINK_POWER)
        self.smooth |= kink
        # Too near to the interval that failed to tell: what may be jumps counts as such.
        near = self.asked & (self.contacts > 0) & (self.limit < FACTOR * half)
        self.jumps |= ((judged & ~kink) | near) & ~self.smooth
        self.asked &= ~(self.smooth | self.jumps)

    def next_half(self, half: float) -> float:
        """Half-width of the next interval; 0 if there is none to ask."""
        if not self.asked.any() or self.rounds >= ROUNDS_MOST or half >= self.limit:
            return 0.0
        return min(FACTOR * half, self.limit)
