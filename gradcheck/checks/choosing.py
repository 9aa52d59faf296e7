"""Which way a claim is checked: by its kind, and by its size."""

from gradcheck.checks.directional import checked_directions
from gradcheck.checks.entrywise import checked_entries
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


#: Gradients with more entries than this are looked at along random directions, unless the caller wants all entries.
ENTRIES_MOST = 1000


def checked_claim(session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int) -> CheckReport:
    """The report on one claim of one function; `before` evaluations were spent on others."""
    if kind == "gradient" and centre.size == 1 and _along_directions(session, rules):
        return checked_directions(session, function, kind, centre, rules, before)
    return checked_entries(session, function, kind, centre, rules, before)


def _along_directions(session: Session, rules: Rules) -> bool:
    """Whether a gradient is checked along directions: as the caller says, or by its size."""
    if rules.directions is None:
        return session.subject.layout.size > ENTRIES_MOST and "differences" in rules.witnesses
    return rules.directions != "all"
