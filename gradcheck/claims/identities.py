"""What holds of every right product with a vector, whatever the model: to see it broken needs no value of the model.

A product is linear in its vector, and nothing for none; ⟨J·v, w⟩ = ⟨v, Jᵀ·w⟩; a Hessian is symmetric.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, BoolArray

#: By what the first vector is multiplied: no power of two, which scales floating-point numbers without rounding.
FACTOR = -2.7
#: Units in the last place of the largest term that honest code may lose where terms cancel.
CANCELLATION = 1e6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Broken:
    """An identity that a claim breaks, with the entry that breaks it most.

    Attributes
    ----------
    name : str
        Of the identity: ``"scaling"``, ``"negation"``, ``"sum"``, ``"zero vector"``, ``"adjoint pair"`` or
        ``"symmetry"``.
    left, right, allowed : float
        Both sides in that entry, and by how much rounding may have them differ.
    entry : int
    entries : int
        How many entries break it.
    """

    name: str
    left: float
    right: float
    allowed: float
    entry: int
    entries: int


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Slack:
    """By how much two sides of an identity may differ: what was asked for, and rounding where terms cancel."""

    rel_tol: float
    abs_tol: float
    unit_roundoff: float

    def of(self, *terms: Array) -> Array:
        """(q,): for sides that are made of these terms (q,) each."""
        sizes = np.array([np.where(np.isfinite(term), np.abs(term), 0.0) for term in terms])
        largest = sizes.max(initial=0.0)
        allowed: Array = self.abs_tol + self.rel_tol * sizes.sum(axis=0) + CANCELLATION * self.unit_roundoff * largest
        return allowed


def probes(first: Array, second: Array) -> Array:
    """(4, p): the vectors whose products `linearity` compares with those of the first and the second."""
    return np.stack([FACTOR * first, -first, first + second, np.zeros_like(first)])


def linearity(first: Array, second: Array, probed: Array, slack: Slack) -> list[Broken]:
    """Which identities of a linear map the products (q,) of two vectors and of their `probes` (4, q) break."""
    scaled, negative, summed, nothing = probed
    sides = (
        ("scaling", scaled, FACTOR * first, slack.of(scaled, FACTOR * first)),
        ("negation", negative, -first, slack.of(negative, first)),
        ("sum", summed, first + second, slack.of(summed, first, second)),
    )
    found = [broken for name, *rest in sides if (broken := _broken(name, *rest))]
    wrong = nothing != 0  # NaN as well
    if wrong.any():
        entry = int(np.argmax(np.where(wrong, np.abs(np.nan_to_num(nothing, nan=np.inf)), -1.0)))
        found.append(
            Broken(
                name="zero vector",
                left=float(nothing[entry]),
                right=0.0,
                allowed=0.0,
                entry=entry,
                entries=int(wrong.sum()),
            )
        )
    return found


def _broken(name: str, left: Array, right: Array, allowed: Array) -> Broken | None:
    with np.errstate(invalid="ignore"):
        gap = np.abs(left - right)
        beyond = gap > allowed  # a side that is not finite is a matter for the witness
    if not beyond.any():
        return None
    entry = int(np.argmax(np.where(beyond, gap / np.where(allowed > 0, allowed, 1.0), -1.0)))
    return Broken(
        name=name,
        left=float(left[entry]),
        right=float(right[entry]),
        allowed=float(allowed[entry]),
        entry=entry,
        entries=int(beyond.sum()),
    )


def ignored(first: Array, scaled: Array, negative: Array, slack: Slack) -> tuple[BoolArray, BoolArray]:
    """Entries (q,) that are the same for a vector and for its multiple: of both signs, or of one sign only."""
    with np.errstate(invalid="ignore"):
        seen = np.abs(first) > slack.of(first, scaled)
        same = (
            seen & (np.abs(scaled - first) <= slack.of(first, scaled)) & (np.abs(negative - first) <= slack.of(first))
        )
        by_sign = (
            seen & (np.abs(scaled + first) <= slack.of(first, scaled)) & (np.abs(negative + first) <= slack.of(first))
        )
    return np.asarray(same), np.asarray(by_sign)


def adjoint_pair(
    tangents: Array, pushed: Array, cotangents: Array, pulled: Array, slack: Slack
) -> tuple[Broken, int, int] | None:
    """Whether ⟨J·v, w⟩ = ⟨v, Jᵀ·w⟩ for all pairs of some tangents (k, n) and cotangents (r, m).

    Parameters
    ----------
    tangents, pushed : ndarray, shapes (k, n), (k, m)
        v and J·v.
    cotangents, pulled : ndarray, shapes (r, m), (r, n)
        w and Jᵀ·w.
    slack : Slack

    Returns
    -------
    (Broken, int, int) or None
        The worst pair, and which tangent and cotangent it is.
    """
    with np.errstate(invalid="ignore", over="ignore"):
        left, right = pushed @ cotangents.T, tangents @ pulled.T
        terms = np.abs(pushed) @ np.abs(cotangents).T, np.abs(tangents) @ np.abs(pulled).T
        allowed = np.array(
            [[slack.of(a[None], b[None])[0] for a, b in zip(*pair, strict=True)] for pair in zip(*terms, strict=True)]
        )
    broken = _broken("adjoint pair", left.ravel(), right.ravel(), allowed.ravel())
    if broken is None:
        return None
    return broken, *divmod(broken.entry, len(cotangents))


def symmetry(matrix: Array, typical: Array, slack: Slack) -> tuple[BoolArray, Array]:
    """Places (n, n) at which a Hessian differs from its transpose, and by how much it may.

    `typical` (n,) makes entries of different units comparable.
    """
    unit = np.outer(typical, typical)
    with np.errstate(invalid="ignore", over="ignore"):
        largest = np.max(np.where(np.isfinite(matrix), np.abs(matrix) * unit, 0.0), initial=0.0)
        pair = np.abs(matrix) + np.abs(matrix.T)
        allowed = slack.abs_tol + slack.rel_tol * pair + CANCELLATION * slack.unit_roundoff * largest / unit
        apart: BoolArray = np.abs(matrix - matrix.T) > allowed
    return apart, allowed


def named(found: Sequence[Broken]) -> tuple[str, ...]:
    """Names of broken identities, each once."""
    return tuple(dict.fromkeys(broken.name for broken in found))
