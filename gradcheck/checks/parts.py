"""The report on a claim that was examined in several parts: unit vectors, random vectors, identities."""

import time
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.checks.identities import Contradiction
from gradcheck.checks.measure import Measure
from gradcheck.claims.desk import _VERDICTS, Examined
from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.policy import REL_TOL
from gradcheck.claims.rule import ALLOWANCE
from gradcheck.counsel.claim_findings import mutation
from gradcheck.evaluation.pipeline import Session
from gradcheck.records.finding import Finding
from gradcheck.records.report import IDENTITY, CheckReport, Diagnosis, DirectionChecks, Entries
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.report.check_text import check_text
from gradcheck.wording import listed

#: What an examination has for each entry.
FIELDS = ("claim", "value", "bound", "left", "right", "verdict", "source", "reason")


def flat(examined: Examined) -> Examined:
    """The same entries as arrays of one axis."""
    return replace(examined, **{name: np.ravel(getattr(examined, name)) for name in FIELDS})


def joined(parts: Sequence[Examined]) -> Examined:
    """Examined columns of several parts side by side; all have the same rows."""
    noise = np.fmax.reduce([part.noise for part in parts])
    return Examined(**{name: np.concatenate([getattr(p, name) for p in parts], axis=1) for name in FIELDS}, noise=noise)


def stacked(parts: Sequence[Examined]) -> Examined:
    """Examined rows of several parts below each other; all have the same columns."""
    fields = {name: np.concatenate([getattr(part, name) for part in parts], axis=0) for name in FIELDS}
    return Examined(**fields, noise=np.concatenate([part.noise for part in parts]))


def picked(examined: Examined, which: Any) -> Examined:
    """Some of the entries: whatever picks from an array."""
    return replace(examined, **{name: getattr(examined, name)[which] for name in FIELDS})


def case_of(examined: Examined, names: NDArray[np.object_], measure: Measure, *, whole: bool = True) -> Case:
    """Examined entries (a, b) as families of mistakes see them; `whole` if they are all that the claim has."""
    size = np.fmax(np.abs(examined.claim), np.abs(examined.value))
    rounding = ALLOWANCE * measure.unit_roundoff * np.nan_to_num(size)
    return Case(
        kind="jacobian",
        claim=examined.claim,
        value=examined.value,
        bound=examined.bound,
        refuted=np.asarray(examined.verdict == Verdict.REFUTED),
        confirmed=np.asarray(examined.verdict == Verdict.CONFIRMED),
        rel_tol=measure.rel_tol,
        floor=measure.abs_tol + rounding,
        name=lambda i, j: str(names[i, j]),
        x=np.full(examined.claim.shape[1], np.nan),
        whole=whole,
    )


def entries_from(examined: Examined, index: NDArray[np.intp], names: Sequence[str]) -> Entries:
    """The record of examined entries (a, b), row by row; `index` is (a·b, 2) or (a·b,)."""
    one = flat(examined)
    return Entries(
        index=index,
        name=tuple(names),
        claim=one.claim,
        witness=one.value,
        bound=one.bound,
        digits=one.digits,
        verdict=tuple(one.verdict),
        source=tuple(one.source),
        reason=tuple(one.reason),
    )


def with_contradictions(entries: Entries, found: Sequence[Contradiction]) -> Entries:
    """The entries, and one for each broken identity: its two sides, and by how much they may differ."""
    if not found:
        return entries
    sides = [(each.broken.left, each.broken.right, each.broken.allowed) for each in found]
    left, right, allowed = np.array(sides).T
    lone = Examined(
        claim=left,
        value=right,
        bound=allowed,
        left=np.full(left.shape, np.nan),
        right=np.full(left.shape, np.nan),
        verdict=_VERDICTS[np.full(left.shape, 2)],
        source=np.full(left.shape, IDENTITY, dtype=object),
        reason=np.array([_itself(each) for each in found], dtype=object),
        noise=np.empty(0),
    )
    more = entries_from(lone, np.array([each.place for each in found]), [each.name for each in found])
    return appended(entries, more)


def _itself(found: Contradiction) -> str:
    """Why a broken identity refutes a claim."""
    if found.broken.name == "symmetry":
        return "asymmetric: H[i, j] and H[j, i] of the claim differ; no value of the model is needed to see it"
    if "H·" in found.name:
        return "asymmetric: the claimed H is not its own transpose; no value of the model is needed to see it"
    return "the claim contradicts itself; no value of the model is needed to see it"


def appended(entries: Entries, more: Entries) -> Entries:
    """The entries of both."""
    if not len(entries):
        return more
    return Entries(
        index=np.concatenate([entries.index, more.index]),
        name=(*entries.name, *more.name),
        verdict=entries.verdict + more.verdict,
        source=entries.source + more.source,
        reason=entries.reason + more.reason,
        **{
            field: np.concatenate([getattr(entries, field), getattr(more, field)])
            for field in ("claim", "witness", "bound", "digits")
        },
    )


def report_of(
    session: Session,
    function: str,
    kind: str,
    entries: Entries,
    diagnoses: Sequence[Diagnosis],
    measure: Measure,
    *,
    failure: Finding | None,
    notices: Sequence[str],
    findings: Sequence[Finding] = (),
    directions: DirectionChecks | None = None,
    before: int,
    began: float,
) -> CheckReport:
    """The report; where the claim raised that is its story."""
    subject = session.subject
    if failure is not None:
        raised = tuple(
            name for name, claim in zip(entries.name, entries.claim.tolist(), strict=True) if not np.isfinite(claim)
        )
        diagnoses = (Diagnosis(code=DiagnosisCode.UNKNOWN, text=failure.text, entries=raised), *diagnoses)
    return CheckReport(
        verdict=Verdict.overall(list(entries.verdict)),
        kind=kind,
        function=function,
        point=subject.start,
        entries=entries,
        directions=directions,
        diagnoses=tuple(diagnoses),
        findings=(*([failure] if failure else []), *findings, *mutation(subject, session.ledger)),
        notices=(*session.ledger.notices, *_left_out(session), *_few_digits(measure), *notices),
        evaluations=session.ledger.evaluations - before,
        seconds=time.perf_counter() - began,
        renderer=check_text,
    )


def _few_digits(measure: Measure) -> tuple[str, ...]:
    if measure.precision not in REL_TOL or measure.rel_tol != REL_TOL[measure.precision]:
        return ()
    return (
        f"values or claim come in single precision ({measure.precision}), so the claim was judged to a relative "
        f"{measure.rel_tol:g} only; rel_tol=... asks for more",
    )


def _left_out(session: Session) -> tuple[str, ...]:
    subject = session.subject
    whole = [subject.layout.name(int(i)) for i in np.flatnonzero(subject.domain.integer)]
    return (f"entries for {listed(whole)} were not judged: whole numbers have no derivative",) if whole else ()
