"""Which variables move the function at all, and by how much beside each other."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.problem.domain import Domain, windows
from gradcheck.records.arrays import Array, BoolArray, IntArray, frozen


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FarMoves:
    """Does anything change when one variable at a time moves far?

    Attributes
    ----------
    here : ndarray of bool, shape (d, m)
        From the start point, every value far away is exactly the value at the start.
    elsewhere : ndarray of bool, shape (d, m)
        The same from another point, where all other variables have moved; True only where it was looked at.
    """

    here: BoolArray
    elsewhere: BoolArray

    def __post_init__(self) -> None:
        for name in ("here", "elsewhere"):
            object.__setattr__(self, name, frozen(getattr(self, name), dtype=bool))


def far_moves(base: Array, coordinates: IntArray, domain: Domain, centre: Array, *, seed: int = 0) -> Inquiry[FarMoves]:
    """Move each coordinate to three far places of its window and compare the values.

    A variable that changes nothing at the start point (a spring that is not loaded there) is looked at again from
    another point before it is called dead.

    Parameters
    ----------
    base : ndarray, shape (n,)
    coordinates : ndarray of int, shape (d,)
    domain : Domain
    centre : ndarray, shape (m,)
        Values at `base`.
    seed : int
        Of the other point.

    Returns
    -------
    FarMoves
        One row per coordinate asked for. A value that is not finite counts as a change.
    """
    lower, upper = windows(base, domain)
    here = yield from _unchanged(base, coordinates, lower, upper, centre)
    elsewhere = np.zeros_like(here)
    still = np.flatnonzero(here.all(axis=1))
    if still.size:
        other = lower + np.random.default_rng(seed).uniform(0.2, 0.8, base.size) * (upper - lower)
        other = np.where(domain.integer, base, other)
        reply = yield Request(base=other, directions=coordinates[:1], offsets=np.zeros((1, 1)))
        elsewhere[still] = yield from _unchanged(other, coordinates[still], lower, upper, reply.values[0, 0])
    return FarMoves(here=here, elsewhere=elsewhere)


def _unchanged(base: Array, coordinates: IntArray, lower: Array, upper: Array, centre: Array) -> Inquiry[BoolArray]:
    x = base[coordinates]
    # 0.7 is not the middle: a function that is even about it would look dead.
    ends = np.stack([lower[coordinates], upper[coordinates], x + 0.7 * (upper[coordinates] - x)], axis=1)
    reply = yield Request(base=base, directions=coordinates, offsets=ends - x[:, None])
    same: BoolArray = (reply.values == centre).all(axis=1)
    return same


def spread(gradient: Array, sizes: Array) -> float:
    """Largest over smallest |size × derivative| of the variables that move the function; 1 where fewer than two do."""
    pull = np.abs(gradient * sizes)
    pull = pull[np.isfinite(pull) & (pull > 0)]
    return float(pull.max() / pull.min()) if pull.size > 1 else 1.0
