"""An inquiry about a function of other variables, or of other outputs, answered by the function at hand.

A function F of n variables and m outputs has, at a point x, many functions inside it: ``t -> F(x + Σ t_i·v_i)`` of a
few variables, whose Jacobian is J times the vectors v; ``x -> W·F(x)`` of a few outputs, whose Jacobian is W·J.
Whatever examines a Jacobian examines products of it with vectors this way, and need not know.
"""

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.evaluation.conduct import Result
from gradcheck.evaluation.protocol import Inquiry, Request
from gradcheck.records.arrays import Array, IntArray


def substituted(
    inquiry: Inquiry[Result],
    base: Array,
    *,
    rows: Array | None = None,
    mixture: Array | None = None,
    outputs: IntArray | None = None,
) -> Inquiry[Result]:
    """`inquiry`, whose requests are translated into the variables at hand, and the replies back.

    Parameters
    ----------
    inquiry : Inquiry
        Of a function of d variables around 0 where `rows` is given, else of n variables.
    base : ndarray, shape (n,)
        The point x.
    rows : ndarray, shape (d, n), optional
        The inquiry's variable i moves x along row i.
    mixture : ndarray, shape (r, m), optional
        The inquiry's output i is row i times the outputs.
    outputs : ndarray of int, shape (r,), optional
        The inquiry's output i is this one; not together with `mixture`.

    Returns
    -------
    Result
        What the inquiry returns.
    """
    try:
        request = next(inquiry)
        while True:
            reply = yield request if rows is None else _translated(request, base, rows)
            if mixture is not None:
                reply = replace(reply, values=mixed(reply.values, mixture))
            elif outputs is not None:
                reply = replace(reply, values=reply.values[:, :, outputs])
            request = inquiry.send(reply)
    except StopIteration as end:
        result: Result = end.value
        return result


def mixed(values: NDArray[Any], mixture: Array) -> NDArray[Any]:
    """Each row of a mixture (r, m) times values (..., m): (..., r), equal for equal values to the last bit.

    A product of matrices is rounded differently from place to place; where nothing changes along a variable, the
    difference would look like steps.
    """
    with np.errstate(invalid="ignore", over="ignore"):
        return np.stack([(values * row).sum(axis=-1) for row in mixture], axis=-1)


def _translated(request: Request, base: Array, rows: Array) -> Request:
    directions = request.directions
    moved = base + request.base @ rows if request.base.any() else base
    return replace(
        request,
        base=moved,
        directions=rows[directions] if directions.ndim == 1 else directions @ rows,
    )
