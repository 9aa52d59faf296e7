"""The verb `check`: is a claimed derivative right?"""

import time
from typing import Any

import numpy as np

from gradcheck.claims.entries import diagnoses_of, entries_of, merged
from gradcheck.claims.examination import examine
from gradcheck.claims.policy import DEFAULT_REL_TOL, REL_TOL, Policy, Rules
from gradcheck.counsel.claim_findings import failing_claim, kinks_at_point, levels_at_point, mutation
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session, open_session
from gradcheck.evaluation.protocol import Request, Status
from gradcheck.problem.problem import SPEC_ATTRIBUTE, ModelSpec, Problem
from gradcheck.problem.sample_points import whole_number
from gradcheck.problem.subject import CLAIM_KINDS, Subject, subject_of_problem, subjects_of_function
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.finding import Finding
from gradcheck.records.report import CheckReport, Diagnosis, Entries
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.report.check_text import check_text
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.witnesses.steps import room_along
from gradcheck.wording import listed

AD_SOURCES = ("jax", "autograd")


def check(
    function: Any,
    at: Any = None,
    *,
    gradient: Any = None,
    jacobian: Any = None,
    wrt: Any = None,
    output: Any = None,
    bounds: Any = None,
    names: Any = None,
    typical: Any = None,
    witnesses: Any = None,
    rel_tol: float | None = None,
    abs_tol: float = 0.0,
    batched: bool = False,
    budget: int | None = None,
    time_limit: float | str | None = None,
    seed: int = 0,
    on_refuted: str = "raise",
    on_undecided: str = "warn",
) -> CheckReport:
    """Compare a claimed derivative with independent witnesses: silent, or raises with the story.

    Parameters
    ----------
    function : callable
        The model: takes what `at` holds, returns a number or an array.
    at : float, list, array, nesting, `gradcheck.args(...)` or `gradcheck.points(...)`
        Where to check. A model decorated with `gradcheck.model` brings its own point and options.
    gradient, jacobian : callable, array or str
        The claim; exactly one. A callable with the model's own signature, its value at `at`, or the name of an AD
        source (``"jax"``, ``"autograd"``). Shapes: gradient ``(n,)`` for a model that returns a number, Jacobian
        ``(m, n)`` for one that returns ``(m,)``.
    wrt : str or list of str, optional
        Which of several arguments to differentiate with respect to.
    output : callable, optional
        Picks what is differentiated from what the model returns.
    bounds : list of (lower, upper) pairs or tuple (lower, upper), optional
        The model is never called outside.
    names : list of str, optional
        Names of the variables.
    typical : float or array, optional
        Typical sizes of the variables.
    witnesses : str or list of str, optional
        Among ``"differences"`` and ``"complex step"``; default both, as needed.
    rel_tol, abs_tol : float, optional
        Default 1e-8 (1e-3 for a model that returns single precision) and 0.
    batched : bool
        Whether the model takes many points at once: x as ``(k, n)`` (``(k,)`` where `at` is one number), and returns
        ``(k,)`` or ``(k, m)``; `output` then picks from the whole batch. A claim still takes one point ``(n,)``. Every
        point counts as one evaluation; a batch in which the model raises is repeated point by point, and counted once.
    budget : int, optional
        Largest number of evaluations.
    time_limit : float or str, optional
        Seconds, or text such as ``"10min"``; looked at between the calls of the model, a call is never broken off.
    seed : int
        Reserved for checks along random directions; every step of this check is deterministic.
    on_refuted : "raise" or "return"
    on_undecided : "warn", "raise" or "pass"
        Where every entry is undecided it raises unless ``"pass"``.

    Returns
    -------
    CheckReport

    Raises
    ------
    DerivativeMismatch
        If the claim is refuted (or undecided where that was asked to raise). Its text is the report.
    UsageError, DerivativeShapeError
        If the call cannot be carried out as it stands.
    ModelFailure
        If the model raises or is not finite at the point.

    Notes
    -----
    A claim that is NaN where the witness is finite is refuted. Values given as integers, lists or float32 reach the
    model as float64, and the report says so.

    Examples
    --------
    >>> import gradcheck
    >>> def area(x):
    ...     return x[0] * x[1]
    >>> report = gradcheck.check(area, at=[2.0, 3.0], gradient=lambda x: [x[1], x[0]])
    >>> str(report.verdict)
    'confirmed'
    """
    policy = Policy.of(on_refuted, on_undecided)
    whole_number(seed, "seed")
    if isinstance(function, Problem):
        raise UsageError(
            "check takes a function; a Problem is looked at as a whole: gradcheck.audit(problem).claims holds a report "
            "on each claim, and pytest collects them with the ini option gradcheck_modules"
        )
    if at is None:
        options = _described_options(function)
        described = {"gradient": gradient, "jacobian": jacobian, "wrt": wrt, "output": output, "bounds": bounds}
        described |= {"names": names, "typical": typical, "witnesses": witnesses, "rel_tol": rel_tol}
        if any(gradient is not None for gradient in (gradient, jacobian)):
            options = {name: value for name, value in options.items() if name not in CLAIM_KINDS}
        options |= {name: value for name, value in described.items() if value is not None}
        options |= {"batched": batched} if batched else {}
        rest = {"budget": budget, "time_limit": time_limit, "seed": seed, "on_refuted": on_refuted}
        return check(function, **(rest | {"on_undecided": on_undecided} | options))
    claims = {"gradient": gradient, "jacobian": jacobian}
    if sum(claim is not None for claim in claims.values()) != 1:
        given = [kind for kind, claim in claims.items() if claim is not None]
        raise UsageError(
            "check needs exactly one claim, gradient=... or jacobian=...; "
            + (f"{' and '.join(given)} were given" if given else "none was given, so there is nothing to check")
        )
    rules = Rules.of(rel_tol, abs_tol, witnesses)
    subjects = subjects_of_function(
        function,
        at,
        claims=claims,
        wrt=wrt,
        output=output,
        bounds=bounds,
        names=names,
        typical=typical,
        batched=batched,
    )
    reports = []
    for subject in subjects:
        session = open_session(subject, budget=budget, time_limit=time_limit)
        reports.extend(checked_claims(session, rules))
    report = reports[0] if len(reports) == 1 else merged(reports)
    return policy.carry_out(report)


def _described_options(function: Any) -> dict[str, Any]:
    """Point and options of a decorated model.

    Raises
    ------
    UsageError
        If it is not decorated.
    """
    spec = getattr(function, SPEC_ATTRIBUTE, None)
    if not isinstance(spec, ModelSpec):
        raise UsageError("the point is missing: give at=..., or describe the model with @gradcheck.model(at=...)")
    return {"at": spec.at, **spec.options}


def check_described(
    thing: Any,
    *,
    budget: int | None = None,
    time_limit: float | str | None = None,
    seed: int = 0,
    **overrides: Any,
) -> list[CheckReport]:
    """Reports on all claims of a described `Problem` or of a model decorated with `gradcheck.model`; never raises for
    verdicts.

    Raises
    ------
    UsageError
        If there is nothing to check.
    """
    if isinstance(thing, Problem):
        if not any(
            getattr(f, k) is not None for f in (thing.objective, *thing.constraints.values()) for k in CLAIM_KINDS
        ):
            raise UsageError("this Problem claims no derivative: give its Functions gradient=... or jacobian=...")
        rules = Rules.of(
            overrides.pop("rel_tol", None), overrides.pop("abs_tol", 0.0), overrides.pop("witnesses", None)
        )
        if overrides:
            raise UsageError(f"{', '.join(sorted(overrides))} cannot be set for a Problem; its description says it")
        session = open_session(subject_of_problem(thing), budget=budget, time_limit=time_limit)
        return checked_claims(session, rules)
    given = {name: value for name, value in overrides.items() if value is not None}
    options = given if "at" in given and not hasattr(thing, SPEC_ATTRIBUTE) else _described_options(thing) | given
    options |= {
        "on_refuted": "return",
        "on_undecided": "pass",
        "budget": budget,
        "time_limit": time_limit,
        "seed": seed,
    }
    return [check(thing, **options)]


def checked_claims(session: Session, rules: Rules) -> list[CheckReport]:
    """A report on each claim of each function of the session's subject.

    Raises
    ------
    ModelFailure
        If the model cannot be evaluated at the start point.
    """
    before = session.ledger.evaluations
    centres = session.start_values()
    reports = []
    for name, target in session.subject.targets.items():
        for kind in target.claims:
            # The values at the point itself are counted with the first claim that needs them.
            reports.append(checked_claim(session, name, kind, centres[name], rules, before))
            before = session.ledger.evaluations
    return reports


def checked_claim(session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int) -> CheckReport:
    """The report on one claim of one function; `before` evaluations were spent on others."""
    began = time.perf_counter()
    subject = session.subject
    claim, failure = claimed_matrix(session, function, kind, centre)
    kinds = session.ledger.output_kinds.get(function, "float64"), session.ledger.claim_kinds.get((function, kind), "")
    precision = next((word for word in kinds if word in REL_TOL), "float64")
    unit = float(np.finfo(precision).eps / 2) if precision in REL_TOL else float(np.finfo(float).eps / 2)
    rel_tol = REL_TOL.get(precision, DEFAULT_REL_TOL) if rules.rel_tol is None else rules.rel_tol
    columns = _judgeable(subject)
    inquiry = examine(
        subject.start,
        columns,
        claim[:, columns],
        room_along(subject.start, columns, subject.domain),
        centre,
        subject.domain.scale[columns],
        rel_tol=rel_tol,
        abs_tol=rules.abs_tol,
        unit_roundoff=unit,
        witnesses=rules.witnesses,
    )
    examined = conduct_one(addressed(inquiry, function=function), session.gate)
    findings: list[Finding] = [failure] if failure else []
    findings += kinks_at_point(subject, function, examined.left, examined.right, columns)
    findings += levels_at_point(subject, function, examined.jumps, examined.stairs, columns)
    findings += mutation(subject, session.ledger)
    entries = entries_of(subject, function, kind, examined, columns)
    return CheckReport(
        verdict=Verdict.overall(list(entries.verdict)),
        kind=kind,
        function=function,
        point=subject.start,
        entries=entries,
        diagnoses=_raised(failure, entries)
        if failure
        else diagnoses_of(subject, function, kind, examined, columns, rel_tol, rules.abs_tol),
        findings=tuple(findings),
        notices=(*session.ledger.notices, *_left_out(subject), *_few_digits(precision, rules.rel_tol)),
        evaluations=session.ledger.evaluations - before,
        seconds=time.perf_counter() - began,
        renderer=check_text,
    )


def claimed_matrix(session: Session, function: str, kind: str, centre: Array) -> tuple[Array, Finding | None]:
    """The claim as a matrix (m, n); NaN with a finding where the user's derivative raised.

    Raises
    ------
    UsageError
        If the claim names an AD source that is not available, or that cannot differentiate the model.
    """
    subject = session.subject
    claim = subject.targets[function].claims[kind]
    if isinstance(claim, str):
        return _automatic_claim(session, function, kind, claim, centre), None
    reply = session.gate(
        [
            Request(
                base=subject.start,
                directions=np.zeros(1, dtype=np.intp),
                offsets=np.zeros((1, 1)),
                source=f"claim:{kind}",
                function=function,
            )
        ]
    )[0]
    if int(reply.status[0, 0]) == Status.CRASH:
        words = session.ledger.last_words[function, f"claim:{kind}"]
        return np.full((centre.size, subject.layout.size), np.nan), failing_claim(subject, function, kind, words)
    return reply.values[0], None


def _automatic_claim(session: Session, function: str, kind: str, source: str, centre: Array) -> Array:
    """What AD says, in the mode that needs fewer sweeps, or the other one where that fails."""
    subject = session.subject
    if source not in AD_SOURCES:
        raise UsageError(
            f"{kind}={source!r} names no derivative source; use {' or '.join(map(repr, AD_SOURCES))}, a function, "
            "or an array"
        )
    if kind == "gradient" and centre.size != 1:
        raise UsageError(f"gradient={source!r}: the model returns {centre.size} outputs; use jacobian={source!r}")
    n, m = subject.layout.size, centre.size
    for arithmetic in ("vjp", "jvp") if m <= n else ("jvp", "vjp"):
        size = m if arithmetic == "vjp" else n
        request = Request(
            base=subject.start,
            directions=np.eye(size),
            offsets=np.zeros((size, 1)),
            arithmetic=arithmetic,
            source=source,
            function=function,
        )
        reply = session.gate([request])[0]
        if reply.status[0, 0] in (Status.OK, Status.NONFINITE):
            swept = reply.values[:, 0]
            return swept if arithmetic == "vjp" else swept.T
    words = session.ledger.last_words.get((function, source), SPENT)
    raise UsageError(f"{kind}={source!r}: {source} cannot differentiate {function}: {words}")


def _judgeable(subject: Subject) -> IntArray:
    """The variables whose entries are judged: a whole-number variable has no derivative.

    Raises
    ------
    UsageError
        If there is none.
    """
    columns = np.flatnonzero(~subject.domain.integer)
    if columns.size == 0:
        raise UsageError("every variable takes whole numbers only, so there is no derivative to check")
    return columns


def _few_digits(precision: str, rel_tol: float | None) -> tuple[str, ...]:
    if precision not in REL_TOL or rel_tol is not None:
        return ()
    return (
        f"values or claim come in single precision ({precision}), so the claim was judged to a relative "
        f"{REL_TOL[precision]:g} only; rel_tol=... asks for more",
    )


def _raised(failure: Finding, entries: Entries) -> tuple[Diagnosis, ...]:
    """The story of a claim that raised: it is no wrong derivative, it is none."""
    return (Diagnosis(code=DiagnosisCode.UNKNOWN, text=failure.text, entries=entries.name),)


def _left_out(subject: Subject) -> tuple[str, ...]:
    whole = [subject.layout.name(int(i)) for i in np.flatnonzero(subject.domain.integer)]
    return (f"entries for {listed(whole)} were not judged: whole numbers have no derivative",) if whole else ()
