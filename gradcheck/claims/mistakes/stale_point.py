"""The derivative of another point than the one asked about: an earlier one, or whatever the model saw last."""

from collections.abc import Sequence

import numpy as np

from gradcheck.claims.mistakes.case import BOUNDS
from gradcheck.claims.rule import digits_agreed
from gradcheck.records.report import CheckReport, Diagnosis
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.wording import digits_to_tell_apart, listed, number

#: Relative difference up to which two derivatives at different points count as the same.
SAME = 1e-7
#: With fewer entries than this a match could be an accident, unless every point shows the same.
LEAST = 2


def changing_claim(
    names: tuple[str, ...],
    worst: str,
    first: float,
    second: float,
    *,
    steady: bool,
    right_at_first: bool,
    right_at_last: bool,
) -> Diagnosis:
    """The story of a claim that gives different answers at the same point.

    Parameters
    ----------
    names : tuple of str
        The entries that changed.
    worst : str
        The one that changed most.
    first, second : float
        Both answers there.
    steady : bool
        Whether it gave the second answer again when asked a third time, with nothing in between.
    right_at_first, right_at_last : bool
        Whether the first answers, or the second ones, agree with the witness.
    """
    digits = digits_to_tell_apart(float(digits_agreed(np.array(first), np.array(second), np.array(0.0))))
    values = (
        f"{worst} was claimed {number(first, digits)} at first and {number(second, digits)} later, at the same point"
    )
    if not steady:
        text = f"{values}, and another number at each call; look for unseeded random numbers or a state that moves on."
        return Diagnosis(code=DiagnosisCode.UNKNOWN, text=text, entries=names)
    if right_at_first:
        why = (
            "right before and wrong after the model was evaluated elsewhere: the claim uses what the last evaluation "
            "left behind, not its own argument"
        )
    elif right_at_last:
        why = "wrong in the first call and right in the next: the claim returns what an earlier call worked out"
    else:
        why = "the claim depends on what was evaluated before, not only on its own argument"
    return Diagnosis(code=DiagnosisCode.STALE_POINT, text=f"{values}; {why}.", entries=names)


def stale_points(reports: Sequence[CheckReport]) -> dict[int, int]:
    """Points whose claim is the derivative at another one: which, by their places; an earlier one if there is."""
    found: dict[int, int] = {}
    for k, report in enumerate(reports):
        if report.verdict == Verdict.REFUTED and len(report.entries):
            order = [*range(k - 1, -1, -1), *range(k + 1, len(reports))]
            other = next((j for j in order if _claims_that_of(report, reports[j])), None)
            if other is not None:
                found[k] = other
    return found


def _claims_that_of(report: CheckReport, other: CheckReport) -> bool:
    """Whether all claims of one report are the derivatives seen in the other, and those differ from its own."""
    mine, theirs = report.entries, other.entries
    if mine.index.shape != theirs.index.shape or not np.array_equal(mine.index, theirs.index):
        return False
    with np.errstate(invalid="ignore"):
        off = np.abs(mine.claim - theirs.witness)
        met = off <= SAME * np.fmax(np.abs(mine.claim), np.abs(theirs.witness)) + BOUNDS * theirs.bound
    refuted = np.array([verdict == Verdict.REFUTED for verdict in mine.verdict])
    return bool(
        met[np.isfinite(theirs.bound)].all() and (met & refuted).sum() >= min(LEAST, met.size) and refuted.any()
    )


def stale_story(found: dict[int, int], names: dict[int, tuple[str, ...]]) -> Diagnosis:
    """The story of all points whose claim belongs to another one."""
    all_names = tuple(name for k in found for name in names[k])
    behind = all(k - j == 1 for k, j in found.items())
    if behind and len(found) > 1:
        what = (
            f"at points {listed([str(k) for k in found])} the claim is the derivative of the point before, in all of it"
        )
    else:
        what = "; ".join(
            f"at point {k} the claim is the derivative at point {j}, in all entries" for k, j in found.items()
        )
    text = f"{what}; look for a value kept from an earlier call, or a list of results that is one place off."
    return Diagnosis(code=DiagnosisCode.STALE_POINT, text=text, entries=all_names)
