"""How far, and which way, we may step."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Directions
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array

#: Nodes of all stencils are multiples of this part of the half-width, so that displacements need few bits and ``x + h``
#: is exact for half-widths down to about 1e-12·|x|.
NODE_GRID = 2.0**-12


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Room:
    """How far one may step along each direction; all arrays have shape (d,), in units of the direction.

    Attributes
    ----------
    scale : ndarray
        Displacement that moves some variable by its own size.
    widest : ndarray
        Displacement beyond which no difference is taken: the largest of the variable's own size, its typical size.
    below, above : ndarray
        Largest displacements down and up that stay within the bounds, >= 0.
    grain : ndarray
        Displacements that are multiples of this leave x exactly representable (coordinates), or lose nothing worth
        mentioning (general directions).
    """

    scale: Array
    widest: Array
    below: Array
    above: Array
    grain: Array


def room_along(base: Array, directions: Directions, domain: Domain) -> Room:
    """Room along coordinate indices (d,) or rows (d, n)."""
    own = np.where(base != 0, np.abs(base), domain.scale)
    typical = np.maximum(own, domain.scale)
    # Spacing at twice the size: a step may cross into the next binade.
    grain = np.spacing(np.maximum(2 * own, np.abs(base)))
    below, above = base - domain.lower, domain.upper - base
    if directions.ndim == 1:
        i = directions
        return Room(scale=own[i], widest=typical[i], below=_inside(below[i]), above=_inside(above[i]), grain=grain[i])
    with np.errstate(divide="ignore", invalid="ignore"):
        size = np.abs(directions)
        moves = size > 0
        reach = np.where(moves, own / size, np.inf).min(axis=1)
        widest = np.where(moves, typical / size, np.inf).min(axis=1)
        up = np.where(directions > 0, above / size, np.where(directions < 0, below / size, np.inf)).min(axis=1)
        down = np.where(directions > 0, below / size, np.where(directions < 0, above / size, np.inf)).min(axis=1)
    still = ~moves.any(axis=1)
    reach[still], widest[still] = 1.0, 1.0
    return Room(scale=reach, widest=widest, below=_inside(down), above=_inside(up), grain=reach * np.finfo(float).eps)


def _inside(distance: Array) -> Array:
    """A hair less than the distance to a bound: the sum x + h is rounded and must not land beyond it."""
    return np.maximum(0.0, distance * (1 - 4 * np.finfo(float).eps))


def rounded_half_width(width: Array, grain: Array) -> Array:
    """`width` (d,) rounded down so that every node of a stencil is a multiple of `grain`; at least one of them."""
    unit = grain / NODE_GRID
    return np.maximum(np.floor(width / unit), 1.0) * unit
