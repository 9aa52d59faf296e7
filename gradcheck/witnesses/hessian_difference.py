"""The Hessian from function values: along the axes first, then the mixed entries with steps that suited the axes."""

import numpy as np

from gradcheck.evaluation.protocol import Inquiry
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.difference_reasons import BREAK, REASONS
from gradcheck.witnesses.finite_difference import SOURCE, finite_difference
from gradcheck.witnesses.mixed_difference import mixed_differences
from gradcheck.witnesses.steps import Room, room_along
from gradcheck.witnesses.testimony import Testimony

#: Where an axis shows one of these, no derivative of a slope across it can be trusted.
ROUGH = frozenset({*REASONS.values(), BREAK})


def hessian_difference(base: Array, domain: Domain, centre: Array) -> Inquiry[Testimony]:
    """The Hessian of a function of one output.

    Parameters
    ----------
    base : ndarray, shape (n,)
    domain : Domain
        Bounds and sizes of the variables.
    centre : ndarray, shape (1,)
        Finite value at `base`.

    Returns
    -------
    Testimony
        Values and bounds (n, n), symmetric; ``reasons`` by (i, j) with i <= j. Where the function has a kink, a jump or
        a curvature break along an axis, all mixed entries of that variable have infinite bounds. ``doubtful`` is that
        of the axes, (n, 1).
    """
    return (yield from second_differences(base, room_along(base, np.arange(base.size), domain), centre))


def second_differences(
    base: Array, room: Room, centre: Array, *, wanted: BoolArray | None = None
) -> Inquiry[Testimony]:
    """As `hessian_difference`, with the room along all n coordinates; of mixed entries only those `wanted` (n, n).

    A pair is wanted if either of its two places is marked; the others stay NaN with an infinite bound.
    """
    n = base.size
    axes = np.arange(n)
    own = yield from finite_difference(base, axes, room, centre, derivative=2, wider=True)
    reasons = {(row, row): reason for (row, _), reason in own.reasons.items()}
    rough = np.array([reasons.get((i, i)) in ROUGH for i in range(n)], dtype=bool)
    first, second = np.triu_indices(n, 1)
    smooth = ~(rough[first] | rough[second])
    if wanted is not None:
        smooth &= wanted[first, second] | wanted[second, first]
    pairs = np.stack([first[smooth], second[smooth]], axis=1)
    mixed = yield from mixed_differences(base, pairs, room, own, centre)
    value, bound, step = (np.diag(part[:, 0]) for part in (own.value, own.bound, own.step))
    for matrix, missing, part in (
        (value, np.nan, mixed.value),
        (bound, np.inf, mixed.bound),
        (step, np.nan, mixed.step),
    ):
        matrix[first, second] = missing
        matrix[pairs[:, 0], pairs[:, 1]] = part[:, 0]
        matrix[second, first] = matrix[first, second]
    reasons |= {(int(pairs[row, 0]), int(pairs[row, 1])): reason for (row, _), reason in mixed.reasons.items()}
    across = rough[first] | rough[second]
    for i, j in zip(first[across].tolist(), second[across].tolist(), strict=True):
        reasons[i, j] = reasons[i, i] if rough[i] else reasons[j, j]
    return Testimony(
        value=value,
        bound=bound,
        source=SOURCE,
        step=step,
        noise=own.noise,
        doubtful=own.doubtful,
        spent=own.spent + mixed.spent,
        works=bool(np.isfinite(bound).any()),
        reasons=reasons,
    )
