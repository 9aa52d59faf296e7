"""Which way a claim is checked: by its kind, and by its size."""

from gradcheck.checks.entrywise import checked_entries
from gradcheck.checks.sparse import checked_jointly, goes_by_joint_moves
from gradcheck.claims.policy import Rules
from gradcheck.evaluation.pipeline import Session
from gradcheck.records.arrays import Array
from gradcheck.records.report import CheckReport


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
    if goes_by_joint_moves(session, function, kind, centre, rules):
        report = checked_jointly(session, function, kind, centre, rules, before)
        if report is not None:
            return report
    return checked_entries(session, function, kind, centre, rules, before)
