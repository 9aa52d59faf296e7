"""Identities of claimed products, with names for the entries that break them."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.checks.measure import Measure
from gradcheck.checks.products_claimed import Claimed
from gradcheck.claims.identities import FACTOR, Broken, adjoint_pair, ignored, linearity
from gradcheck.records.arrays import Array

#: Random vectors that go into pairs.
PAIRED_MOST = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Contradiction:
    """A broken identity with the name of the entry that shows it, and where that stands: (row, column)."""

    broken: Broken
    name: str
    place: tuple[int, int]


def symbol(kind: str) -> str:
    """What the vector of a product is called."""
    return "w" if kind == "vjp" else "v"


def equation(kind: str, identity: str) -> str:
    """An identity of linear maps, as an equation."""
    v = symbol(kind)
    return {
        "scaling": f"{kind}({FACTOR}·{v}) = {FACTOR}·{kind}({v})",
        "negation": f"{kind}(-{v}) = -{kind}({v})",
        "sum": f"{kind}({v}1 + {v}2) = {kind}({v}1) + {kind}({v}2)",
        "zero vector": f"{kind}(0) = 0",
    }[identity]


def contradictions(claimed: Claimed, measure: Measure, name: Callable[[int], str]) -> list[Contradiction]:
    """Where a claimed product is not linear in its vector; `name` names the entries of a product.

    A claim that raised has another story to tell, one that was not asked has none.
    """
    if claimed.finding is not None or claimed.refused:
        return []
    first, second = claimed.random[:2]
    order = ("scaling", "negation", "sum", "zero vector")
    found = []
    for broken in linearity(first, second, claimed.probed, measure.slack):
        vector = claimed.vectors.judged + order.index(broken.name)
        place = (vector, broken.entry) if claimed.kind == "vjp" else (broken.entry, vector)
        text = f"{equation(claimed.kind, broken.name)} in {name(broken.entry)}"
        found.append(Contradiction(broken=broken, name=text, place=place))
    return found


def indifferent(claimed: Claimed, measure: Measure, name: Callable[[int], str]) -> tuple[list[str], list[str], bool]:
    """Entries of a product that do not change with the size of its vector, or with its sign alone, by name; and
    whether these are all entries that are not zero.
    """
    first, (scaled, negative) = claimed.random[0], claimed.probed[:2]
    same, by_sign = ignored(first, scaled, negative, measure.slack)
    every = bool(((same | by_sign) == (first != 0)).all())
    named = [[name(int(i)) for i in np.flatnonzero(mask)] for mask in (same, by_sign)]
    return named[0], named[1], every


def broken_pair(pushed: Claimed, pulled: Claimed, measure: Measure) -> Contradiction | None:
    """Where ⟨J·v, w⟩ = ⟨v, Jᵀ·w⟩ does not hold between two claims."""
    tangents, cotangents = (each.vectors.random[:PAIRED_MOST] for each in (pushed, pulled))
    found = adjoint_pair(tangents, pushed.random[:PAIRED_MOST], cotangents, pulled.random[:PAIRED_MOST], measure.slack)
    if found is None:
        return None
    broken, v, w = found
    place = pulled.vectors.units.size + w, pushed.vectors.units.size + v
    return Contradiction(
        broken=broken, name=f"⟨jvp(v), w⟩ = ⟨v, vjp(w)⟩ for random v {v + 1} and w {w + 1}", place=place
    )


def broken_symmetry(
    vectors: Array, products: Array, labels: Sequence[str], measure: Measure, *, first: int
) -> Contradiction | None:
    """Where ⟨u, H·v⟩ = ⟨v, H·u⟩ does not hold between random vectors (r, n) and their products (r, n)."""
    found = adjoint_pair(vectors, products, vectors, products, measure.slack)
    if found is None:
        return None
    broken, u, v = found
    return Contradiction(
        broken=broken, name=f"⟨u, H·v⟩ = ⟨v, H·u⟩, u: {labels[v]}, v: {labels[u]}", place=(first + v, first + u)
    )
