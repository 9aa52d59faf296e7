"""Likely mistakes behind a refuted Hessian: those that a matrix of second derivatives invites, then the usual ones."""

from dataclasses import replace

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.naming import likely_mistakes
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed, number

#: Eigenvalues below this share of the largest are zero; a matrix of one larger eigenvalue is an outer product.
NEGLIGIBLE = 1e-7
#: Share of the entries that are wrong where another matrix stands in place of the Hessian.
MOSTLY = 0.6


def hessian_mistakes(case: Case) -> tuple[Diagnosis, ...]:
    """Diagnoses of a refuted Hessian (n, n); each explains what it names, what nothing explains is said."""
    for family in (_one_triangle, _outer_product, _factor_on_a_part):
        found = family(case)
        if found is not None:
            return (found,)
    told = _usual(case)
    unknown = [diagnosis for diagnosis in told if diagnosis.code == DiagnosisCode.UNKNOWN]
    part = _positive_part(case) if unknown else None
    if part is None:
        return told
    return (*(diagnosis for diagnosis in told if diagnosis.code != DiagnosisCode.UNKNOWN), part)


def _usual(case: Case) -> tuple[Diagnosis, ...]:
    """The usual mistakes. Of a symmetric claim they are looked for in one triangle: that both sides of the diagonal are
    off by the same factor proves nothing.
    """
    n = len(case.claim)
    lower = np.tril(np.ones((n, n), bool), -1)
    if not np.isfinite(case.claim).all() or not _is_symmetric(case.claim):
        return likely_mistakes(case)
    across = {case.name(i, j): case.name(j, i) for i in range(n) for j in range(i + 1, n)}
    told = likely_mistakes(replace(case, refuted=case.refuted & ~lower))
    return tuple(
        replace(each, entries=(*each.entries, *(across[name] for name in each.entries if name in across)))
        for each in told
    )


def _one_triangle(case: Case) -> Diagnosis | None:
    """One triangle is right, the other is zero throughout."""
    n = len(case.claim)
    for name, zeros, mend in (
        ("upper", np.tril(np.ones((n, n), bool), -1), "H + numpy.triu(H, 1).T"),
        ("lower", np.triu(np.ones((n, n), bool), 1), "H + numpy.tril(H, -1).T"),
    ):
        filled = (case.claim[zeros.T] != 0).any()
        if filled and (case.claim[zeros] == 0).all() and case.refuted[zeros].any() and not case.refuted[~zeros].any():
            text = (
                f"only the {name} triangle is filled, and it is right; the other one is zero, while a Hessian is "
                f"symmetric: return `{mend}`."
            )
            return Diagnosis(code=DiagnosisCode.ZERO_ENTRY, text=text, entries=case.names(case.refuted & zeros))
    return None


def _outer_product(case: Case) -> Diagnosis | None:
    """The claim is a vector times itself, the Hessian is not."""
    claim = case.claim
    if len(claim) < 2 or not np.isfinite(claim).all() or not _is_symmetric(claim) or not _known(case):
        return None
    if _rank(claim) != 1 or _rank(case.value) == 1 or np.count_nonzero(np.diag(claim)) < 2:
        return None
    if case.refuted.mean() < MOSTLY:
        return None  # a right Hessian with one wrong entry may be of rank one, too
    text = (
        "the claim is the outer product of one vector with itself, g·gᵀ, and the Hessian is not: a product of first "
        "derivatives approximates it at best; the second derivatives themselves are missing."
    )
    return Diagnosis(code=DiagnosisCode.MISSING_PATH, text=text, entries=case.names(case.refuted))


def _factor_on_a_part(case: Case) -> Diagnosis | None:
    """All entries on the diagonal, or all beside it, are off by one factor, and nothing else is wrong."""
    n = len(case.claim)
    diagonal = np.eye(n, dtype=bool)
    if n < 2:
        return None
    for part, called in ((diagonal, "on the diagonal"), (~diagonal, "beside the diagonal")):
        known = part & (case.value != 0) & np.isfinite(case.value) & (np.abs(case.value) > 3 * case.bound)
        if case.refuted[~part].any() or not case.refuted[known].all() or known.sum() < 2:
            continue
        factor = _one_factor(case, known)
        if factor is None:
            continue
        hint = _hint(factor, on_diagonal=part is diagonal)
        text = (
            f"all {int(known.sum())} entries {called} are {number(factor)} times the second derivatives, and all "
            f"others are right: {hint}."
        )
        code = DiagnosisCode.SIGN_FLIPPED if abs(factor + 1) < 1e-6 else DiagnosisCode.CONSTANT_FACTOR
        return Diagnosis(code=code, text=text, entries=case.names(case.refuted))
    return None


def _one_factor(case: Case, where: BoolArray) -> float | None:
    with np.errstate(invalid="ignore", divide="ignore"):
        factor = float(np.median((case.claim / case.value)[where]))
        fits = np.abs(case.claim - factor * case.value) <= case.slack * max(1.0, abs(factor))
    return factor if np.isfinite(factor) and factor not in (0.0, 1.0) and fits[where].all() else None


def _hint(factor: float, *, on_diagonal: bool) -> str:
    if abs(factor + 1) < 1e-6:
        return "flip their sign"
    if on_diagonal and abs(factor - 2) < 1e-6:
        return "adding a matrix to its own transpose counts the diagonal twice"
    if not on_diagonal and abs(factor - 2) < 1e-6:
        return "a mixed term that is filled in on both sides must not be doubled as well"
    if not on_diagonal and abs(factor - 0.5) < 1e-6:
        return "a mixed term belongs whole on both sides of the diagonal"
    return f"look for a missing factor {number(1 / factor)}"


def _positive_part(case: Case) -> Diagnosis | None:
    """The claim has curvature of one sign only, and the Hessian has not: what products of first derivatives give."""
    claim, value = case.claim, case.value
    if len(claim) < 2 or not np.isfinite(claim).all() or not _is_symmetric(claim) or not _known(case):
        return None
    sign = 1.0 if np.trace(claim) >= 0 else -1.0
    claimed, true = sign * _eigenvalues(claim), sign * _eigenvalues(value)
    if claimed.min() < -NEGLIGIBLE * np.abs(claimed).max():
        return None
    indefinite = true.min() < -NEGLIGIBLE * np.abs(true).max()
    deficient = _rank(claim) < _rank(value)
    if not (indefinite or deficient):
        return None
    seen = (
        f"has curvature of one sign only, while the Hessian has both (eigenvalues {number(float(true.min()) * sign)} "
        f"and {number(float(true.max()) * sign)})"
        if indefinite
        else f"has rank {_rank(claim)} only, while the Hessian has rank {_rank(value)}"
    )
    text = (
        f"{listed(case.names(case.refuted))}: the claim is symmetric and {seen}: it fits an approximation from "
        "products of first derivatives (Gauss-Newton, JᵀJ), which leaves out the second derivatives of what is squared."
    )
    return Diagnosis(code=DiagnosisCode.MISSING_PATH, text=text, entries=case.names(case.refuted))


def scattered(case: Case, advice: str) -> Diagnosis:
    """A mistake that random directions show: one factor for all of them, or no more than that it is there.

    `advice` says what would show in which entries.
    """
    names = case.names(case.refuted)
    factor = _one_factor(case, case.refuted) if case.refuted.sum() > 1 else None
    if factor is None:
        text = (
            f"{case.refuted.sum()} of {case.refuted.size} products with random vectors are wrong, which does not show "
            f"in which entries: {advice}."
        )
        return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=names)
    flipped = abs(factor + 1) < 1e-6
    mend = "look for a lost minus" if flipped else f"look for a missing factor {number(1 / factor)}"
    text = f"all wrong products are {number(factor, 6)} times those with the second derivatives; {mend}."
    code = DiagnosisCode.SIGN_FLIPPED if flipped else DiagnosisCode.CONSTANT_FACTOR
    return Diagnosis(code=code, text=text, entries=names)


def _known(case: Case) -> bool:
    return bool(np.isfinite(case.value).all() and np.isfinite(case.bound).all())


def _is_symmetric(matrix: Array) -> bool:
    return bool(np.allclose(matrix, matrix.T, rtol=1e-9, atol=1e-12 * float(np.abs(matrix).max(initial=0.0))))


def _eigenvalues(matrix: Array) -> Array:
    """Of the matrix with its variables in units that even out the diagonal; their signs are those of the matrix."""
    size = np.sqrt(np.abs(np.diag(matrix)))
    size = np.where(size > 0, size, 1.0)
    return np.asarray(np.linalg.eigvalsh((matrix + matrix.T) / 2 / np.outer(size, size)))


def _rank(matrix: Array) -> int:
    values = np.abs(_eigenvalues(matrix))
    return int((values > NEGLIGIBLE * values.max(initial=0.0)).sum())
