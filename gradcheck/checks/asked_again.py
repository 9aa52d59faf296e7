"""The user's claim asked once more: at the end of a check, and around the point where no story explains it."""

import math

import numpy as np

from gradcheck.checks.claimed import in_full
from gradcheck.checks.measure import Measure
from gradcheck.claims.closedness import derivative_of_something
from gradcheck.claims.desk import Examined
from gradcheck.claims.entries import entry_name, floor_of
from gradcheck.claims.mistakes.naming import Asking
from gradcheck.claims.repeated_answers import Repeated, compared
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.protocol import Request, Status
from gradcheck.records.arrays import Array, IntArray


def second_answer(session: Session, function: str, kind: str) -> Array | None:
    """What a claim answers when it is called again at the start point; None if it is no callable, or raises."""
    subject = session.subject
    if not callable(subject.targets[function].claims[kind]):
        return None
    request = Request(
        base=subject.start,
        directions=np.zeros(1, dtype=np.intp),
        offsets=np.zeros((1, 1)),
        source=f"claim:{kind}",
        function=function,
        fresh=True,
    )
    reply = session.gate([request])[0]
    if int(reply.status[0, 0]) not in (Status.OK, Status.NONFINITE):
        return None
    return in_full(reply, math.prod(session.shape_of(function)), subject.layout.size)


def answered_again(
    session: Session,
    function: str,
    kind: str,
    examined: Examined,
    columns: IntArray,
    measure: Measure,
    second: Array | None,
) -> Repeated:
    """The entries once the claim has answered again, the model having been evaluated elsewhere in between."""
    subject, m = session.subject, examined.claim.shape[0]
    if second is None:
        return Repeated(examined=examined, changed=np.zeros(examined.claim.shape, bool))

    def third() -> Array | None:
        answer = second_answer(session, function, kind)
        return None if answer is None else answer[:, columns]

    return compared(
        examined,
        second[:, columns],
        third,
        measure.rel_tol,
        floor_of(subject, examined, columns, measure.abs_tol),
        lambda i, j: entry_name(subject, function, m, i, int(columns[j])),
    )


def asking(session: Session, function: str, kind: str, columns: IntArray) -> Asking | None:
    """How to ask whether a part of the claim is the derivative of some function; None where that cannot be asked."""
    subject = session.subject
    if not callable(subject.targets[function].claims[kind]):
        return None

    def ask(row: int, part: IntArray) -> bool | None:
        inquiry = derivative_of_something(
            subject.start, columns[part], row, subject.domain.scale, subject.domain.lower, subject.domain.upper, kind
        )
        return conduct_one(addressed(inquiry, function=function), session.gate)

    return ask
