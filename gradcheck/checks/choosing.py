"""Which way a claim is checked: by its kind, and by its size."""

from dataclasses import replace

from gradcheck.checks.automatic_claims import with_trials
from gradcheck.checks.combined import with_broken_pair
from gradcheck.checks.directional import checked_directions
from gradcheck.checks.entrywise import checked_entries
from gradcheck.checks.identities import broken_pair
from gradcheck.checks.measure import measure_of
from gradcheck.checks.products import checked_product
from gradcheck.checks.products_claimed import Claimed
from gradcheck.checks.second_order import checked_second_order
from gradcheck.checks.sparse import checked_jointly, goes_by_joint_moves
from gradcheck.checks.with_value import with_value
from gradcheck.claims.policy import Rules
from gradcheck.evaluation.pipeline import Session
from gradcheck.records.arrays import Array
from gradcheck.records.report import CheckReport
from gradcheck.records.verdict import Verdict

#: First derivatives, in the order in which a confirmed one serves second derivatives as a witness.
FIRST = ("gradient", "value_and_gradient", "jacobian")
PRODUCTS = ("jvp", "vjp")
SECOND = ("hessian", "hvp")


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
    for name in session.subject.targets:
        found = _of_function(session, name, centres[name], rules, before)
        reports += found
        # The values at the point itself are counted with the first claim that needs them.
        before = session.ledger.evaluations if found else before
    return reports


#: Gradients with more entries than this are looked at along random directions, unless the caller wants all entries.
ENTRIES_MOST = 1000


def _of_function(session: Session, function: str, centre: Array, rules: Rules, before: int) -> list[CheckReport]:
    """Reports on all claims of one function, in the order in which they were claimed.

    First derivatives are looked at first: a confirmed one is the witness of second ones.
    """
    claims = session.subject.targets[function].claims
    reports: dict[str, CheckReport] = {}
    products: dict[str, Claimed] = {}
    for kind in (kind for kind in (*FIRST, *PRODUCTS, *SECOND) if kind in claims):
        if kind in SECOND:
            confirmed = next((k for k in FIRST if k in reports and reports[k].verdict == Verdict.CONFIRMED), None)
            reports[kind], products[kind] = checked_second_order(
                session, function, kind, centre, rules, before, confirmed
            )
        elif kind in PRODUCTS:
            reports[kind], products[kind] = checked_product(session, function, kind, centre, rules, before)
        else:
            reports[kind] = checked_claim(session, function, kind, centre, rules, before)
        before = session.ledger.evaluations
    _hold_pairs(session, function, rules, reports, products)
    return [reports[kind] for kind in claims]


def checked_claim(session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int) -> CheckReport:
    """The report on one claimed first derivative of a function; `before` evaluations were spent on others."""
    if goes_by_joint_moves(session, function, kind, centre, rules):
        jointly = checked_jointly(session, function, kind, centre, rules, before)
        if jointly is not None:
            return jointly
    along = kind != "jacobian" and centre.size == 1 and _along_directions(session, rules)
    report = (checked_directions if along else checked_entries)(session, function, kind, centre, rules, before)
    if kind == "value_and_gradient":
        return with_value(session, function, centre, rules, report)
    return with_trials(session, report, function, kind, centre, rules)


def _hold_pairs(
    session: Session, function: str, rules: Rules, reports: dict[str, CheckReport], products: dict[str, Claimed]
) -> None:
    """⟨J·v, w⟩ = ⟨v, Jᵀ·w⟩ where both products are claimed: needs nothing but what they gave.

    Where one of the two is refuted already, the pair cannot hold, and that says nothing about the other.
    """
    if any(kind in reports and reports[kind].verdict == Verdict.REFUTED for kind in PRODUCTS):
        return
    if not {"jvp", "vjp"} <= products.keys() or any(products[kind].finding for kind in PRODUCTS):
        return
    measures = [measure_of(session, function, kind, rules) for kind in PRODUCTS]
    found = broken_pair(products["jvp"], products["vjp"], max(measures, key=lambda each: each.unit_roundoff))
    if found is not None:
        reports["vjp"] = with_broken_pair(reports["vjp"], found)
        return
    told = "⟨jvp(v), w⟩ = ⟨v, vjp(w)⟩ holds for random v and w"
    reports["vjp"] = replace(reports["vjp"], notices=(*reports["vjp"].notices, told), text="")


def _along_directions(session: Session, rules: Rules) -> bool:
    """Whether a gradient is checked along directions: as the caller says, or by its size."""
    if rules.directions is None:
        return session.subject.layout.size > ENTRIES_MOST and "differences" in rules.witnesses
    return rules.directions != "all"
