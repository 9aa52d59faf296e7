"""Which likely mistakes explain a refuted claim: the stories that save most, until none is worth telling."""

from collections.abc import Callable

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.claims.mistakes.chain_rule import missing_chain_rule
from gradcheck.claims.mistakes.explanation import FITTED, LEAST, Explanation, Family
from gradcheck.claims.mistakes.factor import constant_factor, degrees_for_radians, mean_for_sum, unit_factor
from gradcheck.claims.mistakes.missing_path import missing_path, of_another_function
from gradcheck.claims.mistakes.reordered import reordered
from gradcheck.claims.mistakes.shifted import shifted_entries
from gradcheck.claims.mistakes.sign import sign_flipped
from gradcheck.claims.mistakes.single_precision import single_precision
from gradcheck.claims.mistakes.swapped import swapped_entries
from gradcheck.claims.mistakes.transposed import transposed
from gradcheck.claims.mistakes.unknown import unexplained
from gradcheck.claims.mistakes.zero import zero_entry
from gradcheck.records.arrays import BoolArray, IntArray
from gradcheck.records.report import Diagnosis
from gradcheck.records.verdict import DiagnosisCode

#: Families that look at each entry alone.
ENTRY_BY_ENTRY: tuple[Family, ...] = (
    single_precision,
    sign_flipped,
    zero_entry,
    constant_factor,
    degrees_for_radians,
    unit_factor,
    mean_for_sum,
    missing_chain_rule,
)
#: Families that compare entries with one another, which takes its time where there are many.
TOGETHER: tuple[Family, ...] = (swapped_entries, shifted_entries, transposed, reordered, missing_path)
#: A story worth this much for each entry it explains needs no other beside it.
PLAIN = 15.0
#: What it is worth that no second story is needed.
ALONE = 40.0
#: About so few entries another story that fits as well is told beside the first.
FEW = 2

#: So many rows are asked about; each takes eight calls of the claim.
ROWS_ASKED = 4

#: Whether the claim in some columns of a row is the derivative of any function; None if that could not be asked.
Asking = Callable[[int, IntArray], bool | None]


def likely_mistakes(case: Case, ask: Asking | None = None) -> tuple[Diagnosis, ...]:
    """Diagnoses that explain the refuted entries; each entry is explained once, what no family explains is said.

    Parameters
    ----------
    case : Case
    ask : callable, optional
        Asks whether what no story explains is the derivative of another function than the model.
    """
    if not case.refuted.any():
        return ()
    # Wrong claims hold infinities, NaN and zeros to divide by; a story that they lead nowhere is simply not told.
    with np.errstate(all="ignore"):
        stories = [each for family in ENTRY_BY_ENTRY for each in family(case)]
        if not any(_explains_all(case, story) for story in stories):
            stories += [each for family in TOGETHER for each in family(case)]
        found, left = _told(case, stories, case.refuted.copy())
    if left.any() and ask is not None:
        found, left = _asked(case, found, left, ask)
    with np.errstate(all="ignore"):
        return (*found, unexplained(case, left)) if left.any() else tuple(found)


def _explains_all(case: Case, story: Explanation) -> bool:
    """Whether one story with no fitted number explains every refuted entry exactly."""
    if story.cost >= FITTED or not (story.where == case.refuted).all():
        return False
    return story.worth(case.refuted, case.refuted) >= PLAIN * int(case.refuted.sum())


def _asked(case: Case, found: list[Diagnosis], left: BoolArray, ask: Asking) -> tuple[list[Diagnosis], BoolArray]:
    """What is left may be a part of the derivative of another function, with what lacks a term for sure."""
    lacking = {name for each in found if each.code == DiagnosisCode.MISSING_PATH for name in each.entries}
    for i in np.flatnonzero(left.any(axis=1))[:ROWS_ASKED].tolist():
        asked = np.array(
            [left[i, j] or (case.refuted[i, j] and case.name(i, j) in lacking) for j in range(left.shape[1])]
        )
        if asked.sum() > 1 and ask(i, np.flatnonzero(asked)):
            where = np.zeros_like(left)
            where[i] = left[i]
            more, left = _told(case, [of_another_function(case, where)], left)
            found = found + more
    return found, left


def _told(case: Case, stories: list[Explanation], left: BoolArray) -> tuple[list[Diagnosis], BoolArray]:
    """The best stories one after another, each about the entries that better ones left; and what is left at the end."""
    found = []
    while left.any() and stories:
        worths = np.array([story.worth(left, case.refuted) for story in stories])
        if worths.max() < LEAST:
            break
        alone = np.array([bool(story.where[left].all()) for story in stories])
        best = stories[int(np.argmax(worths + np.where(alone & (worths >= LEAST), ALONE, 0.0)))]
        where = best.where & left
        text = best.tell(where) + _beside(best, stories, where)
        found.append(Diagnosis(code=best.code, text=text, entries=case.names(where)))
        left = left & ~where
    return found, left


def _beside(best: Explanation, stories: list[Explanation], where: BoolArray) -> str:
    """Another story that explains the same few entries as exactly; nobody can tell the two apart at this point."""
    if where.sum() > FEW or not best.brief:
        return ""
    rivals = {
        story.brief: None
        for story in stories
        if story.brief and story.brief != best.brief and story.where[where].all() and story.worth(where, where) >= LEAST
    }
    return f" At this point {' or '.join(list(rivals)[:2])} would fit as well." if rivals else ""
