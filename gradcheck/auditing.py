"""The verb `audit`: can this problem be handed to an optimizer, and with which derivatives?"""

import importlib.util
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from gradcheck.checks.choosing import checked_claims
from gradcheck.claims.policy import Rules
from gradcheck.counsel.claim_findings import kinks_at_point, mutation
from gradcheck.counsel.claim_verdicts import verdict_findings
from gradcheck.counsel.families import Evidence, advice
from gradcheck.counsel.limits import start_notes
from gradcheck.counsel.line_findings import Line, line_findings
from gradcheck.counsel.model_findings import (
    complex_unsafe,
    dead_variables,
    failures,
    integer_arithmetic,
    integer_variables,
    start_failure,
    unrepeatable,
    witness_conflict,
)
from gradcheck.counsel.noise_findings import noise_findings
from gradcheck.counsel.scaling import scale_spread, suggested_scaling
from gradcheck.counsel.silencing import refuse_unknown, silenced
from gradcheck.counsel.solver_steps import solver_steps
from gradcheck.errors import ModelFailure, UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one, counted
from gradcheck.evaluation.environment import environment_of
from gradcheck.evaluation.pipeline import Session, open_session
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.health.repeatability import repeatability
from gradcheck.health.sensitivity import FarMoves, far_moves
from gradcheck.health.smoothness import examine_line
from gradcheck.health.step_choice import StepChoice, step_choice
from gradcheck.problem.domain import windows
from gradcheck.problem.keywords import keywords_explained
from gradcheck.problem.layout import Points
from gradcheck.problem.problem import SPEC_ATTRIBUTE, ModelSpec, Problem
from gradcheck.problem.sample_points import given_points, random_points, whole_number
from gradcheck.problem.subject import CLAIM_KINDS, Subject, subject_of_problem, subjects_of_function
from gradcheck.records.advice import Advice, Family
from gradcheck.records.arrays import Array, IntArray, frozen
from gradcheck.records.finding import Finding, FindingCode, Severity
from gradcheck.records.report import AuditReport, CheckReport, Scaling, Steps, WitnessRecord
from gradcheck.records.verdict import Verdict
from gradcheck.report.audit_text import audit_text
from gradcheck.witnesses.automatic import Source, automatic
from gradcheck.witnesses.complex_step import complex_step
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.noise_of_outputs import noise_of_all
from gradcheck.witnesses.noise_reading import OutputNoise
from gradcheck.witnesses.steps import room_along
from gradcheck.witnesses.testimony import Testimony
from gradcheck.wording import count, seconds

#: Evaluations that one variable takes in each function: claims and sources about 70, its line 100 to 300.
EVALUATIONS_A_VARIABLE = 200
#: With more variables than this, witnesses and lines look at so many of them, evenly spread.
VARIABLES_MOST = 60
AD_SOURCES: tuple[Source, ...] = ("jax", "autograd")
_SEVERITY_ORDER = {Severity.BLOCKER: 0, Severity.HAZARD: 1, Severity.REMARK: 2}


@keywords_explained
def audit(
    problem_or_function: Any,
    *,
    at: Any = None,
    bounds: Any = None,
    gradient: Any = None,
    jacobian: Any = None,
    hessian: Any = None,
    names: Any = None,
    typical: Any = None,
    wrt: Any = None,
    output: Any = None,
    samples: int = 0,
    points: Any = None,
    budget: int | None = None,
    time_limit: float | str | None = None,
    accept: Mapping[str, str] | None = None,
    progress: Callable[[str], None] | None = None,
    seed: int = 0,
) -> AuditReport:
    """Look at a problem before the optimization run; never raises for what it finds.

    Parameters
    ----------
    problem_or_function : Problem, decorated model or callable
    at, bounds, gradient, jacobian, hessian, names, typical, wrt, output
        As in `gradcheck.check`, for a callable; a Problem brings them.
    samples : int
        How many more random points within the bounds get their claims checked.
    points : list of points or array (k, n), optional
        Given points, such as a solver's iterates, that get their claims checked.
    budget : int, optional
        Largest number of evaluations. What was left out for it is told.
    time_limit : float or str, optional
        Seconds, or text such as ``"10min"``; looked at between the calls of the model, a call is never broken off.
    accept : mapping of str to str, optional
        Findings to silence, ``"code"``, ``"code:function"`` or ``"code:function:variable"``, each with a reason that
        the report shows.
    progress : callable, optional
        Called with a line of text before each part.
    seed : int
        Of random points and jitter; the same seed gives the same audit.

    Returns
    -------
    AuditReport
        ``evaluable`` is False, with one blocker, if the model fails at its start point.

    Raises
    ------
    UsageError
        If the call cannot be carried out as it stands.

    Examples
    --------
    >>> import gradcheck
    >>> report = gradcheck.audit(lambda x: x[0] ** 2 + x[1], at=[1.0, 2.0], gradient=lambda x: [2 * x[0], 1.0])
    >>> report.ready, report.claims[0].verdict
    (True, <Verdict.CONFIRMED: 'confirmed'>)
    """
    began = time.perf_counter()
    samples, seed = whole_number(samples, "samples"), whole_number(seed, "seed")
    refuse_unknown(accept)
    options = {
        "at": at,
        "bounds": bounds,
        "gradient": gradient,
        "jacobian": jacobian,
        "hessian": hessian,
        "names": names,
        "typical": typical,
        "wrt": wrt,
        "output": output,
        "batched": None,  # a description may say it
    }
    subject, more = _subject_and_points(problem_or_function, options)
    more += given_points(points, subject) + random_points(subject, samples, seed)
    session = open_session(subject, budget=budget, time_limit=time_limit)
    tell = progress or (lambda line: None)
    audit_ = _Audit(session=session, seed=seed, tell=tell)
    try:
        centres = session.start_values()
    except ModelFailure as error:
        audit_.findings.append(start_failure(subject, error))
        return _concluded(audit_, began, accept, evaluable=False)
    audit_.start_notes = start_notes(subject, centres)
    try:
        audit_.run(centres, more)
    except KeyboardInterrupt as interrupt:
        # Whoever catches it can still show what was found.
        audit_.interrupted = True
        interrupt.found = _concluded(audit_, began, accept, evaluable=True)  # type: ignore[attr-defined]
        raise
    return _concluded(audit_, began, accept, evaluable=True)


@dataclass(slots=True, eq=False)
class _Audit:
    """The parts of one audit, and what they brought."""

    session: Session
    seed: int
    tell: Callable[[str], None]
    findings: list[Finding] = field(default_factory=list)
    claims: list[CheckReport] = field(default_factory=list)
    witnesses: list[WitnessRecord] = field(default_factory=list)
    steps: list[Steps] = field(default_factory=list)
    scaling: Scaling | None = None
    largest: float = 0.0
    interrupted: bool = False
    lines_examined: int = 0
    not_looked_at: list[str] = field(default_factory=list)
    differences: dict[str, Testimony] = field(default_factory=dict)
    apart: dict[str, Array] = field(default_factory=dict)
    noise: dict[str, OutputNoise] = field(default_factory=dict)
    start_notes: tuple[str, ...] = ()

    @property
    def subject(self) -> Subject:
        return self.session.subject

    def say(self, what: str) -> None:
        """Tell what comes next, and how many evaluations have been made."""
        self.tell(f"{what} (so far {count(self.session.ledger.evaluations, 'evaluation')})")

    def ask(self, function: str, inquiry: Inquiry[Any]) -> Any:
        return conduct_one(addressed(inquiry, function=function), self.session.gate)

    def run(self, centres: Mapping[str, Array], more: Sequence[Array]) -> None:
        """All parts, most telling first: when the budget ends, what is left out matters least."""
        self.largest = float(np.abs(next(iter(centres.values()))).max())
        self.tell(self._forecast())
        self.findings += integer_variables(self.subject)
        self.findings += integer_arithmetic(self.subject, self.session.ledger)
        for name, centre in centres.items():
            self.say(f"repeatability of {name}")
            seen = self.ask(name, repeatability(self.subject.start, self.subject.domain, centre))
            self.apart[name] = np.fmax(seen.at_once, seen.after_others)
            self.findings += unrepeatable(self.subject, name, seen)
        self.say("claims at the start point")
        self._take(checked_claims(self.session, Rules()), self.subject)
        for place, point in enumerate(more):
            self.say(f"claims at point {place + 1} of {len(more)}")
            self._claims_elsewhere(point)
        columns = self._columns()
        unchanged: dict[str, FarMoves] = {}
        for name, centre in centres.items():
            self.say(f"derivative sources of {name}")
            self._differences(name, centre, columns)
            self._other_sources(name, centre, columns)
            moves = far_moves(self.subject.start, columns, self.subject.domain, centre, seed=self.seed)
            unchanged[name] = self.ask(name, moves)
        self.findings += dead_variables(self.subject, unchanged, columns)
        for name in centres:
            self._lines(name, columns)
        self.findings += mutation(self.subject, self.session.ledger)
        told = {(f.function, f.code) for f in self.findings}
        self.findings += failures(self.subject, self.session.ledger, told)

    def _forecast(self) -> str:
        """How many evaluations the audit may take, and for how long: the model has been timed once by now."""
        ledger = self.session.ledger
        n = min(self.subject.layout.size, VARIABLES_MOST)
        total = len(self.subject.targets) * n * EVALUATIONS_A_VARIABLE
        each = ledger.seconds["model"] / max(ledger.calls["model"], 1)
        return f"about {count(total, 'evaluation')}, {seconds(total * each)}; a budget makes it shorter"

    # --- parts -----------------------------------------------------------------------------------------------------

    def _take(self, reports: Sequence[CheckReport], subject: Subject) -> None:
        for report in reports:
            self.claims.append(report)
            self.findings += verdict_findings(subject, report)
            self.findings += report.findings

    def _claims_elsewhere(self, point: Array) -> None:
        moved = replace(self.subject, start=frozen(point))
        session = replace(self.session, subject=moved)
        try:
            self._take(checked_claims(session, Rules(trials=False)), moved)
        except ModelFailure as error:
            self.findings.append(replace(start_failure(moved, error), severity=Severity.HAZARD, remedy=_AVOID))

    def _columns(self) -> IntArray:
        n = self.subject.layout.size
        if n <= VARIABLES_MOST:
            return np.arange(n)
        self.not_looked_at.append(
            f"witnesses and lines along {n - VARIABLES_MOST} of {count(n, 'variable')}: only {VARIABLES_MOST}, evenly "
            "spread, were looked at"
        )
        return np.unique(np.linspace(0, n - 1, VARIABLES_MOST).astype(np.intp))

    def _differences(self, name: str, centre: Array, columns: IntArray) -> None:
        """The difference witness, the steps for the user's solver, and the scaling; one set of values serves all."""
        subject = self.subject
        room = room_along(subject.start, columns, subject.domain)

        def order(derivative: int) -> tuple[Testimony, int]:
            inquiry = finite_difference(subject.start, columns, room, centre, derivative=derivative)
            answer: tuple[Testimony, int] = self.ask(name, counted(inquiry))
            return answer

        refused = self.session.ledger.refused
        (first, asked), (second, _), (third, _) = order(1), order(2), order(3)
        smooth = ~subject.domain.integer[columns]
        inquiry = noise_of_all(subject.start, columns[smooth], subject.domain, centre, apart=self.apart[name])
        heard = self.noise[name] = self.ask(name, inquiry)
        known = replace(first, noise=np.where(np.isfinite(heard.level), heard.level, first.noise))
        choice: StepChoice = self.ask(name, step_choice(subject.start, columns, room, centre, known, second, third))
        if self.session.ledger.refused > refused:
            # Half a measurement would give steps and scalings that look like any other.
            self._unheard(name, first.source)
            self.not_looked_at.append(f"derivatives of {name} by differences, and with them steps and scaling")
            return
        self._record(name, first, asked, "model")
        self.differences[name] = first
        self.findings += kinks_at_point(subject, name, first.left.T, first.right.T, columns)
        names = tuple(subject.layout.name(int(i)) for i in columns[smooth])
        if np.isfinite(first.noise).any() and smooth.any():
            kind = heard.kind[heard.loudest()]
            self.steps.append(solver_steps(name, names, choice, smooth, kind))
        if self.scaling is None and centre.size == 1 and columns.size == subject.layout.size:
            gradient = np.where(subject.domain.integer, np.nan, first.value[:, 0])
            self.scaling = suggested_scaling(subject, gradient)
            self.findings += scale_spread(subject, name, gradient)

    def _other_sources(self, name: str, centre: Array, columns: IntArray) -> None:
        subject = self.subject
        room = room_along(subject.start, columns, subject.domain)
        reach = np.minimum(room.below, room.above)
        inquiry = complex_step(subject.start, columns, centre.size, scale=room.scale, f0=centre, reach=reach)
        refused = self.session.ledger.refused
        testimony, asked = self.ask(name, counted(inquiry))
        if self.session.ledger.refused == refused:
            self._record(name, testimony, asked, "complex")
            self.findings += complex_unsafe(subject, name, testimony)
            self._compare(name, testimony, columns)
        else:
            self._unheard(name, testimony.source)
        for source in AD_SOURCES:
            if importlib.util.find_spec(source) is None:
                continue
            began = self.session.ledger.seconds[source]
            found = self.ask(
                name, automatic(subject.start, columns, centre.size, source, domain=subject.domain, seed=self.seed)
            )
            self.witnesses.append(
                WitnessRecord(
                    function=name,
                    source=source,
                    works=found.works,
                    bound=_relative_bound(found),
                    evaluations=found.spent,
                    seconds=self.session.ledger.seconds[source] - began,
                    reason=found.reason,
                )
            )
            self._compare(name, found, columns)

    def _compare(self, name: str, testimony: Testimony, columns: IntArray) -> None:
        """Where a source and the differences part beyond their bounds, the source is not to be used unseen."""
        heard = self.differences.get(name)
        conflict = witness_conflict(self.subject, name, testimony, heard, columns) if heard is not None else []
        if conflict:
            self.findings += conflict
            self.witnesses[-1] = replace(self.witnesses[-1], works=False, reason="contradicts the differences")

    def _unheard(self, name: str, source: str) -> None:
        """A source that the budget did not let speak."""
        nan = float("nan")
        self.witnesses.append(
            WitnessRecord(
                function=name, source=source, works=False, bound=nan, evaluations=0, seconds=0.0, reason="not looked at"
            )
        )

    def _record(self, name: str, testimony: Testimony, asked: int, kind: str) -> None:
        ledger = self.session.ledger
        each = ledger.seconds[kind] / max(ledger.calls[kind], 1)
        reason = testimony.reason or ("" if testimony.works else next(iter(testimony.reasons.values()), ""))
        self.witnesses.append(
            WitnessRecord(
                function=name,
                source=testimony.source,
                works=testimony.works,
                bound=_relative_bound(testimony),
                evaluations=asked,
                seconds=asked * each,
                reason=reason,
            )
        )

    def _lines(self, name: str, columns: IntArray) -> None:
        subject = self.subject
        lower, upper = windows(subject.start, subject.domain)
        lines = []
        for i in columns:
            if subject.domain.integer[i] or not upper[i] > lower[i]:
                continue
            self.say(f"{name} along {subject.layout.name(int(i))}")
            start = np.array(subject.start)
            start[i] = lower[i]
            report = self.ask(name, examine_line(start, (int(i), float(upper[i] - lower[i])), seed=self.seed))
            lines.append(Line(coordinate=int(i), lower=float(lower[i]), upper=float(upper[i]), report=report))
            self.lines_examined += report.unresolved < 1
            # Next to an edge of the domain a thousandth always stays open.
            if report.unresolved > 0.01:
                share = (
                    "nothing is known" if report.unresolved >= 1 else f"{100 * report.unresolved:.2g} % is unresolved"
                )
                self.not_looked_at.append(f"{name} along {subject.layout.name(int(i))}: {share}")
        known = {(f.function, f.code) for f in self.findings if f.code == FindingCode.UNREPEATABLE}
        found = line_findings(subject, name, lines)
        found += noise_findings(subject, name, [line.report for line in lines], self.noise.get(name))
        self.findings += [f for f in found if (f.function, f.code) not in known]


_AVOID = "Keep the run away from this point, or mend the model there."


def _relative_bound(testimony: Testimony) -> float:
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = testimony.bound / np.abs(testimony.value)
    ratio = ratio[np.isfinite(ratio)]
    return float(np.median(ratio)) if ratio.size else float("nan")


# --- what the user gave ---------------------------------------------------------------------------------------------


def _subject_and_points(thing: Any, options: dict[str, Any]) -> tuple[Subject, list[Array]]:
    given = {name: value for name, value in options.items() if value is not None}
    if isinstance(thing, Problem):
        if given:
            raise UsageError(f"{', '.join(sorted(given))} cannot be given with a Problem; its description says it")
        return subject_of_problem(thing), []
    spec = getattr(thing, SPEC_ATTRIBUTE, None)
    if isinstance(spec, ModelSpec):
        known = {name: spec.options[name] for name in (*options, *CLAIM_KINDS) if name in spec.options}
        given = {"at": spec.at} | known | given
    if "at" not in given:
        raise UsageError("the point is missing: give at=..., or describe the model with @gradcheck.model(at=...)")
    claims = {kind: given.pop(kind, None) for kind in CLAIM_KINDS}
    at = given.pop("at")
    subjects = subjects_of_function(thing, at if isinstance(at, Points) else Points((at,)), claims=claims, **given)
    return subjects[0], [np.array(subject.start) for subject in subjects[1:]]


# --- the report -----------------------------------------------------------------------------------------------------


def _concluded(audit_: _Audit, began: float, accept: Mapping[str, str] | None, *, evaluable: bool) -> AuditReport:
    ledger, subject = audit_.session.ledger, audit_.subject
    ordered = sorted(_once(audit_.findings), key=lambda finding: _SEVERITY_ORDER[finding.severity])
    findings, accepted = silenced(ordered, accept)
    each = ledger.seconds["model"] / max(ledger.calls["model"], 1)
    evidence = Evidence(
        subject=subject,
        findings=findings,
        claims=audit_.claims,
        witnesses=audit_.witnesses,
        steps=audit_.steps,
        scaling=audit_.scaling,
        largest=audit_.largest,
        lines_examined=audit_.lines_examined,
        seconds_per_evaluation=each,
    )
    complete = ledger.refused == 0 and not audit_.interrupted
    left_out = list(audit_.not_looked_at)
    if audit_.interrupted:
        left_out.insert(0, "whatever was still to come when the audit was interrupted")
    if ledger.refused:
        left_out.insert(0, f"at least {count(ledger.refused, 'evaluation')} that the budget or the time did not allow")
    report = AuditReport(
        name=subject.name,
        ready=evaluable and not audit_.interrupted and _ready(findings, audit_.claims),
        claims=tuple(audit_.claims),
        witnesses=tuple(audit_.witnesses),
        findings=tuple(findings),
        steps=tuple(audit_.steps),
        scaling=audit_.scaling,
        advice=_no_advice(_INTERRUPTED)
        if audit_.interrupted
        else advice(evidence)
        if evaluable
        else _no_advice(_NO_VALUE),
        environment=environment_of(audit_.seed),
        evaluations=ledger.evaluations,
        seconds=time.perf_counter() - began,
        complete=complete,
        evaluable=evaluable,
        accepted=accepted,
        not_looked_at=tuple(left_out),
        notices=(*ledger.notices, *audit_.start_notes),
        variables=tuple(_variables(subject)),
    )
    return replace(report, text=audit_text(report))


_NO_VALUE = "the model could not be evaluated at its start point; no advice can be given before it works there."
_INTERRUPTED = "the audit was interrupted; no advice can be given from half of it."


def _no_advice(why: str) -> Advice:
    return Advice(family=Family.GRADIENT_FREE, derivatives=(), solvers=(), reasons=(why,))


def _ready(findings: Sequence[Finding], claims: Sequence[CheckReport]) -> bool:
    """No blocker, nothing refuted, not everything undecided."""
    if any(finding.severity == Severity.BLOCKER for finding in findings):
        return False
    if any(claim.verdict == Verdict.REFUTED for claim in claims):
        return False
    verdicts = [verdict for claim in claims for verdict in claim.verdicts]
    return not verdicts or any(verdict != Verdict.UNDECIDED for verdict in verdicts)


def _once(findings: Sequence[Finding]) -> list[Finding]:
    """Findings without those that say the same again (one run behind several functions, one kink seen by two parts)."""
    seen: dict[tuple[str, str], Finding] = {}
    for finding in findings:
        seen.setdefault((finding.code, finding.text), finding)
    return list(seen.values())


def _variables(subject: Subject) -> list[dict[str, Any]]:
    shown = min(subject.layout.size, 1000)
    return [
        {
            "name": subject.layout.name(i),
            "value": float(subject.start[i]),
            "lower": float(subject.domain.lower[i]),
            "upper": float(subject.domain.upper[i]),
            "unit": subject.units[i] if subject.units else "",
            "integer": bool(subject.domain.integer[i]),
        }
        for i in range(shown)
    ]
