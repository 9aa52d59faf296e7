"""How far each variable moves where many move at once, and the directions made of such moves.

Every move is a power of two near the variable's own size, so that ``x + offset · move`` is exact for every offset that
the witnesses choose: a rounded displacement would be an error of the derivative that no bound knows of. Variables
close to a bound go on directions of their own, inwards; two-sided steps of the others are not cut short by them.
"""

from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np

from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.witnesses.steps import Room, room_along

#: A variable may move to both sides if each leaves at least this share of its own size; to one side likewise.
LEAST_SHARE = 2.0**-5
#: Displacements that are multiples of this are exact along moves that are powers of two, also into the next binade.
GRAIN = 2.0**-51
#: Random sizes of moves are so many parts of a power of two (four bits): they tell two entries with the same wrong
#: factor apart, which would cancel in half of all directions if all moves were of one size.
PARTS, PART_BITS = 16, 4
_GOLDEN = 0.6180339887498949


class Way(IntEnum):
    """Where a variable can go."""

    STILL = -1  # whole numbers, or no room
    BOTH = 0
    INWARD = 1


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Moves:
    """How far each of n variables moves, and which way.

    Attributes
    ----------
    size : ndarray, shape (n,)
        Powers of two with the sign of the way inwards; 0 for variables that stand still.
    way : ndarray of int, shape (n,)
        A `Way` each.
    typical : ndarray, shape (n,)
        Typical size of each variable, in units of its move.
    """

    size: Array
    way: IntArray
    typical: Array

    @staticmethod
    def within(base: Array, domain: Domain) -> "Moves":
        """The moves that the domain leaves room for."""
        own = np.where(base != 0, np.abs(base), domain.scale)
        with np.errstate(invalid="ignore"):
            below, above = base - domain.lower, domain.upper - base
        narrow, roomy = np.minimum(below, above), np.maximum(below, above)
        both = narrow >= LEAST_SHARE * own
        inward = ~both & (roomy >= LEAST_SHARE * own)
        reach = np.where(both, narrow, roomy)
        size = _power_of_two(np.minimum(own, reach))
        sign = np.where(inward & (below > above), -1.0, 1.0)
        way = np.where(both, Way.BOTH, np.where(inward, Way.INWARD, Way.STILL))
        way[domain.integer] = Way.STILL
        size = np.where(way == Way.STILL, 0.0, sign * size)
        with np.errstate(divide="ignore", invalid="ignore"):
            typical = np.where(size != 0, domain.scale / np.abs(size), 1.0)
        return Moves(size=size, way=way.astype(np.intp), typical=typical)

    def along(self, way: Way) -> BoolArray:
        """The variables (n,) that can go this way."""
        chosen: BoolArray = self.way == way
        return chosen

    def random(self, which: BoolArray, seed: int, weight: Array | None = None) -> Array:
        """One direction (n,) that moves the variables `which`, each by ½ to 1 of its move, to a random side.

        Inward ones stay inward. `weight` (n,) are powers of two that make some moves smaller.
        """
        bits = _hashed(np.arange(self.size.size, dtype=np.uint64), seed)
        share = (PARTS // 2 + (bits >> np.uint64(8)) % np.uint64(PARTS // 2 + 1)) / PARTS
        sign = np.where((bits & np.uint64(1)).astype(bool) & (self.way == Way.BOTH), -1.0, 1.0)
        row = np.where(which, self.size * share * sign, 0.0)
        return row if weight is None else row * weight

    def groups(self, colour: IntArray, chosen: IntArray) -> Array:
        """Directions (d, n): the moves of the variables in each of the chosen groups."""
        return np.where(colour == chosen[:, None], self.size, 0.0)


def position_weights(size: int) -> Array:
    """Weights (n,) in [½, 1] that tell every position: neighbours are far apart, and no two are closer than 0.19/n.

    Multiples of the golden ratio are spread evenly (Weyl 1916; the three-gap theorem of Sós 1958).
    """
    return np.asarray(0.5 + 0.5 * ((np.arange(1, size + 1) * _GOLDEN) % 1.0))


def room_of(base: Array, rows: Array, domain: Domain, way: Way, *, bits: int = 0) -> Room:
    """Room along directions (d, n) of moves that are powers of two, or have so many more bits."""
    room = room_along(base, rows, domain)
    if way == Way.INWARD:
        room = replace(room, below=np.zeros(len(rows)))
    return replace(room, grain=np.full(len(rows), GRAIN * 2.0**bits))


def shuffled(size: int, seed: int) -> IntArray:
    """A random order of n positions."""
    return np.asarray(np.argsort(_hashed(np.arange(size, dtype=np.uint64), seed), kind="stable"))


def halves(size: int, seed: int, parts: int) -> IntArray:
    """A random division of n positions into `parts`."""
    bits = _hashed(np.arange(size, dtype=np.uint64), seed)
    return np.asarray((bits >> np.uint64(16)) % np.uint64(parts)).astype(np.intp)


def _power_of_two(size: Array) -> Array:
    """The largest powers of two that do not exceed these sizes; 0 for 0."""
    _, exponent = np.frexp(size)
    return np.where(size > 0, np.ldexp(1.0, exponent - 1), 0.0)


def _hashed(
    position: np.ndarray[tuple[int, ...], np.dtype[np.uint64]], seed: int
) -> np.ndarray[tuple[int, ...], np.dtype[np.uint64]]:
    """A well mixed number for each position (splitmix64; Steele, Lea & Flood 2014): the same whatever is left out."""
    with np.errstate(over="ignore"):
        mixed = (position + np.uint64((seed * 0x9E3779B97F4A7C15 + 0x632BE59BD9B4E019) % 2**64)) * np.uint64(
            0x9E3779B97F4A7C15
        )
        mixed = (mixed ^ (mixed >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        mixed = (mixed ^ (mixed >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
        return mixed ^ (mixed >> np.uint64(31))
