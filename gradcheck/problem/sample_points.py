"""Points beside the start at which a problem is looked at: given ones, and random ones within the bounds."""

from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.domain import windows
from gradcheck.problem.layout import Points
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array


def given_points(points: Any, subject: Subject) -> list[Array]:
    """The points that the caller gave, each (n,).

    Raises
    ------
    UsageError
        If one has another number of entries, is not finite, or lies outside the bounds.
    """
    if points is None:
        return []
    listed = list(points.each) if isinstance(points, Points) else list(points)
    rows = []
    for place, point in enumerate(listed):
        row = np.ravel(np.asarray(point, dtype=float))
        if row.size != subject.layout.size or not np.isfinite(row).all():
            raise UsageError(
                f"point {place} of points has {row.size} entries, {int(np.isfinite(row).sum())} of them finite; "
                f"{subject.layout.size} finite numbers are needed"
            )
        if ((row < subject.domain.lower) | (row > subject.domain.upper)).any():
            raise UsageError(
                f"point {place} of points lies outside the bounds; give points inside, or widen the bounds"
            )
        rows.append(row)
    return rows


def random_points(subject: Subject, samples: int, seed: int) -> list[Array]:
    """Points within the bounds; along a variable without bounds, within half its size."""
    lower, upper = windows(subject.start, subject.domain)
    draws = np.random.default_rng(seed).random((samples, subject.layout.size))
    rows = lower + draws * (upper - lower)
    rows[:, subject.domain.integer] = np.round(rows[:, subject.domain.integer])
    return list(np.clip(rows, subject.domain.lower, subject.domain.upper))
