"""A claim that is right at some points and wrong at others, and what tells the points apart."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from gradcheck.claims.mistakes.case import BOUNDS
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import listed, number

#: So many points of each kind before a variable is said to tell them apart.
LEAST = 2
#: If more variables than this do, it is an accident that some do.
SEPARATORS_MOST = 2


@dataclass(frozen=True, slots=True, eq=False)
class Divided:
    """Where a claim is right and where it is wrong: places of points, and the entries (e,) that are wrong somewhere."""

    right: list[int]
    wrong: list[int]
    entries: BoolArray


def divided(reports: Sequence[CheckReport]) -> Divided | None:
    """The points at which the entries that are refuted somewhere are confirmed or refuted; None if it is all one."""
    first = reports[0].entries
    if not len(first) or any(not np.array_equal(first.index, each.entries.index) for each in reports):
        return None
    refuted = np.array([[v == Verdict.REFUTED for v in each.entries.verdict] for each in reports])
    confirmed = np.array([[v == Verdict.CONFIRMED for v in each.entries.verdict] for each in reports])
    # A true zero confirms whatever formula gives a zero.
    seen = np.array([np.abs(each.entries.witness) > BOUNDS * each.entries.bound for each in reports])
    entries = refuted.any(axis=0)
    wrong = [k for k in range(len(reports)) if refuted[k].any()]
    right = [k for k in range(len(reports)) if confirmed[k, entries].all() and (confirmed & seen)[k, entries].any()]
    return Divided(right, wrong, np.asarray(entries)) if right and wrong else None


def region_story(
    reports: Sequence[CheckReport], parts: Divided, names: tuple[str, ...], labels: Sequence[str]
) -> Diagnosis:
    """The story of a claim that is right in one region only.

    Parameters
    ----------
    reports : sequence of CheckReport
        One a point.
    parts : Divided
    names : tuple of str
        The refuted entries, with their points.
    labels : sequence of str
        Names of the variables.
    """
    told = f"right at {_points(parts.right)}, wrong at {_points(parts.wrong)}"
    which = _separators(np.array([each.point for each in reports]), parts, labels)
    if which:
        told += f": {' or '.join(which)}"
    text = f"{told}; look at the branch, the regime or the special case that holds there."
    return Diagnosis(code=DiagnosisCode.REGION_ONLY, text=text, entries=names)


def _points(places: Sequence[int]) -> str:
    return ("point " if len(places) == 1 else "points ") + listed([str(k) for k in places])


def _separators(points: Array, parts: Divided, labels: Sequence[str]) -> list[str]:
    """Variables with a threshold between the points where the claim is right and those where it is wrong."""
    right, wrong = points[parts.right], points[parts.wrong]
    if min(len(right), len(wrong)) < LEAST:
        return []
    found = []
    for i in range(points.shape[1]):
        if wrong[:, i].min() > right[:, i].max():
            found.append(
                f"wrong where {labels[i]} ≥ {_low(wrong[:, i])}, right where {labels[i]} ≤ {_high(right[:, i])}"
            )
        elif wrong[:, i].max() < right[:, i].min():
            found.append(
                f"wrong where {labels[i]} ≤ {_high(wrong[:, i])}, right where {labels[i]} ≥ {_low(right[:, i])}"
            )
    return found if len(found) <= SEPARATORS_MOST else []


def _low(values: Array) -> str:
    return number(float(values.min()), 4)


def _high(values: Array) -> str:
    return number(float(values.max()), 4)
