"""The check of a Jacobian claim that is sparse, or has many columns: many variables move at once."""

import time
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gradcheck.checks.claimed import claimed_matrix, sparse_claim
from gradcheck.claims.entries import entry_name
from gradcheck.claims.entry_table import CONFIRMED, REFUTED, UNDECIDED, EntryTable
from gradcheck.claims.fault_lists import Faults, faults_of, repetitions
from gradcheck.claims.joint_looks import Accuracy
from gradcheck.claims.pattern_detection import PLACES_MOST
from gradcheck.claims.policy import DEFAULT_REL_TOL, REL_TOL, Rules
from gradcheck.claims.rule import ALLOWANCE, digits_agreed
from gradcheck.claims.slot_looks import UNEXPLAINED
from gradcheck.claims.sparse_examination import SparseExamined, examine_sparse
from gradcheck.counsel.claim_findings import mutation
from gradcheck.counsel.sparsity_stories import (
    Judged,
    Named,
    detection_words,
    diagnoses_of_faults,
    diagnoses_of_rows,
    kinks_of_entries,
    unused_finding,
)
from gradcheck.errors import UsageError
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.pipeline import Session
from gradcheck.problem.sparse_claim import declared_pattern, matrix_of
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.finding import Finding
from gradcheck.records.report import CheckReport, DirectionChecks, Entries
from gradcheck.records.sparsity import Repetition, SparsityChecks
from gradcheck.records.verdict import Verdict
from gradcheck.report.check_text import check_text
from gradcheck.wording import listed

#: Jacobians of more columns than this are checked along joint moves, also where they are dense.
MANY_COLUMNS = 1_000
#: Sparse claims of so few columns are checked like dense ones.
FEW_COLUMNS = 4
#: Points and values that have more numbers than this together are not remembered.
LONG = 20_000
#: Claims with so few entries are listed in full; of larger ones those that are not confirmed, and the confirmed ones
#: that agree least.
LISTED_IN_FULL, LISTED_MOST, LEAST_AGREEING = 2_000, 10_000, 20

_VERDICTS = {CONFIRMED: Verdict.CONFIRMED, REFUTED: Verdict.REFUTED, UNDECIDED: Verdict.UNDECIDED}


def goes_by_joint_moves(session: Session, function: str, kind: str, centre: Array, rules: Rules) -> bool:
    """Whether a claim is checked here, and not entry by entry.

    A Jacobian whose claim is sparse, that has a declared pattern, or many columns; and any Jacobian along a number of
    random directions.
    """
    subject = session.subject
    if kind != "jacobian" or "differences" not in rules.witnesses or subject.domain.integer.all():
        return False
    target, n = subject.targets[function], subject.layout.size
    if target.pattern is not None or isinstance(rules.directions, int):
        return True
    if n > FEW_COLUMNS and sparse_claim(session, function, kind) is not None:
        return True
    return n > MANY_COLUMNS and rules.directions is None and centre.size > 1


def checked_jointly(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int
) -> CheckReport | None:
    """The report on one Jacobian claim; `before` evaluations were spent on others. None if the claim raised.

    Raises
    ------
    UsageError
        If the declared pattern does not fit, or the claim is of the wrong kind or shape.
    """
    began = time.perf_counter()
    subject = session.subject
    table, declared = _table_of(session, function, kind, centre)
    if table is None:
        return None
    accuracy, notices = _accuracy(session, function, kind, rules)
    detect = isinstance(subject.targets[function].pattern, str)
    if detect and centre.size * subject.layout.size > PLACES_MOST:
        raise UsageError(
            f'pattern="detect" is meant for Jacobians of up to {PLACES_MOST:,} places; this one has {centre.size:,} × '
            f"{subject.layout.size:,}: declare its pattern, or leave pattern out to rely on that of the claim"
        )
    table, left_out = _without_whole_numbers(table, subject.domain.integer)
    inquiry = examine_sparse(
        subject.start,
        table,
        centre,
        subject.domain,
        accuracy,
        directions=rules.directions,
        seed=rules.seed,
        detect=detect,
    )
    # No point is asked for twice here; to remember long ones would take more memory than all the rest.
    long = centre.size + subject.layout.size > LONG
    examined = conduct_one(addressed(inquiry, function=function, fresh=long), session.gate)
    faults = faults_of(table, examined.influence)
    m = centre.size

    def name(row: int, column: int) -> str:
        return entry_name(subject, function, m, row, column)

    repeated = _repeated(table, faults)
    findings: list[Finding] = kinks_of_entries(subject, function, table)
    if faults.unused.size:
        findings.append(unused_finding(subject, function, table, faults.unused, repeated, name))
    findings += mutation(subject, session.ledger)
    verdict = _verdict(examined, faults)
    diagnoses = diagnoses_of_faults(
        table,
        faults,
        repeated,
        name,
        kind,
        Judged(
            rel_tol=accuracy.rel_tol,
            floor=lambda at: _floor(table, at, accuracy, centre, subject.domain.scale),
            start=subject.start,
        ),
        declared,
    )
    diagnoses += diagnoses_of_rows(function, np.flatnonzero(_unexplained(examined)), examined.factor)
    if examined.detection is not None:
        notices.append(detection_words(examined.detection))
    if left_out:
        whole = [subject.layout.name(int(i)) for i in np.flatnonzero(subject.domain.integer)[:10]]
        notices.append(f"entries for {listed(whole)} were not judged: whole numbers have no derivative")
    return CheckReport(
        verdict=verdict,
        kind=kind,
        function=function,
        point=subject.start,
        entries=_entries(table, examined, faults, name),
        directions=_directions(examined),
        diagnoses=diagnoses,
        findings=tuple(findings),
        notices=(*session.ledger.notices, *notices),
        evaluations=session.ledger.evaluations - before,
        seconds=time.perf_counter() - began,
        renderer=check_text,
        sparsity=_sparsity(examined, faults, repeated, declared=declared),
    )


def _table_of(session: Session, function: str, kind: str, centre: Array) -> tuple[EntryTable | None, bool]:
    """The claim as a table of its entries, and whether a pattern was declared."""
    subject = session.subject
    m, n = centre.size, subject.layout.size
    pattern = subject.targets[function].pattern
    pattern = None if pattern is None or isinstance(pattern, str) else declared_pattern(pattern, m, n)
    stored = sparse_claim(session, function, kind)
    if stored is not None:
        return EntryTable.of(matrix_of(stored, m, n), pattern), pattern is not None
    claim, failure = claimed_matrix(session, function, kind, centre)
    if failure is not None:
        return None, False
    from scipy import sparse

    return EntryTable.of(sparse.csr_array(claim), pattern), pattern is not None


def _accuracy(session: Session, function: str, kind: str, rules: Rules) -> tuple[Accuracy, list[str]]:
    kinds = session.ledger.output_kinds.get(function, "float64"), session.ledger.claim_kinds.get((function, kind), "")
    precision = next((word for word in kinds if word in REL_TOL), "float64")
    unit = float(np.finfo(precision).eps / 2) if precision in REL_TOL else float(np.finfo(float).eps / 2)
    rel_tol = REL_TOL.get(precision, DEFAULT_REL_TOL) if rules.rel_tol is None else rules.rel_tol
    notices = []
    if precision in REL_TOL and rules.rel_tol is None:
        notices.append(
            f"values or claim come in single precision ({precision}), so the claim was judged to a relative "
            f"{REL_TOL[precision]:g} only; rel_tol=... asks for more"
        )
    return Accuracy(
        rel_tol=rel_tol, abs_tol=rules.abs_tol, unit_roundoff=unit, complex_step="complex step" in rules.witnesses
    ), notices


def _without_whole_numbers(table: EntryTable, integer: BoolArray) -> tuple[EntryTable, bool]:
    """The table without the columns of whole numbers, which have no derivative; and whether it had any."""
    if not integer.any():
        return table, False
    table.drop(integer[table.column])
    return table, True


def _repeated(table: EntryTable, faults: Faults) -> list[Repetition]:
    explained = np.zeros(len(table), bool)
    explained[faults.misplaced.ravel()] = True
    found: list[Repetition] = []
    for kind, at in (
        ("misplaced", faults.misplaced[:, 0]),
        ("missing", faults.missing[~explained[faults.missing]]),
        ("unused", faults.unused),
        ("wrong", faults.wrong[~explained[faults.wrong]]),
    ):
        found += repetitions(kind, table.row[at], table.column[at])[0]
    return found


def _verdict(examined: SparseExamined, faults: Faults) -> Verdict:
    table, whole = examined.table, ~examined.by_entry
    judged = table.verdict[examined.by_entry[table.row] | (table.verdict != UNDECIDED)]
    if faults.missing.size or (judged == REFUTED).any() or _unexplained(examined).any():
        return Verdict.REFUTED
    if (judged == UNDECIDED).any() or (whole & (examined.row_verdict != CONFIRMED)).any():
        return Verdict.UNDECIDED
    return Verdict.CONFIRMED if (judged == CONFIRMED).any() or whole.any() else Verdict.UNDECIDED


def _unexplained(examined: SparseExamined) -> BoolArray:
    """Rows that random directions refute, in which no entry at fault was found."""
    # Where entries of the row were never looked at (a budget), they may well be the ones at fault.
    unseen = np.zeros(examined.by_entry.size, bool)
    table = examined.table
    unseen[table.row[(table.verdict == UNDECIDED) & (table.reason != UNEXPLAINED)]] = True
    return examined.unexplained & ~(unseen & examined.by_entry)


def _floor(table: EntryTable, at: IntArray, accuracy: Accuracy, centre: Array, scale: Array) -> Array:
    rounding = accuracy.unit_roundoff * np.abs(centre[table.row[at]])
    return np.asarray(accuracy.abs_tol + ALLOWANCE * rounding / scale[table.column[at]])


def _entries(table: EntryTable, examined: SparseExamined, faults: Faults, name: Named) -> Entries:
    """The entries worth listing: all of a small claim, else what is not confirmed and a few that are."""
    looked = examined.by_entry[table.row] | (table.verdict != UNDECIDED)
    digits = digits_agreed(table.claim, table.value, table.bound)
    at = np.flatnonzero(looked)
    if at.size > LISTED_IN_FULL:
        told = np.zeros(len(table), bool)
        told[faults.unused], told[faults.missing] = True, True
        told |= looked & (table.verdict != CONFIRMED)
        others = np.flatnonzero(looked & ~told)
        least = others[np.argsort(digits[others], kind="stable")[:LEAST_AGREEING]]
        wanted = np.flatnonzero(told)
        wanted = wanted[np.argsort(-table.verdict[wanted], kind="stable")[:LISTED_MOST]]
        at = np.sort(np.concatenate([wanted, least]))
    return Entries(
        index=np.stack([table.row[at], table.column[at]], axis=1),
        name=tuple(name(int(i), int(j)) for i, j in zip(table.row[at], table.column[at], strict=True)),
        claim=table.claim[at],
        witness=table.value[at],
        bound=table.bound[at],
        digits=digits[at],
        verdict=tuple(_VERDICTS[int(verdict)] for verdict in table.verdict[at]),
        source=tuple(np.where(np.isfinite(table.value[at]), "finite difference", "").tolist()),
        reason=tuple(table.reason[at].tolist()),
    )


def _directions(examined: SparseExamined) -> DirectionChecks | None:
    """Each random direction by the row that fits it least."""
    if not examined.random:
        return None
    claims, witnesses, bounds, verdicts = [], [], [], []
    table = examined.table
    claimed = np.where(np.isfinite(table.claim), table.claim, 0.0)
    for seen, allowed in zip(examined.random, examined.tolerance, strict=True):
        claim = table.product(seen.row, claimed)
        with np.errstate(invalid="ignore", divide="ignore"):
            excess = (np.abs(claim - seen.value) - 3 * seen.bound) / np.where(allowed > 0, allowed, 1.0)
        refuted = np.isfinite(seen.bound) & (excess > 1)
        worst = int(np.where(np.isnan(excess), -np.inf, excess).argmax())
        claims.append(float(claim[worst]))
        witnesses.append(float(seen.value[worst]))
        bounds.append(float(seen.bound[worst]))
        with np.errstate(invalid="ignore"):
            confirmed = np.abs(claim - seen.value) + seen.bound <= allowed
        verdicts.append(
            Verdict.REFUTED if refuted.any() else Verdict.CONFIRMED if confirmed.all() else Verdict.UNDECIDED
        )
    return DirectionChecks(
        claim=np.array(claims),
        witness=np.array(witnesses),
        bound=np.array(bounds),
        verdict=tuple(verdicts),
        smallest_visible=examined.visible,
    )


def _sparsity(
    examined: SparseExamined, faults: Faults, repeated: list[Repetition], *, declared: bool
) -> SparsityChecks:
    table = examined.table

    def places(at: NDArray[Any]) -> NDArray[np.intp]:
        return np.stack([table.row[at], table.column[at]], axis=-1)

    whole = ~examined.by_entry
    verdicts = table.verdict[examined.by_entry[table.row] | (table.verdict != UNDECIDED)]
    unexplained = _unexplained(examined)
    settled = np.zeros(whole.size, bool)
    settled[table.row[table.verdict == REFUTED]] = True
    return SparsityChecks(
        shape=table.shape,
        declared=declared,
        stored=int(table.inside.sum()),
        groups=examined.groups,
        confirmed=int((verdicts == CONFIRMED).sum()),
        refuted=int((verdicts == REFUTED).sum()),
        undecided=int((verdicts == UNDECIDED).sum()),
        whole_rows=int(whole.sum()),
        whole_rows_confirmed=int((whole & (examined.row_verdict == CONFIRMED)).sum()),
        missing=places(faults.missing),
        unused=places(faults.unused),
        wrong=places(faults.wrong),
        misplaced=places(faults.misplaced).reshape(-1, 4),
        unexplained_rows=np.flatnonzero(unexplained),
        undecided_rows=np.flatnonzero(whole & ~unexplained & ~settled & (examined.row_verdict != CONFIRMED)),
        repetitions=tuple(repeated),
        smallest_visible=examined.visible,
    )
