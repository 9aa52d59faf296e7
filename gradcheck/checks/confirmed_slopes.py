"""A confirmed first derivative as a witness of second ones: where its differences can be believed."""

from dataclasses import dataclass, replace

import numpy as np

from gradcheck.checks.along import examined_by
from gradcheck.checks.measure import measure_of
from gradcheck.checks.vectors import random_rows
from gradcheck.claims.policy import Rules
from gradcheck.evaluation.evaluator import SLOPE
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.protocol import Request, Status
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.steps import room_along

#: First derivatives whose differences are second derivatives.
FIRST = frozenset({"gradient", "jacobian", "value_and_gradient"})
#: How far away from the point the derivative is tried before its differences are believed, in sizes of the variables.
ASIDE = 0.0137

UNCONFIRMED = "the first derivative claimed in the same call was not confirmed, so the values were differenced instead"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Slopes:
    """A confirmed first derivative that may be asked anywhere.

    Attributes
    ----------
    kind : str
        Of the claim.
    at_point : ndarray, shape (m·n,)
        Its flat values at the point.
    """

    kind: str
    at_point: Array

    @property
    def source(self) -> str:
        """What a request for its values is addressed to."""
        return SLOPE + self.kind


def believed_slopes(
    session: Session, function: str, confirmed: str | None, able: IntArray, rules: Rules
) -> tuple[Slopes | None, tuple[str, ...]]:
    """The confirmed first derivative, if there is one whose differences can be believed; else why not.

    One that is right at the point alone (a constant, a remembered one) would make every Hessian look wrong.
    """
    claims = session.subject.targets[function].claims
    if confirmed is None:
        return None, (UNCONFIRMED,) if FIRST.intersection(claims) else ()
    if not callable(claims[confirmed]) and not isinstance(claims[confirmed], str):
        return None, (f"the {confirmed} was given as an array, so its differences cannot be taken",)
    at_point = _asked(session, function, confirmed, session.subject.start)
    if at_point is None:
        return None, ()
    if not _holds_aside(session, function, confirmed, able, rules):
        why = "is right at the point, but not close to it, so its differences were not taken: does it depend on x?"
        return None, (f"the {confirmed} {why}",)
    return Slopes(kind=confirmed, at_point=at_point), ()


def _asked(session: Session, function: str, confirmed: str, point: Array) -> Array | None:
    """Its flat values at a point; None where it fails."""
    request = _request(point, function, SLOPE + confirmed)
    reply = session.gate([request])[0]
    return reply.values[0, 0] if int(reply.status[0, 0]) == Status.OK else None


def _request(point: Array, function: str, source: str) -> Request:
    nowhere = np.zeros(1, dtype=np.intp)
    return Request(base=point, directions=nowhere, offsets=np.zeros((1, 1)), source=source, function=function)


def _holds_aside(session: Session, function: str, confirmed: str, able: IntArray, rules: Rules) -> bool:
    """Whether it is the derivative of the function beside the point as well, along one direction."""
    subject = session.subject
    row = np.zeros((1, subject.layout.size))
    row[:, able] = random_rows(1, subject.domain.scale[able], rules.seed + 2)
    room = room_along(subject.start, row, subject.domain)
    up, down = (min(ASIDE, float(side[0]) / 2) for side in (room.above, room.below))
    aside = subject.start + (up if up >= down else -down) * row[0]
    slopes = _asked(session, function, confirmed, aside)
    value = session.gate([_request(aside, function, "model")])[0]
    if slopes is None or not value.finite.all():
        return False
    centre = value.values[0, 0]
    moved = replace(session, subject=replace(subject, start=aside))
    claim = slopes.reshape(centre.size, -1) @ row.T
    measure = measure_of(session, function, confirmed, rules)
    found = examined_by(moved, function, claim, centre, measure, rules, rows=row)
    return not (found.verdict == Verdict.REFUTED).any()
