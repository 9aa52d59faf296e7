"""The check of claimed second derivatives: a Hessian, or Hessian-vector products.

Where a gradient is claimed as well and was confirmed, its differences are the witness: they are as exact as first
derivatives, and cost one evaluation of the gradient where function values need many. Else second differences of the
values decide. Where there are many variables the Hessian is looked at along a few random directions.
"""

import time

import numpy as np

from gradcheck.checks.confirmed_slopes import FIRST, believed_slopes
from gradcheck.checks.curvature import Curvatures, Seen
from gradcheck.checks.curvature_by_slopes import by_slopes
from gradcheck.checks.curvature_by_values import VALUES_MOST, by_values
from gradcheck.checks.entrywise import _judgeable
from gradcheck.checks.identities import Contradiction, broken_symmetry, contradictions, indifferent
from gradcheck.checks.measure import measure_of
from gradcheck.checks.parts import case_of, report_of, with_contradictions
from gradcheck.checks.products import tried
from gradcheck.checks.products_claimed import Claimed, claimed_products
from gradcheck.checks.vectors import UNITS_MOST, vectors_of
from gradcheck.checks.wrong_rows import wrong_rows
from gradcheck.claims.examination import DIFFERENCES
from gradcheck.claims.hessian_mistakes import hessian_mistakes, scattered
from gradcheck.claims.identities import Broken, symmetry
from gradcheck.claims.mistakes.naming import likely_mistakes
from gradcheck.claims.policy import Rules
from gradcheck.claims.product_mistakes import Conduct, product_mistakes
from gradcheck.errors import UsageError
from gradcheck.evaluation.pipeline import Session
from gradcheck.records.arrays import Array
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import number

#: Identities that are about the symmetry of a Hessian; the others are about products.
SYMMETRY = ("symmetry", "adjoint pair")


def checked_second_order(
    session: Session, function: str, kind: str, centre: Array, rules: Rules, before: int, confirmed: str | None
) -> tuple[CheckReport, Claimed]:
    """The report on a claimed ``"hessian"`` or ``"hvp"``, and what the claim gave.

    Parameters
    ----------
    confirmed : str, optional
        The kind of a first derivative of the same function that was confirmed.

    Raises
    ------
    UsageError
        If differences are not among the witnesses.
    """
    began = time.perf_counter()
    if DIFFERENCES not in rules.witnesses:
        raise UsageError(f"witnesses is {rules.witnesses!r}; second derivatives need 'differences' among them")
    able = _judgeable(session.subject)
    slopes, notices = believed_slopes(session, function, confirmed, able, rules)
    most = VALUES_MOST if slopes is None else UNITS_MOST
    vectors = vectors_of(session.subject.domain.scale, able, rules, units_most=most)
    claimed = claimed_products(session, function, kind, vectors)
    measures = [measure_of(session, function, each, rules) for each in (kind, *([slopes.kind] if slopes else []))]
    curvatures = Curvatures(
        session=session,
        function=function,
        kind=kind,
        centre=centre,
        able=able,
        rules=rules,
        claimed=claimed,
        measure=max(measures, key=lambda each: each.unit_roundoff),
    )
    found = _contradictions(curvatures)
    seen = by_values(curvatures) if slopes is None else by_slopes(curvatures, slopes, contradicted=bool(found))
    entries = with_contradictions(seen.entries, found)
    wrong = Verdict.REFUTED in entries.verdict and claimed.finding is None
    report = report_of(
        session,
        function,
        kind,
        entries,
        _diagnoses(curvatures, seen, found) if wrong else (),
        curvatures.measure,
        failure=claimed.finding,
        notices=(*notices, *seen.notices, *_held(curvatures, found)),
        directions=seen.directions,
        before=before,
        began=began,
    )
    return report, claimed


# --- what a claim says against itself --------------------------------------------------------------------------------


def _contradictions(look: Curvatures) -> list[Contradiction]:
    layout, claimed, measure = look.layout, look.claimed, look.measure
    found: list[Contradiction] = []
    if look.kind == "hvp":
        found += contradictions(claimed, measure, lambda entry: layout.name(entry % layout.size))
    if look.outputs > 1:
        return found
    if claimed.vectors.units.size:
        return [*found, *_asymmetry(look)]
    random, products = claimed.vectors.random, claimed.random
    labels = claimed.vectors.labels((), "random v")
    pair = broken_symmetry(random, products, labels, measure, first=layout.size)
    return [*found, *([pair] if pair else [])]


def _asymmetry(look: Curvatures) -> list[Contradiction]:
    """The place where a Hessian differs most from its transpose."""
    layout, able = look.layout, look.able
    matrix = look.claimed.units[:, able].T
    apart, allowed = symmetry(matrix, look.session.subject.domain.scale[able], look.measure.slack)
    if not apart.any():
        return []
    with np.errstate(invalid="ignore", divide="ignore"):
        worst = int(np.argmax(np.where(apart, np.abs(matrix - matrix.T) / np.where(allowed > 0, allowed, 1.0), -1.0)))
    i, j = sorted(divmod(worst, able.size))
    broken = Broken(
        name="symmetry",
        left=float(matrix[i, j]),
        right=float(matrix[j, i]),
        allowed=float(allowed[i, j]),
        entry=worst,
        entries=int(apart.sum()) // 2,
    )
    one, other = layout.name(int(able[i])), layout.name(int(able[j]))
    return [
        Contradiction(broken=broken, name=f"H[{one}, {other}] = H[{other}, {one}]", place=(int(able[i]), int(able[j])))
    ]


def _held(look: Curvatures, found: list[Contradiction]) -> tuple[str, ...]:
    """Which vectors were tried, and which identities held."""
    linear = not any(each.broken.name not in SYMMETRY for each in found)
    held = look.outputs == 1 and not any(each.broken.name in SYMMETRY for each in found)
    if look.claimed.finding is not None or not np.isfinite(look.claimed.products).all():
        return ()
    if look.kind == "hessian":
        whole = look.claimed.vectors.units.size
        told = "the claimed Hessian is symmetric" if whole else "⟨u, H·v⟩ = ⟨v, H·u⟩ holds for random u and v"
        return (told,) if held and look.able.size > 1 else ()
    text = tried("hvp", look.claimed.vectors, linear=linear)
    return (text + ("; ⟨u, H·v⟩ = ⟨v, H·u⟩ holds" if held else ""),)


# --- likely mistakes -------------------------------------------------------------------------------------------------


def _diagnoses(look: Curvatures, seen: Seen, found: list[Contradiction]) -> tuple[Diagnosis, ...]:
    units = None if seen.matrix is None else case_of(seen.matrix, seen.names, look.measure)
    rest = None if seen.rest is None else case_of(seen.rest, seen.rest_names, look.measure)
    if seen.narrowed is not None and seen.few:
        return likely_mistakes(case_of(seen.narrowed, seen.names, look.measure, whole=False))
    conduct = _conduct(look, [each.broken for each in found])
    if seen.wrong is not None and not conduct.same and not conduct.by_sign and not conduct.broken:
        told = seen.names[seen.narrowed.verdict == Verdict.REFUTED] if seen.narrowed is not None else ()
        return (wrong_rows(seen.wrong, seen.narrowed, tuple(told), found),)
    indifferent_to_size = bool(conduct.same or conduct.by_sign)
    if units is not None and look.outputs == 1 and units.refuted.any() and not indifferent_to_size:
        return hessian_mistakes(units)
    if units is None and rest is not None and rest.refuted.any() and not indifferent_to_size and not conduct.broken:
        return (scattered(rest, _advice(look)),)
    return product_mistakes("hvp", units, rest, conduct) or tuple(_asymmetric(each) for each in found)


def _advice(look: Curvatures) -> str:
    """What would show which second derivatives are wrong; nothing that was done already."""
    everything = "ask for all entries with directions='all'"
    gradient = FIRST.intersection(look.session.subject.targets[look.function].claims)
    return everything if gradient else f"claim a gradient in the same call, or {everything}"


def _asymmetric(found: Contradiction) -> Diagnosis:
    """The story of a claim that only contradicts itself."""
    left, right = number(found.broken.left), number(found.broken.right)
    text = f"a Hessian is symmetric, and this is not: {found.name} fails, {left} against {right}."
    return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=(found.name,))


def _conduct(look: Curvatures, broken: list[Broken]) -> Conduct:
    linear = [each for each in broken if each.name not in SYMMETRY]
    if look.kind == "hessian":
        return Conduct(same=(), by_sign=(), every=False, broken=linear)
    layout = look.layout
    same, by_sign, every = indifferent(look.claimed, look.measure, lambda i: layout.name(i % layout.size))
    return Conduct(same=same, by_sign=by_sign, every=every, broken=linear)
