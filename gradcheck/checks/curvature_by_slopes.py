"""Claimed second derivatives held against differences of a confirmed first derivative."""

from dataclasses import replace

import numpy as np

from gradcheck.checks.along import examined_by, shared_room
from gradcheck.checks.confirmed_slopes import Slopes
from gradcheck.checks.curvature import Curvatures, Seen
from gradcheck.checks.parts import entries_from, picked
from gradcheck.checks.products_claimed import claimed_products
from gradcheck.checks.vectors import Vectors
from gradcheck.claims.desk import Examined
from gradcheck.claims.examination import DIFFERENCES
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.verdict import Verdict
from gradcheck.wording import count, number

#: Columns that are looked at in full, at the most, after random directions have shown which rows are wrong.
NARROWED_MOST = 50


def by_slopes(curvatures: Curvatures, slopes: Slopes) -> Seen:
    """The claim for unit vectors where these are few, and random vectors; wrong rows of many are narrowed down."""
    claimed, ledger = curvatures.claimed, curvatures.session.ledger
    units, before = claimed.vectors.units, ledger.calls["slope"]
    parts = []
    if units.size:
        parts.append(_differences(curvatures, slopes, claimed.units.T[curvatures.places], columns=units))
    decided = units.size and Verdict.REFUTED in parts[0].verdict
    if not units.size or (curvatures.kind == "hvp" and not decided):
        random = claimed.random.T[curvatures.places]
        parts.append(_differences(curvatures, slopes, random, rows=claimed.vectors.random))
    seen = curvatures.seen(parts)
    if not units.size:
        seen = _narrowed(curvatures, slopes, replace(seen, notices=(_visible(curvatures, parts[0]),)))
    spent = ledger.calls["slope"] - before
    cost = f"{count(spent, 'evaluation') if spent else 'no evaluation'} of the {slopes.kind} at other points"
    return replace(seen, notices=(f"held against {_source(slopes)}: {cost}", *seen.notices))


def _source(slopes: Slopes) -> str:
    return f"differences of the confirmed {slopes.kind}"


def _differences(
    curvatures: Curvatures,
    slopes: Slopes,
    claim: Array,
    *,
    columns: IntArray | None = None,
    rows: Array | None = None,
) -> Examined:
    subject, chosen = curvatures.session.subject, curvatures.places
    typical = subject.domain.scale[columns] if rows is None else shared_room(subject, rows).typical
    with np.errstate(invalid="ignore", over="ignore"):
        # A gradient that vanishes is a sum of terms that do not, and rounds as they do.
        magnitude = np.nan_to_num(np.abs(claim), nan=0.0, posinf=0.0) @ typical
    found = examined_by(
        curvatures.session,
        curvatures.function,
        claim,
        slopes.at_point[chosen],
        curvatures.measure,
        curvatures.rules,
        columns=columns,
        rows=rows,
        outputs=chosen if chosen.size < slopes.at_point.size else None,
        magnitude=magnitude,
        source=slopes.source,
        witnesses=(DIFFERENCES,),
    )
    return replace(found, source=np.where(found.source == "", "", _source(slopes)).astype(object))


def _visible(curvatures: Curvatures, along: Examined) -> str:
    """What random directions would have seen of an error in any one entry."""
    n = curvatures.layout.size
    looked = f"{count(n, 'variable')}: looked at along {count(along.claim.shape[1], 'random direction')}"
    reach = np.abs(curvatures.claimed.vectors.random[:, curvatures.able]).min(axis=1)
    rows = curvatures.visible(along, reach).min(axis=1)
    if not np.isfinite(rows).any():
        return looked
    least = number(float(rows[np.isfinite(rows)].max()), 2)
    return f"{looked}; an error of {least} in a single entry would have been seen"


def _narrowed(curvatures: Curvatures, slopes: Slopes, seen: Seen) -> Seen:
    """All columns of the variables whose rows are wrong: a Hessian is symmetric, and so are most mistakes."""
    assert seen.rest is not None
    places = curvatures.places
    wrong_rows = (seen.rest.verdict == Verdict.REFUTED).any(axis=1)
    columns = np.unique(places[wrong_rows] % curvatures.layout.size)
    if columns.size == 0 or columns.size > NARROWED_MOST:
        return seen
    vectors = Vectors(units=columns, random=curvatures.claimed.vectors.random)
    claim = claimed_products(curvatures.session, curvatures.function, curvatures.kind, vectors).units.T[places]
    found = _differences(curvatures, slopes, claim, columns=columns)
    wrong = found.verdict == Verdict.REFUTED
    if not wrong.any():
        return seen
    labels = [curvatures.layout.name(int(j)) for j in columns]
    names = np.array(
        [[curvatures.name(row, label, unit=True) for label in labels] for row in curvatures.row_names()], dtype=object
    )
    at = np.argwhere(wrong)
    index = np.stack([places[at[:, 0]], columns[at[:, 1]]], axis=1)
    notice = (
        f"after random directions the {count(columns.size, 'column')} of the variables in question "
        f"{'was' if columns.size == 1 else 'were'} looked at in full; what was found wrong there is told"
    )
    return replace(
        seen,
        entries=entries_from(picked(found, wrong), index, names[wrong].tolist()),
        narrowed=found,
        names=names,
        notices=(*seen.notices, notice),
    )
