"""The points of a request, made one at a time or a batch at a time: never all of them."""

import hashlib
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.evaluation.protocol import Directions, Request
from gradcheck.records.arrays import Array, BoolArray, IntArray

#: Points longer than this many bytes are known by their digest only.
_LONG = 256
#: Entries that are compared at once.
_SOME = 65_536
#: Points of a batch take about so much memory.
BATCH_BYTES = 8_000_000
#: The key of the start point itself; the key of a point that differs from it in one entry is that entry and its bytes,
#: which together are never as long as this mark and all bytes, or their digest, for a point that differs in more.
_AT_START = b""
_ELSEWHERE = b"all"
#: The same for a point on a direction of so many entries that it is known by its direction and offset.
_ALONG = b"along"
_MANY = 1 << 14


@dataclass(frozen=True, slots=True, eq=False)
class Moves:
    """The points ``base + offset · direction``.

    Coordinate directions change one entry only; the sum is rounded once, so ``base + offset`` is the point where the
    model is called. Algorithms choose offsets such that nothing is rounded, or compute the displacement realised.

    Attributes
    ----------
    base : ndarray, shape (n,)
        Of the dtype of the points, real or complex.
    directions : ndarray
        Coordinate indices (d,) or rows (d, n).
    which : ndarray of int, shape (k,)
        The direction of each point.
    offsets : ndarray, shape (k,)
    """

    base: NDArray[Any]
    directions: Directions
    which: IntArray
    offsets: NDArray[Any]

    @staticmethod
    def of(request: Request) -> "Moves":
        """All points of a request, direction by direction."""
        d, k = request.offsets.shape
        base = np.ascontiguousarray(request.base, dtype=complex if request.offsets.dtype.kind == "c" else float)
        return Moves(base, request.directions, np.arange(d).repeat(k), request.offsets.ravel())

    def __len__(self) -> int:
        return self.which.size

    def __getitem__(self, part: slice | IntArray) -> "Moves":
        return Moves(self.base, self.directions, self.which[part], self.offsets[part])

    @property
    def along_axes(self) -> bool:
        """Whether each point differs from the base in one entry only."""
        return self.directions.ndim == 1

    def entries(self) -> tuple[IntArray, NDArray[Any]]:
        """Along axes: the entry that each point changes, and its new value."""
        entries = self.directions[self.which].astype(np.intp, copy=False)
        return entries, self.base[entries] + self.offsets

    def point(self, i: int) -> NDArray[Any]:
        """One point (n,), an array of its own."""
        direction = self.directions[self.which[i]]
        if not self.along_axes:
            point = np.asarray(self.offsets[i] * direction)
            point += self.base  # in place: at a million variables, each vector counts
            return point
        point = self.base.copy()
        point[direction] += self.offsets[i]
        return point

    def is_point(self, i: int, array: NDArray[Any]) -> bool:
        """Whether `array` is still the point `i`, bit by bit, off the axes; some entries at a time, so that no second
        point is made.
        """
        direction, offset = self.directions[self.which[i]], self.offsets[i]
        for first in range(0, array.size, _SOME):
            part = slice(first, first + _SOME)
            again = np.asarray(offset * direction[part])
            again += self.base[part]
            if _differ(again, array[part]).any():
                return False
        return True

    def points(self) -> NDArray[Any]:
        """All of them (k, n); for a batch of `most_at_once` at the most."""
        if not self.along_axes:
            return np.asarray(self.base + self.offsets[:, None] * self.directions[self.which])
        points = np.tile(self.base, (len(self), 1))
        entries, values = self.entries()
        points[np.arange(len(self)), entries] = values
        return points

    @property
    def most_at_once(self) -> int:
        """How many points fit into the memory of a batch."""
        return int(max(1, BATCH_BYTES // max(self.base.nbytes, 1)))

    def keys(self, start: Array) -> list[bytes]:
        """What tells each point from every other, bit by bit; equal for equal points, however they were reached.

        Most points differ from the start point in one entry, and that is a short key; others are read whole.
        """
        start = start.astype(self.base.dtype, copy=False)
        if self.along_axes and (self.base is start or self.base.tobytes() == start.tobytes()):
            entries, values = self.entries()
            return _short_keys(entries, values, _differ(values, start[entries]))
        if self.base.size > _MANY:
            return self._keys_along(start)
        most = self.most_at_once
        return [key for at in range(0, len(self), most) for key in _long_keys(self[at : at + most].points(), start)]

    def _keys_along(self, start: Array) -> list[bytes]:
        """Keys of points with so many entries that reading each would take as long as evaluating it.

        A direction is read once for all its points; the same point on two directions counts as two.
        """
        origin = b"" if self.base is start or np.array_equal(self.base, start) else fingerprint(self.base.tobytes())
        rows = {int(row): fingerprint(np.asarray(self.directions[row]).tobytes()) for row in np.unique(self.which)}
        return [
            _AT_START if offset == 0 and not origin else _ALONG + origin + rows[row] + offset.tobytes()
            for row, offset in zip(self.which.tolist(), self.offsets, strict=True)
        ]


def same_content(content: bytearray, array: NDArray[Any]) -> bool:
    """Whether an array still consists of these bytes; nothing is copied."""
    try:
        return bool(content == array)
    except ValueError:  # it was given another layout: somebody was at work on it
        return False


def _short_keys(entries: IntArray, values: NDArray[Any], moved: BoolArray) -> list[bytes]:
    """Entry and value; the empty key where nothing has moved."""
    bits = values.view(np.int64).reshape(entries.size, -1)
    pairs = np.empty((entries.size, 1 + bits.shape[1]), np.int64)
    pairs[:, 0], pairs[:, 1:] = entries, bits
    keys: list[bytes] = pairs.view(f"V{8 * pairs.shape[1]}")[:, 0].tolist()
    if not moved.all():
        for i in np.flatnonzero(~moved):
            keys[i] = _AT_START
    return keys


def _long_keys(points: NDArray[Any], start: NDArray[Any]) -> list[bytes]:
    changed = _differ(points, start)
    first = changed.argmax(axis=1)
    keys = _short_keys(first, points[np.arange(len(points)), first], np.asarray(changed.any(axis=1)))
    for i in np.flatnonzero(changed.sum(axis=1) > 1):
        keys[i] = _ELSEWHERE + fingerprint(points[i].tobytes())
    return keys


def fingerprint(content: bytes) -> bytes:
    """The content itself, or a digest where it is long."""
    return content if len(content) <= _LONG else hashlib.blake2b(content, digest_size=20).digest()


def _differ(left: NDArray[Any], right: NDArray[Any]) -> BoolArray:
    """Entries that differ in any bit: a zero has two signs, and a model may see which."""
    if left.dtype.kind != "c":
        return np.asarray(left.view(np.int64) != right.view(np.int64))
    return np.asarray(_differ(left.real.copy(), right.real.copy()) | _differ(left.imag.copy(), right.imag.copy()))
