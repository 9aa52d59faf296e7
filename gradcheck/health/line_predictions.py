"""What the samples on one side of a cell predict inside it, and how sure they are.

Newton extrapolants through samples whose distances from the far end of the cell grow, so that a cluster of samples left
by an earlier zoom does not swallow all nodes. The order is chosen where the last two corrections and the amplified
noise together are smallest.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, IntArray

NODES = 9
GROWTH = 1.15  # least ratio of successive distances from the far end of the cell
NOISE_SIGMAS = 3.0
NUDGE = 1e-20  # stands for the distance from a node to itself, which cancels, as a difference of zero would not


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prediction:
    """Values predicted at abscissae, each ± doubt. Shapes (cells, abscissae)."""

    value: Array
    doubt: Array


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SideView:
    """Samples of one piece of a line, between whose breaks anything may be extrapolated.

    Attributes
    ----------
    t, f, noise : ndarray, shape (k,)
        Increasing abscissae, values, standard deviations.
    first, last : ndarray of int, shape (k,)
        For each sample, the range of samples that belong to the same unbroken piece.
    """

    t: Array
    f: Array
    noise: Array
    first: IntArray
    last: IntArray

    def from_left(self, left: IntArray, right: IntArray, x: Array) -> Prediction:
        """Predictions at x ``(c, q)`` between the samples `left` and `right` ``(c,)``, from `left` and those before."""
        return self._predicted(nodes_leftward(self.t, left, self.t[right], self.first[left]), x)

    def from_right(self, left: IntArray, right: IntArray, x: Array) -> Prediction:
        """Predictions at x ``(c, q)`` between the samples `left` and `right` ``(c,)``, from `right` and the next."""
        return self._predicted(nodes_rightward(self.t, right, self.t[left], self.last[right]), x)

    def _predicted(self, nodes: IntArray, x: Array) -> Prediction:
        count = (nodes >= 0).sum(axis=1)
        return extrapolated(self.t[nodes], self.f[nodes], self.noise[nodes], count, x)


def whole(t: Array, f: Array, noise: Array) -> SideView:
    """A view of samples that no break separates."""
    first = np.zeros(t.size, dtype=np.intp)
    return SideView(t=t, f=f, noise=noise, first=first, last=first + t.size - 1)


def nodes_leftward(t: Array, start: IntArray, far: Array, stop: IntArray) -> IntArray:
    """(c, 9): indices of nodes from `start` leftwards to `stop`; -1 where there are no more."""
    nodes = np.full((start.size, NODES), -1, dtype=np.intp)
    nodes[:, 0] = current = start
    for column in range(1, NODES):
        target = far - GROWTH * (far - t[current])
        following = np.minimum(np.searchsorted(t, target, side="right") - 1, current - 1)
        alive = (following >= stop) & (nodes[:, column - 1] >= 0)
        nodes[:, column] = np.where(alive, following, -1)
        current = np.where(alive, following, current)
    return nodes


def nodes_rightward(t: Array, start: IntArray, far: Array, stop: IntArray) -> IntArray:
    """(c, 9): indices of nodes from `start` rightwards to `stop`; -1 where there are no more."""
    nodes = np.full((start.size, NODES), -1, dtype=np.intp)
    nodes[:, 0] = current = start
    for column in range(1, NODES):
        target = far + GROWTH * (t[current] - far)
        following = np.maximum(np.searchsorted(t, target, side="left"), current + 1)
        alive = (following <= stop) & (nodes[:, column - 1] >= 0)
        nodes[:, column] = np.where(alive, following, -1)
        current = np.where(alive, following, current)
    return nodes


def extrapolated(z: Array, y: Array, noise: Array, count: IntArray, x: Array) -> Prediction:
    """Newton's polynomial through nodes z, at x, with the order of least doubt.

    z, y, noise:  (c, m) nodes nearest first, values, standard deviations
    count:        (c,) how many of the nodes exist; what stands behind them is ignored
    x:            (c, q)

    Orders below 2 are never believed: the first difference vanishes by accident at every flat spot. The doubt is
    infinite where fewer than three nodes exist.
    """
    orders = np.arange(z.shape[1])
    # In units of the reach, so that products of nine distances neither overflow nor vanish.
    unit = np.abs(x - z[:, :1]).max(axis=1)[:, None]
    unit = np.where(unit > 0.0, unit, 1.0)
    places = np.where(orders < count[:, None], (z - z[:, :1]) / unit, 1e3 * (1.0 + orders))
    gaps = ((x - z[:, :1]) / unit)[:, :, None] - places[:, None, :]
    gaps[gaps == 0.0] = NUDGE
    reach = np.cumprod(gaps, axis=2)
    weights = _difference_weights(places)
    coefficients = (weights * (y - y[:, :1])[:, None, :]).sum(axis=2)
    terms = coefficients[:, None, 1:] * reach[:, :, :-1]
    blur = reach * np.sqrt((1.0 / gaps**2) @ np.swapaxes((weights * noise[:, None, :]) ** 2, 1, 2))
    size = np.abs(terms)
    doubt = size[:, :, 1:] + 0.1 * size[:, :, :-1] + NOISE_SIGMAS * np.abs(blur[:, :, 2:])
    doubt = np.where(orders[2:] < count[:, None, None], doubt, np.inf)
    best = doubt.argmin(axis=2)
    row, column = np.indices(best.shape)
    value = np.cumsum(terms, axis=2)[row, column, best + 1] + y[:, :1]
    return Prediction(value=value, doubt=doubt[row, column, best])


def _difference_weights(z: Array) -> Array:
    """(c, m, m): row k holds the weights of the divided difference over the nodes 0 … k."""
    count = z.shape[1]
    apart = z[:, :, None] - z[:, None, :]
    diagonal = np.arange(count)
    apart[:, diagonal, diagonal] = 1.0
    products = np.swapaxes(np.cumprod(1.0 / apart, axis=2), 1, 2)
    return np.where(np.tri(count, dtype=bool), products, 0.0)
