"""The verb `estimate`: the best derivative from function values, value ± bound."""

import time
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session, open_session
from gradcheck.evaluation.protocol import Directions
from gradcheck.problem.keywords import keywords_explained
from gradcheck.problem.layout import Points, real_numbers
from gradcheck.problem.subject import Subject, subjects_of_function
from gradcheck.records.arrays import Array
from gradcheck.records.estimate import Estimate
from gradcheck.report.estimate_text import estimate_text
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.hessian_difference import hessian_difference
from gradcheck.witnesses.noise_of_outputs import noise_beside
from gradcheck.witnesses.steps import room_along
from gradcheck.witnesses.testimony import Testimony
from gradcheck.wording import count


@keywords_explained
def estimate(
    function: Any,
    at: Any,
    *,
    direction: Any = None,
    order: int = 1,
    output: Any = None,
    wrt: Any = None,
    bounds: Any = None,
    names: Any = None,
    typical: Any = None,
    batched: bool = False,
    budget: int | None = None,
    time_limit: float | str | None = None,
) -> Estimate:
    """The best derivative that function values give, with an error bound.

    Parameters
    ----------
    function : callable
        The model: takes what `at` holds, returns a number or an array.
    at : float, list, array or nesting
        The point.
    direction : array, optional
        Derivative along this direction (same number of entries as the point) instead of all variables.
    order : 1 or 2
        First derivatives, or second derivatives: the Hessian of a model that returns one number (about 16 evaluations
        an entry, fewer where it is zero or the model quadratic), or along a direction those of every output.
    output : callable, optional
        Picks what is differentiated from what the model returns.
    wrt : str or list of str, optional
        Which of several arguments (`gradcheck.args`) to differentiate with respect to.
    bounds : list of (lower, upper) pairs or tuple (lower, upper), optional
        The model is never called outside.
    names : list of str, optional
    typical : float or array, optional
        Typical size of the variables; used where a value is zero or much smaller than what matters.
    batched : bool
        Whether the model takes many points at once; as in `gradcheck.check`.
    budget : int, optional
        Largest number of evaluations.
    time_limit : float or str, optional
        Seconds, or text such as ``"10min"``; looked at between the calls of the model, a call is never broken off.

    Returns
    -------
    Estimate
        ``value`` has the shape of the input for a model that returns a number, ``(m, n)`` for a vector model, ``(n,
        n)`` for order 2, ``()`` or ``(m,)`` along a direction. The bound is infinite where nothing can be said (jump,
        plateau, budget spent; for order 2 also a kink), with a reason. At a kink it covers the slopes of both sides,
        and for order 2 at a curvature break the second derivatives of both.

    Raises
    ------
    UsageError
        If the call cannot be carried out as it stands.
    ModelFailure
        If the model raises or is not finite at the point.

    Examples
    --------
    >>> import gradcheck, math
    >>> answer = gradcheck.estimate(math.exp, at=0.0)
    >>> bool(abs(answer.value - 1.0) <= answer.bound)
    True
    """
    began = time.perf_counter()
    if isinstance(at, Points):
        raise UsageError("estimate takes one point; call it once for each of gradcheck.points(...)")
    if isinstance(order, bool | np.bool_) or order not in (1, 2):
        raise UsageError(f"order is {order!r}; first (1) and second (2) derivatives are available")
    subject = subjects_of_function(
        function,
        at,
        claims={},
        wrt=wrt,
        output=output,
        bounds=bounds,
        names=names,
        typical=typical,
        batched=batched,
    )[0]
    order = int(order)
    session = open_session(subject, budget=budget, time_limit=time_limit)
    centre = next(iter(session.start_values().values()))
    if order == 2 and direction is None:
        return _finished(_hessian(session, centre), session, began)
    directions = _directions(subject, direction)
    testimony = differences_along(session, directions, centre, derivative=order)
    heard = _noise(session, directions, centre, testimony)
    fields = _shaped(testimony, subject, session, direction is not None) | heard
    return _finished({**fields, "order": order}, session, began)


def differences_along(session: Session, directions: Directions, centre: Array, *, derivative: int = 1) -> Testimony:
    """Testimony of the difference witness about the only function of the session's subject."""
    subject = session.subject
    room = room_along(subject.start, directions, subject.domain)
    inquiry = finite_difference(subject.start, directions, room, centre, derivative=derivative, wider=derivative == 2)
    return conduct_one(addressed(inquiry, function=subject.name), session.gate)


def _noise(session: Session, directions: Directions, centre: Array, testimony: Testimony) -> dict[str, Any]:
    """Level and kind of the noise; costs evaluations only where the differences met more than rounding."""
    subject = session.subject
    room = room_along(subject.start, directions, subject.domain)
    inquiry = noise_beside(subject.start, directions, room, centre, testimony)
    heard = conduct_one(addressed(inquiry, function=subject.name), session.gate)
    return {"noise": heard.level, "noise_kind": heard.kind}


def _directions(subject: Subject, direction: Any) -> Directions:
    if direction is None:
        return np.arange(subject.layout.size)
    if subject.layout.single is None:
        row = subject.layout.flatten(direction, "direction")
    else:
        row = np.ravel(real_numbers(direction, "direction"))
    if row.size != subject.layout.size:
        raise UsageError(
            f"direction has {count(row.size, 'entry', 'entries')} but there are {subject.layout.size} variables"
        )
    if not np.isfinite(row).all() or not row.any():
        raise UsageError(f"direction is {direction!r:.80}; it must be finite and not all zero")
    return row[None, :]


def _shaped(testimony: Testimony, subject: Subject, session: Session, along: bool) -> dict[str, Any]:
    """Fields of the record with the derivative's proper shape: (d, m) becomes output shape + input shape."""
    output_shape = session.shape_of(subject.name)
    shape = output_shape if along else (*output_shape, *subject.layout.shape)
    m = testimony.value.shape[1]

    def name(row: int, output: int) -> str:
        variable = "direction" if along else subject.layout.name(row)
        return variable if m == 1 else f"output {output}, {variable}"

    return {
        **{field: getattr(testimony, field).T.reshape(shape) for field in ("value", "bound", "step")},
        "source": testimony.source,
        "reasons": {name(row, output): reason for (row, output), reason in testimony.reasons.items()},
        "names": ("direction",) if along else subject.names if subject.layout.size <= 1000 else (),
    }


def _hessian(session: Session, centre: Array) -> dict[str, Any]:
    """Fields of the record of full second derivatives: input shape + input shape."""
    subject = session.subject
    if centre.size != 1:
        raise UsageError(
            f"second derivatives need a model that returns one number; this one returns {centre.size}: "
            "pick one with output=..., or give a direction"
        )
    inquiry = hessian_difference(subject.start, subject.domain, centre)
    testimony = conduct_one(addressed(inquiry, function=subject.name), session.gate)
    heard = _noise(session, np.arange(subject.layout.size), centre, testimony)
    shape = (*subject.layout.shape, *subject.layout.shape)

    def name(i: int, j: int) -> str:
        single = subject.layout.size == 1
        return subject.layout.name(0) if single else f"{subject.layout.name(i)}, {subject.layout.name(j)}"

    return {
        **{field: getattr(testimony, field).reshape(shape) for field in ("value", "bound", "step")},
        **heard,
        "source": testimony.source,
        "reasons": {name(*place): reason for place, reason in testimony.reasons.items()},
        "names": subject.names if subject.layout.size <= 1000 else (),
        "order": 2,
    }


def _finished(fields: dict[str, Any], session: Session, began: float) -> Estimate:
    return Estimate(
        **fields,
        evaluations=session.ledger.evaluations,
        notices=tuple(session.ledger.notices),
        seconds=time.perf_counter() - began,
        renderer=estimate_text,
    )
