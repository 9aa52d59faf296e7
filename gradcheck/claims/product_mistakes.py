"""Likely mistakes behind a refuted product of the derivative with a vector."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.claims.identities import FACTOR, Broken
from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.naming import likely_mistakes
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.wording import listed, number

#: What the vector of each kind of product is called, and the product itself.
WORDS = {
    "jvp": ("v", "tangent", "J·v"),
    "vjp": ("w", "cotangent", "Jᵀ·w"),
    "hvp": ("v", "vector", "H·v"),
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Conduct:
    """How a product depends on its vector.

    Attributes
    ----------
    same : sequence of str
        Entries that are the same for the vector and its multiples.
    by_sign : sequence of str
        Entries that change with the sign of the vector alone.
    every : bool
        Whether these are all entries.
    broken : sequence of Broken
        Identities of linear maps that do not hold.
    """

    same: Sequence[str]
    by_sign: Sequence[str]
    every: bool
    broken: Sequence[Broken]


def product_mistakes(kind: str, units: Case | None, rest: Case | None, conduct: Conduct) -> tuple[Diagnosis, ...]:
    """Diagnoses of a refuted product.

    Parameters
    ----------
    kind : "jvp", "vjp" or "hvp"
    units : Case, optional
        The products with unit vectors, which make up the Jacobian (or Hessian) itself.
    rest : Case, optional
        Those with random vectors.
    conduct : Conduct
    """
    size = _indifferent(kind, conduct)
    if size is not None:
        return (size,)
    if units is not None and (side := _other_side(kind, units)) is not None:
        return (side,)
    wrong = units is not None and bool(units.refuted.any())
    bent = (_not_linear(kind, conduct, right=units is not None and not wrong),) if conduct.broken else ()
    if wrong and not any(broken.name == "zero vector" for broken in conduct.broken):
        assert units is not None
        return (*likely_mistakes(units), *bent)
    if bent:
        return bent
    if rest is None or not rest.refuted.any():
        return ()
    return likely_mistakes(rest)


def _indifferent(kind: str, conduct: Conduct) -> Diagnosis | None:
    if not conduct.same and not conduct.by_sign:
        return None
    v, called, product = WORDS[kind]
    where = "" if conduct.every else f" in {listed([*conduct.same, *conduct.by_sign])}"
    if conduct.same:
        seen = f"{kind}(x, {FACTOR}·{v}) returns the same as {kind}(x, {v}){where}: the {called} is ignored there"
    else:
        seen = f"{kind}(x, {FACTOR}·{v}) returns -1 times {kind}(x, {v}){where}: only the sign of the {called} is used"
    mend = {
        "vjp": "multiply what flows back by the incoming cotangent: w @ J, not the derivative alone",
        "jvp": "multiply by the tangent: J @ v, not the derivative alone",
        "hvp": "multiply by the vector: H @ v; if it was normalised, undo that in the result",
    }[kind]
    seen = seen if where else seen.replace(" is ignored there", " is ignored")
    return Diagnosis(
        code=DiagnosisCode.IGNORES_COTANGENT,
        text=f"{seen}; {product} is linear in it: {mend}.",
        entries=(*conduct.same, *conduct.by_sign),
    )


def _other_side(kind: str, units: Case) -> Diagnosis | None:
    """The product with the transpose, which a square Jacobian lets pass for its shape."""
    m, n = units.claim.shape
    if kind == "hvp" or m != n or m < 2 or not units.refuted.any():
        return None
    with np.errstate(invalid="ignore"):
        fits = np.abs(units.claim.T - units.value) <= np.fmax(units.slack, units.slack.T)
    if not fits.all():
        return None
    told = {"jvp": ("Jᵀ·v", "J·v", "J @ v"), "vjp": ("J·w", "Jᵀ·w", "J.T @ w")}[kind]
    text = f"this is {told[0]}, where {told[1]} is due, for all {n} unit vectors: return `{told[2]}`."
    return Diagnosis(code=DiagnosisCode.TRANSPOSED, text=text, entries=units.names(units.refuted))


def _not_linear(kind: str, conduct: Conduct, *, right: bool) -> Diagnosis:
    v, called, product = WORDS[kind]
    sides = "; ".join(_sides(kind, broken) for broken in conduct.broken)
    but = "it is right for unit vectors, but " if right else ""
    text = (
        f"{but}{product} must be linear in the {called} {v}, and this is not: {sides}. Look for a constant that is "
        f"added, a norm, an absolute value or a comparison of {v}."
    )
    return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=())


def _sides(kind: str, broken: Broken) -> str:
    v = WORDS[kind][0]
    what = {
        "scaling": f"{FACTOR} times {v} gives",
        "negation": f"-{v} gives",
        "sum": f"the sum of two {v} gives",
        "zero vector": "the zero vector gives",
    }[broken.name]
    return f"{what} {number(broken.left)} where {number(broken.right)} is due"
