"""Which variables move the function at all, and by how much beside each other."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray, frozen

#: Half-width of the window of a variable without bounds, in units of its size.
WINDOW = 0.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FarMoves:
    """Does anything change when one variable at a time moves far?

    Attributes
    ----------
    unchanged : ndarray of bool, shape (n, m)
        Every value far away is exactly the value at the point.
    """

    unchanged: BoolArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "unchanged", frozen(self.unchanged, dtype=bool))


def windows(base: Array, domain: Domain) -> tuple[Array, Array]:
    """Lower and upper ends, each (n,), of the stretch of each variable that is looked at.

    The bounds where there are any; else half the variable's size to each side.
    """
    lower = np.where(np.isfinite(domain.lower), domain.lower, base - WINDOW * domain.scale)
    upper = np.where(np.isfinite(domain.upper), domain.upper, base + WINDOW * domain.scale)
    return np.minimum(lower, base), np.maximum(upper, base)


def far_moves(
    base: Array, coordinates: np.ndarray[tuple[int, ...], np.dtype[np.intp]], domain: Domain, centre: Array
) -> Inquiry[FarMoves]:
    """Move each coordinate to three far places of its window and compare with `centre`.

    Parameters
    ----------
    base : ndarray, shape (n,)
    coordinates : ndarray of int, shape (d,)
    domain : Domain
    centre : ndarray, shape (m,)

    Returns
    -------
    FarMoves
        One row per coordinate asked for. A value that is not finite counts as a change.
    """
    lower, upper = windows(base, domain)
    x = base[coordinates]
    # 0.7 is not the middle: a function that is even about it would look dead.
    ends = np.stack([lower[coordinates], upper[coordinates], x + 0.7 * (upper[coordinates] - x)], axis=1)
    reply = yield Request(base=base, directions=coordinates, offsets=ends - x[:, None])
    return FarMoves(unchanged=(reply.values == centre).all(axis=1))


def spread(gradient: Array, sizes: Array) -> float:
    """Largest over smallest |size × derivative| of the variables that move the function; 1 where fewer than two do."""
    pull = np.abs(gradient * sizes)
    pull = pull[np.isfinite(pull) & (pull > 0)]
    return float(pull.max() / pull.min()) if pull.size > 1 else 1.0
