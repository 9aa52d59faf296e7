"""The cells of a region of a line, piece by piece: which are clean, and which hides most?"""

from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_cells import hidden_jumps
from gradcheck.health.line_focus import Focus, Ledger
from gradcheck.health.line_predictions import SideView
from gradcheck.health.line_samples import Samples
from gradcheck.records.arrays import Array, BoolArray, IntArray

NARROW = 0.6  # power of the width; between the powers of x^1.5 and of x
NOISE_TOLERANCE = 10.0  # standard deviations of the noise


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Survey:
    """The cells of a region, piece by piece.

    Attributes
    ----------
    view : SideView
        All samples, with the limits of their pieces.
    cell : ndarray of int, shape (c,)
        Index of the left sample of each cell.
    width, hidden, tolerance : ndarray, shape (c,)
    """

    view: SideView
    cell: IntArray
    width: Array
    hidden: Array
    tolerance: Array

    @property
    def excess(self) -> Array:
        """(c,): hidden jump over tolerance; a clean cell has at most 1."""
        return np.where(self.hidden > self.tolerance, self.hidden / self.tolerance, 0.0)

    def ends(self, cell: int) -> tuple[float, float]:
        """Both ends of a cell."""
        left = int(self.cell[cell])
        return float(self.view.t[left]), float(self.view.t[left + 1])

    def roughest(self, among: BoolArray) -> int:
        """That one of these cells at whose ends the slope changes most for so narrow a cell, beyond its noise.

        The change of slope falls with the width where a function is smooth, and with a power of the width below one at
        its breaks: weighed with `NARROW`, the cell of a break stands out among wider ones.
        """
        slope = (self.view.f[self.cell + 1] - self.view.f[self.cell]) / self.width
        blur = 4.0 * self.view.noise[self.cell] / self.width
        change = np.maximum(np.abs(np.diff(slope)) - blur[1:] - blur[:-1], 0.0)
        rough = np.pad(change * (self.width[1:] + self.width[:-1]) ** -NARROW, 1)
        return int(np.where(among, rough[:-1] + rough[1:], -1.0).argmax())

    def extreme(self, limit: float) -> int | None:
        """The narrower cell next to the value farthest from the median, if it is farther than `limit`."""
        away = np.abs(self.view.f - np.median(self.view.f))
        farthest = int(away.argmax())
        if away[farthest] <= limit:
            return None
        beside = np.flatnonzero((self.cell == farthest) | (self.cell == farthest - 1))
        return int(beside[self.width[beside].argmin()]) if beside.size else None


def surveyed(
    samples: Samples, focus: Focus, ledger: Ledger, lower: float, upper: float, *, to_the_noise: bool = False
) -> Survey:
    """How clean the cells between `lower` and `upper` are.

    With `to_the_noise` the tolerance is the noise itself, for regularities smaller than what matters on a line.
    """
    views = [focus.view(samples, a, b) for a, b in ledger.pieces(lower, upper)]
    views = [view for view in views if view.t.size]
    hidden, tolerances = [np.empty(0)], [np.empty(0)]
    for view in views:
        tolerance = focus.tolerance(np.diff(view.t))
        if to_the_noise:
            tolerance = np.minimum(tolerance, NOISE_TOLERANCE * np.maximum(view.noise[:-1], view.noise[1:]))
        hidden.append(hidden_jumps(view.t, view.f, view.noise, tolerance))
        tolerances.append(tolerance)
    joined = _joined(views)
    cell = np.flatnonzero(joined.first[:-1] == joined.first[1:])
    return Survey(
        view=joined,
        cell=cell,
        width=joined.t[cell + 1] - joined.t[cell],
        hidden=np.concatenate(hidden),
        tolerance=np.concatenate(tolerances),
    )


def _joined(views: list[SideView]) -> SideView:
    """The samples of all pieces in one view, in which each sample knows the range of its own piece."""
    sizes = np.array([view.t.size for view in views], dtype=np.intp)
    starts = np.cumsum(sizes) - sizes
    nothing = np.empty(0)
    return SideView(
        t=np.concatenate([nothing, *(view.t for view in views)]),
        f=np.concatenate([nothing, *(view.f for view in views)]),
        noise=np.concatenate([nothing, *(view.noise for view in views)]),
        first=np.repeat(starts, sizes),
        last=np.repeat(starts + sizes - 1, sizes),
    )
