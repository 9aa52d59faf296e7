"""Points beside the start at which a problem is looked at: given ones, and random ones within the bounds."""

from collections.abc import Iterable
from typing import Any

import numpy as np

from gradcheck.errors import UsageError
from gradcheck.problem.domain import windows
from gradcheck.problem.layout import Points, real_numbers
from gradcheck.problem.subject import Subject
from gradcheck.records.arrays import Array


def whole_number(value: Any, what: str) -> int:
    """A whole number that is not negative: of samples, or a seed.

    Raises
    ------
    UsageError
        If it is anything else.
    """
    try:
        whole = -1 if isinstance(value, bool | np.bool_ | str) or int(value) != value else int(value)
    except (TypeError, ValueError, OverflowError):
        whole = -1
    if whole < 0:
        raise UsageError(f"{what} is {value!r}; give a whole number >= 0")
    return whole


def given_points(points: Any, subject: Subject) -> list[Array]:
    """The points that the caller gave, each (n,).

    Raises
    ------
    UsageError
        If they are no points, or one has another number of entries, is not finite, or lies outside the bounds.
    """
    if points is None:
        return []
    listed = points.each if isinstance(points, Points) else points
    if isinstance(listed, str) or not isinstance(listed, Iterable):
        raise UsageError(f"points is {points!r:.80}; give a list of points, or an array with one row a point")
    rows = []
    for place, point in enumerate(listed):
        row = np.ravel(real_numbers([point], f"point {place} of points"))
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
