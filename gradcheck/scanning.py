"""The verb `scan`: how the derivative error depends on the step size."""

from dataclasses import replace
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import open_session
from gradcheck.evaluation.protocol import Directions
from gradcheck.health.step_curve import step_curve
from gradcheck.problem.keywords import keywords_explained
from gradcheck.problem.layout import Points, real_numbers
from gradcheck.problem.problem import SPEC_ATTRIBUTE, ModelSpec, Problem
from gradcheck.problem.sample_points import whole_number
from gradcheck.problem.subject import Subject, subject_of_problem, subjects_of_function
from gradcheck.records.estimate import Scan
from gradcheck.report.plots import scan_svg
from gradcheck.report.scan_text import scan_text
from gradcheck.witnesses.noise import noise
from gradcheck.witnesses.steps import room_along

#: Options of a described model that a scan understands.
_OPTIONS = ("wrt", "output", "bounds", "names", "typical", "batched")


@keywords_explained
def scan(
    function: Any,
    at: Any = None,
    *,
    along: Any = 0,
    wrt: Any = None,
    output: Any = None,
    bounds: Any = None,
    names: Any = None,
    typical: Any = None,
    batched: bool = False,
    budget: int | None = None,
    time_limit: float | str | None = None,
    seed: int = 0,
) -> Scan:
    """The step-size curve of a central difference: errors, best step, noise, observed order.

    Parameters
    ----------
    function : callable, decorated model or Problem
        A model that returns one number (pick one of several outputs with `output`); of a Problem, the objective.
    at : float, list, array or nesting
        The point; a decorated model and a Problem bring their own.
    along : str, int or array
        A variable by name or position, or a direction with one entry a variable.
    wrt, output, bounds, names, typical, batched
        As in `gradcheck.check`.
    budget : int, optional
        Largest number of evaluations; about 170 are usual.
    time_limit : float or str, optional
    seed : int
        Reserved; a scan is deterministic.

    Returns
    -------
    Scan
        Its best step is NaN where no step approximates a derivative (at a kink or jump, on a plateau), and a notice
        says why. ``to_svg()`` draws it.

    Raises
    ------
    UsageError
        If there is no such variable, or the model returns several numbers.
    ModelFailure
        If the model cannot be evaluated at the point.

    Examples
    --------
    >>> import gradcheck, math
    >>> curve = gradcheck.scan(math.exp, at=1.0)
    >>> bool(1e-7 < curve.best_step < 1e-3), round(curve.order)
    (True, 2)
    >>> round(curve.truncation.slope), round(curve.roundoff.slope)
    (2, -1)
    """
    whole_number(seed, "seed")
    given = {"wrt": wrt, "output": output, "bounds": bounds, "names": names, "typical": typical}
    given |= {"batched": batched} if batched else {}
    subject = _subject(function, at, given)
    session = open_session(subject, budget=budget, time_limit=time_limit)
    name = next(iter(subject.targets))
    centre = session.start_values()[name]
    if centre.size != 1:
        raise UsageError(
            f"{name} returns {centre.size} numbers; a scan looks at one: pick it with output=lambda r: r[0], or "
            "scan a function that returns that one alone"
        )
    directions, label = _direction(subject, along)
    room = room_along(subject.start, directions, subject.domain)
    if max(room.below[0], room.above[0]) <= 0:
        raise UsageError(f"the bounds leave no room for a step along {label}")
    heard = conduct_one(addressed(noise(subject.start, directions, room, centre), function=name), session.gate)
    level = float(heard.level[0, 0])
    inquiry = step_curve(subject.start, directions, room, centre, level)
    curve = conduct_one(addressed(inquiry, function=name), session.gate)
    record = Scan(
        steps=curve.steps,
        values=curve.values,
        errors=curve.errors,
        best_step=float(curve.steps[curve.best]) if curve.best >= 0 else float("nan"),
        best_error=curve.best_error,
        floor=curve.floor,
        truncation=curve.truncation,
        roundoff=curve.roundoff,
        noise=level if np.isfinite(level) else curve.noise,
        noise_kind=heard.kind[0][0],
        order=curve.truncation.slope if curve.truncation else float("nan"),
        value=float(curve.reference.value[0, 0]),
        bound=float(curve.reference.bound[0, 0]),
        along=label,
        unit=subject.units[directions[0]] if directions.ndim == 1 and subject.units else "",
        formula="one-sided difference" if curve.one_sided else "central difference",
        function=name,
        evaluations=session.ledger.evaluations,
        notices=(*session.ledger.notices, *curve.reference.reasons.values()),
        renderer=scan_svg,
    )
    return replace(record, text=scan_text(record))


def _subject(function: Any, at: Any, given: dict[str, Any]) -> Subject:
    if isinstance(function, Problem):
        if at is not None:
            raise UsageError("a Problem brings its own start point; at=... cannot be given with it")
        return subject_of_problem(function)
    spec = getattr(function, SPEC_ATTRIBUTE, None)
    if isinstance(spec, ModelSpec):
        described = {name: value for name, value in spec.options.items() if name in _OPTIONS}
        given = described | {name: value for name, value in given.items() if value is not None}
        at = spec.at if at is None else at
        at = at.each[0] if isinstance(at, Points) else at
    if at is None:
        raise UsageError("the point is missing: give at=..., or describe the model with @gradcheck.model(at=...)")
    if isinstance(at, Points):
        raise UsageError("scan takes one point; call it once for each of gradcheck.points(...)")
    return subjects_of_function(function, at, claims={}, **given)[0]


def _direction(subject: Subject, along: Any) -> tuple[Directions, str]:
    n = subject.layout.size
    if isinstance(along, str):
        if along not in subject.names:
            raise UsageError(f"along={along!r} is no variable; the variables are {', '.join(subject.names[:20])}")
        position = subject.names.index(along)
        return np.array([position]), along
    if isinstance(along, int | np.integer) and not isinstance(along, bool):
        if not 0 <= along < n:
            raise UsageError(f"along={along} is no variable; positions run from 0 to {n - 1}")
        return np.array([int(along)]), subject.layout.name(int(along))
    if along is None or isinstance(along, bool):
        raise UsageError(f"along is {along}; give the name or position of a variable, or a direction of {n} entries")
    row = np.ravel(real_numbers(along, "along"))
    if row.size != n or not np.isfinite(row).all() or not row.any():
        raise UsageError(
            f"along is {along!r:.80}; give the name or position of a variable, or a finite direction of {n} entries "
            "that are not all zero"
        )
    return row[None, :], "direction"
