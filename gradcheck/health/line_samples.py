"""A line through the model's input space, what is known on it, and how examinations of it ask for more.

A `Quest` is to a line what an inquiry is to the model: a generator that yields the abscissae t it wants and receives
the samples, which then hold them. Quests of several outputs share their abscissae.
"""

from collections.abc import Generator
from dataclasses import dataclass
from typing import Any, TypeAlias, TypeVar

import numpy as np
from numpy.typing import NDArray

from gradcheck.evaluation.protocol import Directions, Request
from gradcheck.records.arrays import Array, frozen

#: Multipliers of a 64-bit mix (the finaliser of SplitMix64: Steele, Lea & Flood 2014).
_ODD = np.array([0xBF58476D1CE4E5B9, 0x94D049BB133111EB], dtype=np.uint64)
EPSILON = float(np.finfo(float).eps)

Result = TypeVar("Result")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Line:
    """The points ``start + t·direction``, t in [0, 1].

    Attributes
    ----------
    start : ndarray, shape (n,)
    directions : ndarray
        As a `Request` wants them: one row ``(1, n)``, or one coordinate index ``(1,)``.
    length : float
        What t is multiplied with to give an offset along `directions`.
    coordinate : int
        The coordinate that changes, if there is only one; else -1.
    """

    start: Array
    directions: Directions
    length: float
    coordinate: int

    def request(self, t: Array, *, worth: float, fresh: bool = False) -> Request:
        """One request for the values at all abscissae t."""
        offsets = (t * self.length)[None, :]
        return Request(base=self.start, directions=self.directions, offsets=offsets, worth=worth, fresh=fresh)

    def realised(self, t: Array) -> Array:
        """The abscissae at which the model is really called: ``start + t·direction`` is rounded.

        Known exactly where one coordinate changes. With several, each is rounded on its own and the point leaves the
        line by as much as `grain`; then t itself is returned.
        """
        if self.coordinate < 0:
            return t
        origin = self.start[self.coordinate]
        width = self._width()
        return np.asarray(((origin + t * width) - origin) / width)

    def grain(self, t: Array) -> Array:
        """Rounding of the point, in units of t: nothing closer than this can be told apart."""
        if self.coordinate >= 0:
            place = np.abs(self.start[self.coordinate] + t * self._width())
            return np.asarray(np.maximum(place / abs(self._width()), t) * EPSILON)
        row = self.directions[0]
        moving = row != 0.0
        reach = np.hypot.reduce(row[moving])
        away = np.hypot.reduce(self.start[moving])
        return np.asarray((away / reach + t) * EPSILON)

    def point(self, t: float) -> Array:
        """(n,): the point at t."""
        if self.directions.ndim == 1:
            point = self.start.copy()
            point[self.coordinate] += t * self.length
            return point
        return np.asarray(self.start + t * self.directions[0])

    def _width(self) -> float:
        if self.directions.ndim == 1:
            return self.length
        return float(self.directions[0, self.coordinate])


def line_through(start: Any, direction: Any) -> Line:
    """The line from `start` along `direction`: a row ``(n,)``, or a pair (coordinate index, length)."""
    origin = frozen(start)
    if isinstance(direction, tuple):
        index, length = direction
        return Line(start=origin, directions=np.array([index]), length=float(length), coordinate=int(index))
    row = frozen(direction)[None, :]
    moving = np.flatnonzero(row[0])
    return Line(start=origin, directions=row, length=1.0, coordinate=int(moving[0]) if moving.size == 1 else -1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Samples:
    """All values known on a line.

    Attributes
    ----------
    t : ndarray, shape (k,)
        Increasing abscissae.
    values : ndarray, shape (k, m)
    status : ndarray of int8, shape (k,)
    """

    t: Array
    values: Array
    status: NDArray[np.int8]

    def joined(self, t: Array, values: Array, status: NDArray[np.int8]) -> "Samples":
        """With new samples: abscissae (k,), values (k, m), status (k,). What is known already stays."""
        abscissae = np.concatenate([self.t, t])
        old = self.values if self.t.size else np.empty((0, values.shape[1]))
        _, first = np.unique(abscissae, return_index=True)
        return Samples(
            t=abscissae[first],
            values=np.concatenate([old, values])[first],
            status=np.concatenate([self.status, status])[first],
        )

    def missing(self, t: Array) -> Array:
        """Those of t that are not known yet, increasing, each once."""
        return np.setdiff1d(t, self.t)

    def within(self, output: int, lower: float, upper: float) -> tuple[Array, Array]:
        """(k,) abscissae in [lower, upper] and (k,) finite values of one output."""
        low, high = np.searchsorted(self.t, lower), np.searchsorted(self.t, upper, side="right")
        t, f = self.t[low:high], self.values[low:high, output]
        finite = np.isfinite(f)
        return (t, f) if finite.all() else (t[finite], f[finite])

    def at(self, t: Array, output: int) -> tuple[Array, Array]:
        """Abscissae and values nearest to the t asked for (points are rounded on their way to the model)."""
        right = np.clip(np.searchsorted(self.t, t), 1, self.t.size - 1)
        nearer_left = t - self.t[right - 1] < self.t[right] - t
        index = np.where(nearer_left, right - 1, right)
        return self.t[index], self.values[index, output]


def jitter(lower: Array, upper: Array) -> Array:
    """(k,): numbers in [-1, 1) without any pattern, one for each cell [lower, upper].

    The same cell gives the same number: outputs that both halve a cell ask for one point, not for two.
    """
    bits = np.ascontiguousarray(lower, dtype=float).view(np.uint64)
    bits = bits ^ (np.ascontiguousarray(upper, dtype=float).view(np.uint64) * _ODD[0])
    for odd in _ODD:
        bits = (bits ^ (bits >> np.uint64(30))) * odd
    return np.asarray((bits >> np.uint64(11)).astype(float) / 2.0**52 - 1.0)


def no_samples() -> Samples:
    return Samples(t=np.empty(0), values=np.empty((0, 0)), status=np.empty(0, dtype=np.int8))


Quest: TypeAlias = Generator[Array, Samples, Result]
