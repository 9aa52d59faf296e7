"""Do small jumps of a model explain why a claim is nearly, but not quite, the derivative of the program?

A model that iterates to a tolerance, or adapts a mesh or a step, is smooth between two changes of its inner count and
jumps a little at each. Between them its values are off what it approximates by about the size of the jumps, and its
slope is off by about as much over the size of the variable. A claim that is right for the model then differs from every
witness of the program, and differences close to the point cannot tell.
"""

from collections.abc import Sequence

import numpy as np

from gradcheck.evaluation.protocol import Inquiry
from gradcheck.evaluation.substituted import substituted
from gradcheck.health.smoothness import examine_line
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.finding import FindingCode

#: A gap of at most so many times the slope that jumps make over the size of a variable is explained by them.
EXPLAINED = 5.0
#: Evaluations for one line.
BUDGET = 200


def explained_by_jumps(
    base: Array, columns: Sequence[int], below: Array, above: Array, gap: Array
) -> Inquiry[BoolArray]:
    """For each output and variable, whether jumps are large enough to explain a gap between claim and witness.

    Parameters
    ----------
    base : ndarray, shape (n,)
    columns : sequence of int
        d variables; along each a line is examined.
    below, above : ndarray, shape (d,)
        How far the lines go to each side.
    gap : ndarray, shape (m, d)
        Size of claim minus witness; NaN for entries that are not asked about.

    Returns
    -------
    ndarray of bool, shape (m, d)
        A jump along one variable counts for all: an inner count that changes with one shifts the slopes of the others.
    """
    height = np.zeros(gap.shape)
    asked = np.flatnonzero(np.isfinite(gap).any(axis=1))
    for place, column in enumerate(columns):
        length = float(below[place] + above[place])
        if not 0 < length < np.inf:
            continue
        start = np.array(base)
        start[column] -= below[place]
        report = yield from substituted(examine_line(start, (column, length), budget=BUDGET), base, outputs=asked)
        for kind in (FindingCode.JUMP, FindingCode.STAIRCASE):
            for found in report.of_kind(kind):
                height[asked[found.output], place] += abs(found.size)
    highest = height.max(axis=1, keepdims=True)
    with np.errstate(invalid="ignore", divide="ignore"):
        explained: BoolArray = (gap <= EXPLAINED * highest / (below + above)) & (highest > 0)
    return explained
