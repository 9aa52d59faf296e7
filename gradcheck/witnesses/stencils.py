"""The sets of nodes at which the difference witness takes values, stage by stage.

Each later stage contains the nodes of the one before, first in the list: no value is taken twice.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array
from gradcheck.witnesses.steps import NODE_GRID


@dataclass(frozen=True, slots=True, eq=False)
class Stage:
    """Nodes of one stage in units of its own half-width, which is `ratio` times the interval.

    ``shared`` nodes, the first ones, have been evaluated by the stage before.
    """

    nodes: tuple[float, ...]
    ratio: float
    shared: int


def _on_grid(values: Array) -> Array:
    return np.asarray(np.round(values / NODE_GRID) * NODE_GRID)


def _pairs(positive: Array) -> tuple[float, ...]:
    return tuple(float(sign * t) for t in positive for sign in (1, -1))


def _tuple(nodes: Array) -> tuple[float, ...]:
    return tuple(float(t) for t in nodes)


#: Positive Chebyshev abscissae of 14 points. The first three span the interval on their own.
_SEVEN = _on_grid(np.cos((2 * np.arange(1, 8) - 1) * np.pi / 28))[[0, 3, 5, 1, 2, 4, 6]]
#: Half-way between the seven, in angle, but for the two innermost.
_BETWEEN = _on_grid(np.cos(2 * np.arange(1, 5) * np.pi / 28))
#: Between the seven, once they are shrunk by `WIDE`, and the ends of the wider interval.
_OUTER = _on_grid(np.array([0.9920, 0.9080, 0.7500, 0.5500]))
LOW, WIDE = 3.0, 2.5
#: A pair close to the point: a narrow feature there is missed by all other nodes. It hardly moves the fit; the last
#: orthonormal polynomials belong to it, so that what it does not share with the others shows as left over.
_NEAR = np.array([2.0**-17])

#: Pairs of `broad`, an interval of its own that may be much wider; and the pair close to the point.
_BROAD_PAIRS = 11
_BROAD = _on_grid(np.cos((2 * np.arange(1, _BROAD_PAIRS + 1) - 1) * np.pi / (4 * _BROAD_PAIRS)))

TWO_SIDED = {
    "probe": Stage(_pairs(_SEVEN[:3]), 1.0, 0),
    "low": Stage(_pairs(np.concatenate([_SEVEN[:3] / LOW, _on_grid(np.array([1.0])), _NEAR])), LOW, 6),
    "main": Stage(_pairs(_SEVEN), 1.0, 6),
    "outward": Stage(_pairs(_SEVEN), 1.0, 0),
    "fine": Stage(_pairs(np.concatenate([_SEVEN, _BETWEEN, _NEAR])), 1.0, 14),
    "wide": Stage(_pairs(np.concatenate([_SEVEN / WIDE, _OUTER, _NEAR])), WIDE, 14),
    "broad": Stage(_pairs(np.concatenate([_BROAD, _NEAR])), 1.0, 0),
}

#: Chebyshev-Lobatto abscissae on [0, 1], closest to each other at both ends; a spanning subset first.
_SIDE_SEVEN = _on_grid((1 - np.cos(np.arange(1, 8) * np.pi / 7)) / 2)[[6, 1, 3, 5, 0, 2, 4]]
_SIDE_BETWEEN = _on_grid((1 - np.cos((np.arange(1, 8) - 0.5) * np.pi / 7)) / 2)
_SIDE_QUARTERS = _on_grid((1 - np.cos((np.arange(1, 13) - 0.5) * np.pi / 14)) / 2)

_SIDE_BROAD = _on_grid((1 - np.cos(np.arange(1, 2 * _BROAD_PAIRS + 1) * np.pi / (2 * _BROAD_PAIRS))) / 2)

#: A node close to the point here too. One alone is no pair: it is left out of the fit, which foretells its value.
ONE_SIDED = {
    "probe": Stage(_tuple(_SIDE_SEVEN[:6]), 1.0, 0),
    "low": Stage(
        _tuple(np.concatenate([_SIDE_SEVEN[:6] / LOW, _on_grid(np.array([1.0, 0.85, 0.7, 0.5])), _NEAR])), LOW, 6
    ),
    "main": Stage(_tuple(np.concatenate([_SIDE_SEVEN, _SIDE_BETWEEN])), 1.0, 6),
    "outward": Stage(_tuple(np.concatenate([_SIDE_SEVEN, _SIDE_BETWEEN])), 1.0, 0),
    "fine": Stage(_tuple(np.concatenate([_SIDE_SEVEN, _SIDE_BETWEEN, _SIDE_QUARTERS, _NEAR])), 1.0, 14),
    "broad": Stage(_tuple(_SIDE_BROAD), 1.0, 0),
}

#: Values of one direction that are kept at most.
MOST_NODES = 27


def stage_of(name: str, side: int) -> Stage:
    """The stage `name` on both sides (0) or one (+1, −1; the nodes are mirrored by the caller)."""
    return (TWO_SIDED if side == 0 else ONE_SIDED)[name]
