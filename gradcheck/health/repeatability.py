"""Does the same x give the same values, at once and after other points? Every later number waits for this."""

from dataclasses import dataclass

import numpy as np

from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, frozen


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Repeatability:
    """Largest differences between evaluations at the start point, each of shape (m,).

    Attributes
    ----------
    at_once : ndarray
        Evaluated again with nothing between.
    after_others : ndarray
        Evaluated again after two other points: a warm start or a hidden state shows here.
    """

    at_once: Array
    after_others: Array

    def __post_init__(self) -> None:
        object.__setattr__(self, "at_once", frozen(self.at_once))
        object.__setattr__(self, "after_others", frozen(self.after_others))


def repeatability(base: Array, domain: Domain, centre: Array) -> Inquiry[Repeatability]:
    """Evaluate A, A, B, C, A without any cache and compare the values at A with `centre`, the first one.

    Parameters
    ----------
    base : ndarray, shape (n,)
    domain : Domain
    centre : ndarray, shape (m,)
        Values at `base` seen first.

    Returns
    -------
    Repeatability
        NaN where the second evaluation failed.
    """
    apart = _away(base, domain)
    row = np.stack([apart, apart / 3])
    # One direction with displacement 0, the others, and 0 again: the order is part of the question.
    directions = np.stack([row[0], row[0], row[1], row[0]])
    offsets = np.array([[0.0], [1.0], [1.0], [0.0]])
    reply = yield Request(base=base, directions=directions, offsets=offsets, fresh=True)
    again = reply.values[:, 0]
    return Repeatability(at_once=np.abs(again[0] - centre), after_others=np.abs(again[3] - centre))


def _away(base: Array, domain: Domain) -> Array:
    """A displacement by a tenth of each variable's size, inside the bounds; none where there is no room."""
    wanted = 0.1 * domain.scale
    up = np.minimum(wanted, domain.upper - base)
    down = np.minimum(wanted, base - domain.lower)
    return np.where(up >= down, up, -down)
