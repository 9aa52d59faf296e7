"""The examined entries of a claim as users receive them: named, with likely mistakes, several points in one report."""

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from gradcheck.claims.desk import Examined
from gradcheck.claims.mistakes.case import Block, Case
from gradcheck.claims.mistakes.naming import Asking, likely_mistakes
from gradcheck.claims.mistakes.points import mistakes_at_points
from gradcheck.claims.rule import ALLOWANCE
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.names import Names
from gradcheck.records.report import CheckReport, Diagnosis, Entries
from gradcheck.records.verdict import Verdict

#: Names of so many entries are made at once.
NAMED_AT_ONCE = 1000


def entries_of(subject: Subject, function: str, kind: str, examined: Examined, looked_at: IntArray) -> Entries:
    m, d = examined.claim.shape
    rows = np.repeat(np.arange(m), d)
    columns = np.tile(looked_at, m)
    flat_ = kind == "gradient" or (kind == "value_and_gradient" and m == 1)
    index = columns if flat_ else np.stack([rows, columns], axis=1)

    def flat(array: Any) -> Any:
        return np.ravel(array)

    return Entries(
        index=index,
        name=_names(subject, function, m, rows, columns),
        claim=flat(examined.claim),
        witness=flat(examined.value),
        bound=flat(examined.bound),
        digits=flat(examined.digits),
        verdict=tuple(flat(examined.verdict)),
        source=tuple(flat(examined.source)),
        reason=tuple(flat(examined.reason)),
    )


def _names(subject: Subject, function: str, outputs: int, rows: IntArray, columns: IntArray) -> Sequence[str]:
    """Names of entries: of many they are made when they are read."""

    def name(k: int) -> str:
        return entry_name(subject, function, outputs, int(rows[k]), int(columns[k]))

    many = Names(rows.size, name)
    return many if rows.size > NAMED_AT_ONCE else tuple(many)


def entry_name(subject: Subject, function: str, outputs: int, row: int, column: int) -> str:
    """Name of an entry: the variable, and for several outputs which one: ``stress[2] by span``."""
    variable = subject.layout.name(column)
    return variable if outputs == 1 else f"{subject.output_name(function, row)} by {variable}"


def diagnoses_of(
    subject: Subject,
    function: str,
    kind: str,
    examined: Examined,
    columns: IntArray,
    rel_tol: float,
    abs_tol: float,
    *,
    outputs: tuple[int, ...] = (),
    values: Array | None = None,
    told: BoolArray | None = None,
    ask: Asking | None = None,
) -> tuple[Diagnosis, ...]:
    """Likely mistakes behind the refuted entries.

    Parameters
    ----------
    outputs : tuple of int
        Shape of what the model returns.
    values : ndarray, shape (m,), optional
        What it returns at the point.
    told : ndarray of bool, shape (m, d), optional
        Entries about which something was said already.
    ask : callable, optional
        See `likely_mistakes`.
    """
    refuted = np.asarray(examined.verdict == Verdict.REFUTED)
    if told is not None:
        refuted = refuted & ~told
    if not refuted.any():
        return ()
    m = examined.claim.shape[0]
    judged = subject.layout.size - int(np.sum(subject.domain.integer))
    case = Case(
        kind=kind,
        claim=examined.claim,
        value=examined.value,
        bound=examined.bound,
        refuted=refuted,
        confirmed=np.asarray(examined.verdict == Verdict.CONFIRMED),
        rel_tol=rel_tol,
        floor=np.broadcast_to(floor_of(subject, examined, columns, abs_tol), examined.claim.shape),
        name=lambda i, j: entry_name(subject, function, m, i, int(columns[j])),
        x=subject.start[columns],
        variable=lambda j: subject.layout.name(int(columns[j])),
        blocks=tuple(Block(leaf.path, leaf.start, leaf.shape) for leaf in subject.layout.leaves)
        if columns.size == subject.layout.size
        else (),
        whole=columns.size == judged,
        outputs=outputs,
        values=np.empty(0) if values is None else np.ravel(values),
    )
    return likely_mistakes(case, ask)


def floor_of(subject: Subject, examined: Examined, columns: IntArray, abs_tol: float) -> Array:
    """Absolute error (m, d) that the caller allows, and rounding may leave, in a right claim."""
    noise = np.nan_to_num(examined.noise)[:, None] / subject.domain.scale[None, columns]
    return np.asarray(abs_tol + ALLOWANCE * noise)


#: Told where every derivative is zero, as at an optimum.
ALL_ZERO = (
    "all derivatives are zero at this point, so that a wrong sign, factor or order of the claim would not show; check "
    "at another point as well"
)


def merged(reports: Sequence[CheckReport]) -> CheckReport:
    """One report on the same claim at several points; each entry's name says at which."""
    parts = [report.entries for report in reports]
    entries = Entries(
        index=np.concatenate([part.index for part in parts]),
        name=tuple(f"{name} @ point {k}" for k, part in enumerate(parts) for name in part.name),
        verdict=tuple(v for part in parts for v in part.verdict),
        source=tuple(s for part in parts for s in part.source),
        reason=tuple(r for part in parts for r in part.reason),
        **{
            field: np.concatenate([getattr(part, field) for part in parts])
            for field in ("claim", "witness", "bound", "digits")
        },
    )
    worst = next((r for v in (Verdict.REFUTED, Verdict.UNDECIDED) for r in reports if r.verdict == v), reports[0])
    return replace(
        worst,
        verdict=Verdict.overall([report.verdict for report in reports]),
        entries=entries,
        diagnoses=mistakes_at_points(reports),
        findings=tuple(f for report in reports for f in report.findings),
        notices=_notices(reports),
        evaluations=sum(report.evaluations for report in reports),
        seconds=sum(report.seconds for report in reports),
        text="",
    )


def _notices(reports: Sequence[CheckReport]) -> tuple[str, ...]:
    """Each notice once; that all derivatives are zero only where that holds at every point."""
    everywhere = all(ALL_ZERO in report.notices for report in reports)
    told = dict.fromkeys(notice for report in reports for notice in report.notices)
    return tuple(notice for notice in told if everywhere or notice != ALL_ZERO)
