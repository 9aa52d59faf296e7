"""The report on examined entries of a claim, whichever way they were chosen."""

from collections.abc import Callable

from gradcheck.checks.asked_again import asking
from gradcheck.checks.measure import Measure
from gradcheck.checks.notices import few_digits, left_out, raised
from gradcheck.claims.entries import diagnoses_of, entries_of
from gradcheck.claims.policy import Rules
from gradcheck.claims.repeated_answers import Repeated
from gradcheck.counsel.claim_findings import kinks_at_point, levels_at_point, mutation
from gradcheck.evaluation.pipeline import Session
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.finding import Finding
from gradcheck.records.report import CheckReport, Entries
from gradcheck.records.verdict import Verdict
from gradcheck.report.check_text import check_text


def told(
    session: Session,
    function: str,
    kind: str,
    repeated: Repeated,
    columns: IntArray,
    centre: Array,
    measure: Measure,
    rules: Rules,
    failure: Finding | None,
    *,
    outputs: tuple[int, ...] = (),
    more: Callable[[Entries], tuple[str, ...]] = lambda entries: (),
) -> CheckReport:
    """Entries with their verdicts, likely mistakes and findings; who asked for it fills in what it cost.

    Parameters
    ----------
    repeated : Repeated
        The examined entries, once the claim has answered again.
    columns : ndarray of int
        Which variables they belong to.
    failure : Finding or None
        Where the claim raised.
    outputs : tuple of int
        Shape of what the model returns, where all of the claim was looked at.
    more : callable
        Further notices on the entries.
    """
    subject, examined = session.subject, repeated.examined
    findings: list[Finding] = [failure] if failure else []
    findings += kinks_at_point(subject, function, examined.left, examined.right, columns)
    findings += levels_at_point(subject, function, examined.jumps, examined.stairs, columns)
    findings += mutation(subject, session.ledger)
    entries = entries_of(subject, function, kind, examined, columns)
    diagnoses = raised(failure, entries) if failure else repeated.diagnoses
    if not failure:
        diagnoses += diagnoses_of(
            subject,
            function,
            kind,
            examined,
            columns,
            measure.rel_tol,
            measure.abs_tol,
            outputs=outputs,
            values=centre,
            told=repeated.changed,
            ask=asking(session, function, kind, columns),
        )
    return CheckReport(
        verdict=Verdict.overall(list(entries.verdict)) if len(entries) else Verdict.CONFIRMED,
        kind=kind,
        function=function,
        point=subject.start,
        entries=entries,
        diagnoses=diagnoses,
        findings=tuple(findings),
        notices=(
            *session.ledger.notices,
            *left_out(subject),
            *few_digits(measure.precision, rules.rel_tol),
            *more(entries),
        ),
        renderer=check_text,
    )
