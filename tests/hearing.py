"""Hears one witness on one model, through the real gate."""

from collections.abc import Callable
from typing import Any

import numpy as np

from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session, open_session
from gradcheck.problem.subject import subjects_of_function
from gradcheck.witnesses.automatic import automatic
from gradcheck.witnesses.complex_step import complex_step
from gradcheck.witnesses.steps import room_along
from gradcheck.witnesses.testimony import Testimony


def session_of(function: Callable[..., Any], at: Any, budget: int | None = None, **options: Any) -> Session:
    """An open session on a model."""
    return open_session(subjects_of_function(function, at, claims={}, **options)[0], budget=budget)


def complex_step_on(session: Session, directions: Any = None) -> Testimony:
    """The complex-step witness along `directions` (all coordinates by default) of the only function of a session."""
    subject = session.subject
    rows = np.arange(subject.layout.size) if directions is None else np.asarray(directions)
    room = room_along(subject.start, rows, subject.domain)
    values = session.start_values()[subject.name]
    inquiry = complex_step(
        subject.start,
        rows,
        values.size,
        scale=room.scale,
        f0=values,
        reach=np.minimum(room.below, room.above),
    )
    return conduct_one(addressed(inquiry, function=subject.name), session.gate)


def automatic_on(session: Session, source: Any, directions: Any = None) -> Testimony:
    """The witness of automatic differentiation, in the same way."""
    subject = session.subject
    rows = np.arange(subject.layout.size) if directions is None else np.asarray(directions)
    values = session.start_values()[subject.name]
    inquiry = automatic(subject.start, rows, values.size, source, domain=subject.domain)
    return conduct_one(addressed(inquiry, function=subject.name), session.gate)
