"""Claimed second derivatives held against differences of a confirmed first derivative."""

from dataclasses import replace

import numpy as np

from gradcheck.checks.along import examined_by, shared_room
from gradcheck.checks.confirmed_slopes import Slopes
from gradcheck.checks.curvature import Curvatures, Seen
from gradcheck.checks.many_products import along_vectors
from gradcheck.claims.desk import Examined
from gradcheck.claims.examination import DIFFERENCES
from gradcheck.records.arrays import Array, IntArray
from gradcheck.records.verdict import Verdict
from gradcheck.wording import count


def by_slopes(curvatures: Curvatures, slopes: Slopes, *, contradicted: bool) -> Seen:
    """The claim for unit vectors where these are few, and random vectors; wrong rows of many are narrowed down.

    `contradicted` says that the claim breaks an identity.
    """
    ledger, before = curvatures.session.ledger, curvatures.session.ledger.calls["slope"]
    if curvatures.claimed.vectors.units.size:
        seen = _all_columns(curvatures, slopes)
    else:
        seen = along_vectors(curvatures, slopes, _source(slopes), contradicted=contradicted)
    spent = ledger.calls["slope"] - before
    cost = f"{count(spent, 'evaluation') if spent else 'no evaluation'} of the {slopes.kind} at other points"
    return replace(seen, notices=(f"held against {_source(slopes)}: {cost}", *seen.notices))


def _all_columns(curvatures: Curvatures, slopes: Slopes) -> Seen:
    claimed = curvatures.claimed
    units = claimed.vectors.units
    parts = [_differences(curvatures, slopes, claimed.units.T[curvatures.places], columns=units)]
    if curvatures.kind == "hvp" and Verdict.REFUTED not in parts[0].verdict:
        random = claimed.random.T[curvatures.places]
        parts.append(_differences(curvatures, slopes, random, rows=claimed.vectors.random))
    return curvatures.seen(parts)


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
