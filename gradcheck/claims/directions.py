"""Random scaled directions: along one of them a single derivative checks many entries of a claim at once.

Every entry is moved such that it contributes about as much as every other: by S/|claim|, at most by its own size. An
entry that is so small that its own size is the limit contributes less, and is covered less well; that is said. Signs
and sizes (between a half and one, so that equal errors do not cancel) come from a hash of the index, so that any part
of a direction can be made again without keeping it, a million entries in some milliseconds.

Sources: signs and magnitudes at random are common practice; the hash is SplitMix64 (Steele, Lea & Flood 2014).
"""

import math
from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from gradcheck.claims.rule import ALLOWANCE, ZERO_ALLOWANCE, ZERO_CLAIM
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray

#: Entries hashed at a time: temporary arrays stay small beside a vector of a million.
_CHUNK = 1 << 16
_GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_MIX_1, _MIX_2 = np.uint64(0xBF58476D1CE4E5B9), np.uint64(0x94D049BB133111EB)
#: Share of the entries that are allowed to be so small that they are covered less well.
SMALLEST_SHARE = 0.01
#: Entries with less room to a bound than this share of their size are moved away from it, in a direction of their own.
NEAR_A_BOUND = 0.3
#: A direction is off by independent errors of its entries: so many standard deviations of their sum are allowed.
SPREAD = 4.0
#: Least magnitude of a random number, which decides what is surely seen.
LEAST = 0.5


class Group(IntEnum):
    """Entries that share their directions."""

    LEFT_OUT = 0  # whole numbers, variables without room, claims that are no number
    SCALED = 1  # moved as far as their claim allows
    ZERO = 2  # claimed to be as good as zero: moved by their own size
    INWARD = 3  # close to a bound: moved away from it


#: The groups that are looked at, in this order.
GROUPS = (Group.SCALED, Group.ZERO, Group.INWARD)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Moves:
    """How far each entry is moved, and with which others.

    Attributes
    ----------
    reach : ndarray, shape (n,)
        Size of the move before its random factor; negative for entries that are moved down, away from a bound above.
    group : ndarray of int8, shape (n,)
        A `Group` each.
    typical : ndarray, shape (n,)
        τ.
    level : float
        S: what an entry contributes, unless its own size is the limit.
    """

    reach: Array
    group: NDArray[np.int8]
    typical: Array
    level: float

    def count(self, group: Group) -> int:
        return int(np.count_nonzero(self.group == group))

    def limited(self, claim: Array) -> BoolArray:
        """Entries whose own size is the limit, so that they contribute less than S."""
        scaled = self.group == Group.SCALED
        scaled &= np.abs(claim) * np.abs(self.reach) < (1 - 1e-9) * self.level
        return np.asarray(scaled)

    def row(self, group: Group, seed: int, start: int, stop: int, *, graded: bool = False) -> Array:
        """A direction (n,) that moves the entries of one group from `start` to `stop` only.

        Where `graded`, the moves grow evenly with the place, from once to twice what they are otherwise: a single
        wrong entry then shows its place by the ratio.
        """
        row = np.zeros(self.reach.size)
        for first in range(start, stop, _CHUNK):
            part = slice(first, min(first + _CHUNK, stop))
            factors = random_factors(seed, part.start, part.stop)
            if graded:
                factors *= 1.0 + (np.arange(part.start, part.stop) - start) / (stop - start)
            row[part] = np.where(self.group[part] == group, factors * self.reach[part], 0.0)
        # Away from a bound, whatever the random sign.
        return np.copysign(row, self.reach) if group is Group.INWARD else row


def random_factors(seed: int, start: int, stop: int) -> Array:
    """Random factors of the entries from `start` to `stop`: sizes from a half to one, signs at random."""
    with np.errstate(over="ignore"):
        mixed = (np.arange(start, stop, dtype=np.uint64) + np.uint64(1)) * _GOLDEN
        mixed ^= np.uint64(seed * 0x2545F4914F6CDD1D & 0xFFFFFFFFFFFFFFFF)
        mixed = (mixed ^ (mixed >> np.uint64(30))) * _MIX_1
        mixed = (mixed ^ (mixed >> np.uint64(27))) * _MIX_2
        mixed ^= mixed >> np.uint64(31)
    sizes = LEAST + (1 - LEAST) * (mixed >> np.uint64(12)) / 2.0**52
    return np.where(mixed & np.uint64(1), sizes, -sizes)


def moves_of(base: Array, claim: Array, domain: Domain, rounding: float) -> Moves:
    """How far to move each entry.

    Parameters
    ----------
    base : ndarray, shape (n,)
    claim : ndarray, shape (n,)
    domain : Domain
    rounding : float
        ε: rounding floor of the function.

    Returns
    -------
    Moves
        With S such that only few of the entries are limited by their own size.
    """
    below, above = base - domain.lower, domain.upper - base
    # Not up to a bound: the last digit of x + h is rounded.
    reach = np.minimum(domain.scale, 0.9 * np.maximum(below, above))
    group = np.full(base.size, Group.SCALED, dtype=np.int8)
    group[np.abs(claim) * domain.scale <= ZERO_CLAIM * rounding] = Group.ZERO
    group[np.minimum(below, above) < NEAR_A_BOUND * domain.scale] = Group.INWARD
    group[domain.integer | ~np.isfinite(claim) | ~(reach > 0)] = Group.LEFT_OUT
    np.copysign(reach, np.where(above >= below, 1.0, -1.0), out=reach, where=group == Group.INWARD)
    moves = Moves(reach=reach, group=group, typical=domain.scale, level=np.inf)
    return with_level(moves, claim, _level(claim, moves))


def _level(claim: Array, moves: Moves) -> float:
    """S that leaves few entries limited by their own size; infinite where none is claimed to be other than zero."""
    counted = (moves.group == Group.SCALED) | (moves.group == Group.INWARD) & (claim != 0)
    if not counted.any():
        return np.inf
    sizes = np.abs(claim[counted] * moves.reach[counted])
    place = int(SMALLEST_SHARE * sizes.size)
    sizes.partition(place)
    return float(sizes[place])


def with_level(moves: Moves, claim: Array, level: float) -> Moves:
    """The same with a larger S: it is seen better through rounding, and leaves more entries limited by their size."""
    if not np.isfinite(level):
        return moves
    reach = moves.reach.copy()
    scaled = moves.group == Group.SCALED
    reach[scaled] = moves.typical[scaled]
    scaled |= moves.group == Group.INWARD
    with np.errstate(divide="ignore"):
        np.copysign(np.minimum(np.abs(reach), level / np.abs(claim)), reach, out=reach, where=scaled)
    return replace(moves, reach=reach, level=level)


@dataclass(frozen=True, slots=True, kw_only=True)
class Allowed:
    """What the derivative along a direction may be off a right claim: by what was asked for, and by rounding."""

    plain: float
    rounding: float

    @property
    def whole(self) -> float:
        return self.plain + self.rounding


def allowed_along(
    row: Array, claim: Array, typical: Array, *, rel_tol: float, abs_tol: float, rounding: float
) -> Allowed:
    """Tolerance of a direction: errors of its entries are independent, so their squares add up.

    The plain part and that of rounding are kept apart; their sum is never smaller than the root of all squares.
    """
    plain = share = 0.0
    for first in range(0, row.size, _CHUNK):
        part = slice(first, first + _CHUNK)
        moved, size = np.abs(row[part]), np.abs(np.nan_to_num(claim[part]))
        floor = rounding / typical[part]
        allowance = np.where(size <= ZERO_CLAIM * floor, ZERO_ALLOWANCE, ALLOWANCE) * floor
        plain = math.hypot(plain, root_of_squares(moved * (abs_tol + rel_tol * size)))
        share = math.hypot(share, root_of_squares(moved * allowance))
    return Allowed(plain=SPREAD * plain, rounding=SPREAD * share)


def root_of_squares(values: Array) -> float:
    """√Σv² of those that are numbers, also where the squares are too large or too small for floating point."""
    sizes = np.abs(values)
    largest = float(np.fmax.reduce(sizes, initial=0.0))
    if largest == 0 or not np.isfinite(largest):
        return largest
    # By a power of two, which rounds nothing.
    scale = 2.0 ** max(math.frexp(largest)[1] - 1, -1022)
    return scale * math.sqrt(float(np.nansum((sizes / scale) ** 2)))
