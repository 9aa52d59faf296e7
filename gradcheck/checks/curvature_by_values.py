"""Claimed second derivatives held against second differences of the values."""

from dataclasses import replace

import numpy as np

from gradcheck.checks.along import places, shared_room
from gradcheck.checks.confirmed_slopes import FIRST
from gradcheck.checks.curvature import Curvatures, Seen
from gradcheck.checks.parts import entries_from, stacked
from gradcheck.claims.desk import Examined
from gradcheck.claims.second_examination import FEW_DIGITS, SUMMED, Curvature, examine_second, judged
from gradcheck.evaluation.conduct import addressed, conduct_one
from gradcheck.evaluation.substituted import substituted
from gradcheck.records.arrays import Array
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.steps import Room, room_along
from gradcheck.wording import count, number

#: Variables up to which all entries are looked at: a pair of them takes about 16 evaluations.
VALUES_MOST = 16
#: Why a product is confirmed that second differences alone leave open.
FOLLOWS = "follows from the entries, which are confirmed and in which the product is linear"
#: Directions that are looked along where there are more.
DIRECTIONS = 5


def by_values(curvatures: Curvatures) -> Seen:
    """All entries, and what follows from them for random vectors; or a few random directions where there are many."""
    if not curvatures.claimed.vectors.units.size:
        return _along_directions(curvatures)
    subject, able = curvatures.session.subject, curvatures.able
    whole = able.size == subject.layout.size
    base = subject.start if whole else np.zeros(able.size)
    rows = None if whole else np.eye(subject.layout.size)[able]
    room = room_along(subject.start, able, subject.domain)
    units, products = [], []
    for output in range(curvatures.outputs):
        here = output * subject.layout.size + able
        claim = curvatures.claimed.units.T[here]
        examined, curvature = _examined(curvatures, base, claim, room, output, rows)
        units.append(examined)
        if curvatures.kind == "hvp":
            products.append(_through(curvatures, curvature, examined, curvatures.claimed.random.T[here]))
    return curvatures.seen([stacked(part) for part in (units, products) if part])


def _examined(
    curvatures: Curvatures,
    base: Array,
    claim: Array,
    room: Room,
    output: int,
    rows: Array | None,
    terms: Array | None = None,
) -> tuple[Examined, Curvature]:
    """The claimed Hessian of one output, of the variables at hand or of ways along rows."""
    measure = curvatures.measure
    inquiry = examine_second(
        base,
        claim,
        room,
        curvatures.centre[[output]],
        rel_tol=measure.rel_tol,
        abs_tol=measure.abs_tol,
        unit_roundoff=measure.unit_roundoff,
        terms=terms,
    )
    chosen = np.array([output]) if curvatures.outputs > 1 else None
    inquiry = substituted(inquiry, curvatures.session.subject.start, rows=rows, outputs=chosen)
    return conduct_one(addressed(inquiry, function=curvatures.function), curvatures.session.gate)


def _through(curvatures: Curvatures, curvature: Curvature, units: Examined, claim: Array) -> Examined:
    """Products with random vectors (k, r), which rest on the same second differences as the entries (k, k).

    Where the claim is just as linear as it should be, its entries decide: a product is confirmed with its row of
    entries, and not refuted without it. Else the verdict would depend on how much cancels for which vector.
    """
    rows = curvatures.claimed.vectors.random[:, curvatures.able]
    value, bound, tolerance = curvature.through(rows)
    reasons = np.full(value.shape, "", dtype=object)
    products = judged(claim, value, bound, tolerance, reasons, curvature.witness.source)
    slack = curvatures.measure.slack
    with np.errstate(invalid="ignore", over="ignore"):
        combined = units.claim @ rows.T
        allowed = np.stack([slack.of(column) for column in combined.T], axis=1)
        linear = np.abs(products.claim - combined) <= allowed
    known = (units.verdict == Verdict.REFUTED).any(axis=1, keepdims=True)
    doubted = (products.verdict == Verdict.REFUTED) & linear & ~known
    right = (units.verdict == Verdict.CONFIRMED).all(axis=1, keepdims=True)
    follows = (products.verdict != Verdict.CONFIRMED) & linear & right
    verdict, reason = products.verdict.copy(), products.reason.copy()
    verdict[doubted], reason[doubted] = Verdict.UNDECIDED, FEW_DIGITS
    verdict[follows], reason[follows] = Verdict.CONFIRMED, FOLLOWS
    return replace(products, verdict=verdict, reason=reason)


def _along_directions(curvatures: Curvatures) -> Seen:
    """⟨u, H·v⟩ for a few random directions, which costs the same for any number of variables."""
    n, outputs, directions = curvatures.layout.size, curvatures.outputs, curvatures.rules.directions
    random = curvatures.claimed.vectors.random
    rows = random[: directions if isinstance(directions, int) else DIRECTIONS]
    room = shared_room(curvatures.session.subject, rows)
    parts, allowed = [], []
    for output in range(outputs):
        products = curvatures.claimed.random[: len(rows), output * n : (output + 1) * n]
        with np.errstate(invalid="ignore", over="ignore"):
            claim = rows @ products.T
            # Both ways to sum the terms of ⟨u, H·v⟩ = ⟨v, H·u⟩; what cancels in one of them cancels in the claim too.
            squares = np.nan_to_num(rows**2 @ (products**2).T, posinf=0.0)
        terms = np.sqrt(np.minimum(squares, squares.T))
        allowed.append(SUMMED * curvatures.measure.rel_tol * terms)
        parts.append(_examined(curvatures, np.zeros(len(rows)), claim, room, output, rows, terms)[0])
    examined = stacked(parts)
    labels = [f"v{i + 1}" for i in range(len(rows))]
    prefix = [""] if outputs == 1 else [f"{curvatures.function}[{output}]: " for output in range(outputs)]
    names = [f"{p}⟨{u}, H·{v}⟩" for p in prefix for u in labels for v in labels]
    index = places(n * np.arange(outputs * len(rows)), n + np.arange(len(rows)))
    return Seen(
        entries=entries_from(examined, index, names),
        rest=examined,
        rest_names=np.array(names, dtype=object).reshape(examined.claim.shape),
        notices=(_visible(curvatures, examined, rows, np.concatenate(allowed)),),
    )


def _visible(curvatures: Curvatures, examined: Examined, rows: Array, allowed: Array) -> str:
    """What random directions would have seen of an error in any one entry."""
    looked = (
        f"{count(curvatures.layout.size, 'variable')}: looked at along {count(len(rows), 'random direction')} by "
        "function values"
    )
    least = np.abs(rows[:, curvatures.able]).min(axis=1)
    reach = np.tile(np.outer(least, least), (curvatures.outputs, 1))
    seen = float(curvatures.visible(examined, reach, allowed).min())
    if not np.isfinite(seen):
        return looked
    told = f"{looked}; an error of {number(seen, 2)} in a single entry would have been seen, but not in which"
    claimed = FIRST.intersection(curvatures.session.subject.targets[curvatures.function].claims)
    return told if claimed else f"{told}. A gradient claimed in the same call shows it"
