"""A claim that is asked once more at the end, after the model was evaluated elsewhere, and answers something else."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from gradcheck.claims.desk import Examined
from gradcheck.claims.mistakes.stale_point import changing_claim
from gradcheck.claims.rule import REFUTING_BOUNDS
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import Verdict
from gradcheck.wording import number


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Repeated:
    """What came of asking again.

    Attributes
    ----------
    examined : Examined
        Entries whose answers part, and of which one at least is wrong, are refuted now.
    changed : ndarray of bool, shape (m, d)
        These entries.
    diagnoses : tuple of Diagnosis
    """

    examined: Examined
    changed: BoolArray
    diagnoses: tuple[Diagnosis, ...] = ()


def compared(
    examined: Examined,
    second: Array,
    third: Callable[[], Array | None],
    rel_tol: float,
    floor: Array,
    name: Callable[[int, int], str],
) -> Repeated:
    """Compare the first answer, which was examined, with the second.

    Parameters
    ----------
    examined : Examined
    second : ndarray, shape (m, d)
        The same claim at the same point, asked for at the end of the check.
    third : callable
        Asks once more, right away; used only where the first two part.
    rel_tol : float
    floor : ndarray, shape (m, d)
        Absolute difference that is none.
    name : callable
        Name of the entry (row, column).
    """
    first = examined.claim
    parted = _parted(first, second, rel_tol, floor)
    with np.errstate(invalid="ignore"):
        doubt = floor + REFUTING_BOUNDS * examined.bound
        wrong = [_parted(answer, examined.value, rel_tol, doubt) for answer in (first, second)]
    known = np.isfinite(examined.bound) & np.isfinite(examined.value)
    changed = parted & known & (wrong[0] | wrong[1])
    if not changed.any():
        return Repeated(examined=examined, changed=changed)
    again = third()
    steady = again is not None and not _parted(second, again, rel_tol, floor).any()
    places = [(int(i), int(j)) for i, j in np.argwhere(changed)]
    with np.errstate(all="ignore"):
        apart = np.where(changed, np.abs(first - second) / np.fmax(np.abs(first), np.abs(second)), -1.0)
    worst = np.unravel_index(int(np.argmax(apart)), apart.shape)
    diagnosis = changing_claim(
        tuple(name(i, j) for i, j in places),
        name(int(worst[0]), int(worst[1])),
        float(first[worst]),
        float(second[worst]),
        steady=steady,
        right_at_first=not wrong[0][changed].any(),
        right_at_last=not wrong[1][changed].any(),
    )
    verdict, reason = examined.verdict.copy(), examined.reason.copy()
    for place in places:
        verdict[place] = Verdict.REFUTED
        reason[place] = f"asked again at the same point the claim gave {number(second[place], 6)}"
        if len(places) > 1:  # one sentence for all of them, and not one for each
            reason[place] = "asked again at the same point, the claim gave another number"
    # The answer that is wrong is the one to show.
    shown = np.where(changed & ~wrong[0], second, first)
    return Repeated(
        examined=replace(examined, claim=shown, verdict=verdict, reason=reason),
        changed=changed,
        diagnoses=(diagnosis,),
    )


def _parted(a: Array, b: Array, rel_tol: float, doubt: Array) -> BoolArray:
    with np.errstate(invalid="ignore"):
        near = np.abs(a - b) <= rel_tol * np.fmax(np.abs(a), np.abs(b)) + doubt
    return np.asarray(~near & ~(np.isnan(a) & np.isnan(b)))
