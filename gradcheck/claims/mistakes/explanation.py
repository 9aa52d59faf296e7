"""A story that would explain some refuted entries, and what it is worth: bits that it saves less bits that it costs.

Minimum description length (Rissanen 1978): a story is believed where telling it and the entries that it explains takes
fewer bits than telling the wrong numbers one by one. An entry that is met to 30 bits by a story with no free number
weighs more than a story with a number fitted to that very entry, and one story for all entries beats several for each.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np

from gradcheck.claims.mistakes.case import Case
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.records.verdict import DiagnosisCode

#: What a story must save before it is told: the odds that chance did it are one in sixty, and mostly far less.
LEAST = 6.0
#: Price of a number that is fitted to the claim.
FITTED = 38.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Explanation:
    """One story.

    Attributes
    ----------
    code : DiagnosisCode
    where : ndarray of bool, shape (m, n)
        The refuted entries that it explains.
    bits : ndarray, shape (m, n)
        What it saves in each of them.
    cost : float
        Bits that the story itself takes.
    tell : callable
        The sentence, about those of the entries that are left to it.
    brief : str
        The story in a few words, for where another one explains the same.
    """

    code: DiagnosisCode
    where: BoolArray
    bits: Array
    cost: float
    tell: Callable[[BoolArray], str]
    brief: str = ""

    def worth(self, left: BoolArray, refuted: BoolArray) -> float:
        """Bits saved in the entries that are left, less the cost, and less what it takes to say which of all refuted
        entries the story is about.
        """
        return float(self.bits[self.where & left].sum() - self.cost - _placing(self.where, refuted))


Family: TypeAlias = Callable[[Case], Iterator[Explanation]]


def _placing(where: BoolArray, refuted: BoolArray) -> float:
    """Bits to say which of the refuted entries: nothing for all; else one by one, or by the ends of runs."""
    amounts = [where.sum()]
    for turned, all_ in ((where, refuted), (where.T, refuted.T)):
        marks = turned[all_]
        amounts.append(2 * (int(marks[0]) + int(np.sum(marks[1:] & ~marks[:-1]))) if marks.size else 0)
    count = int(refuted.sum())
    return 0.0 if amounts[0] == count else float(min(amounts) * places(count))


def said(text: str) -> Callable[[BoolArray], str]:
    """A sentence that is the same whatever entries are left."""
    return lambda _: text


def places(count: int) -> float:
    """Bits to say which one of `count`."""
    return float(np.log2(max(count, 1)))
