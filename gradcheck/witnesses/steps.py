"""How far, and which way, we may step."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Directions
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array

#: Nodes of all stencils are multiples of this part of the half-width, so that displacements need few bits and ``x + h``
#: is exact for half-widths down to about 1e-12·|x|.
NODE_GRID = 2.0**-12
#: A variable smaller than this, with nothing to tell its size, is taken for a number near zero among ordinary ones ...
TINY = 1e-4
#: ... of this size.
ORDINARY = 0.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Room:
    """How far one may step along each direction; all arrays have shape (d,), in units of the direction.

    Attributes
    ----------
    scale : ndarray
        Displacement that moves some variable by its own size.
    typical : ndarray
        Displacement that moves some variable by its own or its typical size, whichever is larger.
    widest : ndarray
        Displacement beyond which no difference is taken; `typical`, but for tiny values of unknown size.
    below, above : ndarray
        Largest displacements down and up that stay within the bounds, >= 0.
    grain : ndarray
        Displacements that are multiples of this leave x exactly representable (coordinates), or lose nothing worth
        mentioning (general directions).
    """

    scale: Array
    typical: Array
    widest: Array
    below: Array
    above: Array
    grain: Array


def room_along(base: Array, directions: Directions, domain: Domain) -> Room:
    """Room along coordinate indices (d,) or rows (d, n)."""
    own = np.where(base != 0, np.abs(base), domain.scale)
    typical = np.maximum(own, domain.scale)
    widest = np.where((typical < TINY) & ~domain.known, ORDINARY, typical)
    # Spacing at twice the size: a step may cross into the next binade.
    grain = np.spacing(np.maximum(2 * own, np.abs(base)))
    below, above = base - domain.lower, domain.upper - base
    if directions.ndim == 1:
        i = directions
        return Room(
            scale=own[i],
            typical=typical[i],
            widest=widest[i],
            below=_inside(below[i]),
            above=_inside(above[i]),
            grain=grain[i],
        )
    size = np.abs(directions)
    reach = _soonest(own, size)
    return Room(
        scale=reach,
        typical=_soonest(typical, size),
        widest=_soonest(widest, size),
        below=_inside(_soonest(np.where(directions > 0, below, above), size, still=np.inf)),
        above=_inside(_soonest(np.where(directions > 0, above, below), size, still=np.inf)),
        grain=np.maximum(reach * np.finfo(float).eps, np.finfo(float).smallest_subnormal),
    )


def _soonest(distance: Array, size: Array, still: float = 1.0) -> Array:
    """(d,): how far to go along directions of entries `size` (d, n) until the first variable has moved by `distance`.

    `still` for a direction that moves nothing.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        until = np.where(size > 0, distance / size, np.inf).min(axis=1)
    return np.where((size > 0).any(axis=1), until, still)


def _inside(distance: Array) -> Array:
    """A hair less than the distance to a bound: the sum x + h is rounded and must not land beyond it."""
    return np.maximum(0.0, distance * (1 - 4 * np.finfo(float).eps))


def least_half_width(grain: Array) -> Array:
    """The smallest half-width whose nodes are multiples of `grain`."""
    return np.asarray(grain / NODE_GRID)


def rounded_half_width(width: Array, grain: Array) -> Array:
    """`width` (d,) rounded down so that every node of a stencil is a multiple of `grain`; at least one of them."""
    unit = least_half_width(grain)
    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        counted = np.floor(width / unit)
        rounded = np.where(np.isfinite(counted), np.maximum(counted, 1.0), 1.0) * unit
    # A width of so many units is a multiple of them as it is (their number may be beyond the largest double).
    return np.asarray(np.where(counted >= 2.0**53, width, rounded))
