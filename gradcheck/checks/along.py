"""Derivatives of a source along coordinates or along rows, examined: the model's own, or a claim's as a function."""

from dataclasses import replace

import numpy as np

from gradcheck.checks.measure import Measure
from gradcheck.claims.desk import Examined
from gradcheck.claims.examination import examine
from gradcheck.claims.policy import Rules
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.evaluation.substituted import substituted
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, IntArray
from gradcheck.witnesses.steps import Room, room_along


def examined_by(
    session: Session,
    function: str,
    claim: Array,
    centre: Array,
    measure: Measure,
    rules: Rules,
    *,
    columns: IntArray | None = None,
    rows: Array | None = None,
    mixture: Array | None = None,
    outputs: IntArray | None = None,
    magnitude: Array | None = None,
    source: str = "model",
    witnesses: tuple[str, ...] | None = None,
) -> Examined:
    """Examine derivatives of mixtures of the outputs of a source, along coordinates or along rows.

    Parameters
    ----------
    claim : ndarray, shape (r, d)
    centre : ndarray, shape (r,)
        Values at the point.
    columns, rows : ndarray, shape (d,) or (d, n)
        One of the two.
    mixture, outputs : ndarray, shape (r, m) or (r,), optional
        As in `substituted`.
    magnitude : ndarray, shape (r,), optional
        Size of the terms that the outputs are sums of.
    source : str
        Whose outputs: the model's, or those of a claim as a function of its own.
    """
    subject = session.subject
    if rows is None:
        assert columns is not None
        base, directions, room = subject.start, columns, room_along(subject.start, columns, subject.domain)
    else:
        base, directions, room = np.zeros(len(rows)), np.arange(len(rows)), shared_room(subject, rows)
    inquiry = examine(
        base,
        directions,
        claim,
        room,
        centre,
        room.typical if rows is not None else subject.domain.scale[directions],
        rel_tol=measure.rel_tol,
        abs_tol=measure.abs_tol,
        unit_roundoff=measure.unit_roundoff,
        witnesses=rules.witnesses if witnesses is None else witnesses,
        magnitude=magnitude,
    )
    inquiry = substituted(inquiry, subject.start, rows=rows, mixture=mixture, outputs=outputs)
    return conduct_one(addressed(inquiry, function=function, source=source), session.gate)


def shared_room(subject: Subject, rows: Array) -> Room:
    """Room along rows that may be gone along at the same time; the bounds are a box, and half of two ways inside it add
    up to one inside.
    """
    room = room_along(subject.start, rows, subject.domain)
    return replace(room, below=room.below / len(rows), above=room.above / len(rows))


def places(rows: IntArray, columns: IntArray) -> IntArray:
    """(a·b, 2): row and column of each entry, row by row."""
    return np.stack([np.repeat(rows, columns.size), np.tile(columns, rows.size)], axis=1)
