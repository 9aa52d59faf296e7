"""Slope and second derivative just left and just right of a break, from the samples on that side alone."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from gradcheck.health.line_predictions import Prediction, SideView, extrapolated, nodes_leftward, nodes_rightward
from gradcheck.records.arrays import Array, IntArray

REACHES = 10.0 ** -np.arange(2.0, 9.0)  # in t: how far the samples that speak may lie apart

Nodes = Callable[[Array, IntArray, Array, IntArray], IntArray]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OneSided:
    """Derivatives of order 1 and 2, on the left and on the right, each with its doubt. Shapes (2, 2): side, order."""

    value: Array
    doubt: Array

    def change(self, order: int) -> tuple[float, float]:
        """Right minus left, and its doubt."""
        left, right = self.value[:, order - 1]
        return float(right - left), float(self.doubt[:, order - 1].sum())


def one_sided(view: SideView, lower: float, upper: float) -> OneSided:
    """Derivatives on either side of a break that lies in [lower, upper]."""
    centre = 0.5 * (lower + upper)
    last = int(np.searchsorted(view.t, lower, side="right")) - 1
    first = int(np.searchsorted(view.t, upper, side="left"))
    sides = [
        _derivatives(view, nodes_leftward, last, centre, 1.0, view.first),
        _derivatives(view, nodes_rightward, first, centre, -1.0, view.last),
    ]
    return OneSided(value=np.array([v for v, _ in sides]), doubt=np.array([d for _, d in sides]))


def _derivatives(
    view: SideView, nodes: Nodes, start: int, centre: float, outward: float, limit: IntArray
) -> tuple[Array, Array]:
    """(2,) first and second derivative at the centre, and their doubts, at the reach that gives the least doubt."""
    begin = np.full(REACHES.size, start)
    index = nodes(view.t, begin, centre + outward * REACHES, limit[begin])
    x = centre + REACHES[:, None] * np.array([-1.0, 0.0, 1.0])
    count = (index >= 0).sum(axis=1)
    seen = extrapolated(view.t[index], view.f[index], view.noise[index], count, x)
    value, doubt = _differences(seen)
    # What changes with the reach is not yet the derivative at the point.
    drift = np.abs(np.diff(value, axis=0, append=np.inf))
    doubt = np.nan_to_num(doubt + drift, nan=np.inf)
    best = doubt.argmin(axis=0)
    return value[best, [0, 1]], doubt[best, [0, 1]]


def _differences(seen: Prediction) -> tuple[Array, Array]:
    """(reaches, 2): central first and second differences, and what the doubts of the values make of them."""
    left, middle, right = seen.value.T
    worst = seen.doubt.max(axis=1)
    value = np.stack([(right - left) / (2.0 * REACHES), (right - 2.0 * middle + left) / REACHES**2], axis=1)
    return value, np.stack([worst / REACHES, 4.0 * worst / REACHES**2], axis=1)
