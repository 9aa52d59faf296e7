"""Which entries of a claim are wrong, where the derivative along a direction says that some are.

Splitting the entries in two halves and measuring one of them tells both, because what is off along a direction is the
sum of what is off in its parts. Where a part holds a single wrong entry, a *graded* direction, whose moves grow evenly
with the place, tells its place by the ratio to the plain one; a short stretch around that place is then measured. This
finds one wrong entry among a million in three or four directions, and k of them in some six directions each, where
halving alone takes 2·k·log2(n/k) (group testing, Dorfman 1943).
"""

import math
from dataclasses import dataclass, field

import numpy as np

from gradcheck.claims.directions import Group, Moves, allowed_along, root_of_squares
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.records.arrays import Array
from gradcheck.witnesses.joint_look import Sight

#: A graded direction is tried where a part with a wrong entry holds a single one with at least this probability.
LIKELY_SINGLE = 0.35
#: What is off along a half that was not measured itself is measured where it is not this clear.
UNCLEAR = 3.0
#: What is off along a part is measured to this share of what is off along the part that holds it.
DIGITS = 1e-3
#: A place is a whole number, but for rounding.
SLIP = 1e-6
#: Halves are not inferred from more than so many measurements.
INFERRED_MOST = 6
#: More wrong entries than this are not named one by one.
MOST = 64
#: A share of all parts that is wrong on two levels running: nearly everything is wrong.
NEARLY_ALL, PARTS_ENOUGH = 0.7, 16


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """Entries from `start` to `stop`, and by how much the claim is off along them: claim − derivative, ± bound."""

    start: int
    stop: int
    gap: float
    bound: float
    measurements: int = 1

    @property
    def size(self) -> int:
        return self.stop - self.start


@dataclass(slots=True, kw_only=True)
class Located:
    """What the search found.

    Attributes
    ----------
    single : list of Part
        Entries that are off, each measured alone.
    parts : list of Part
        Where nearly everything is wrong: parts that hold wrong entries.
    refused : bool
        The budget ended before the search did.
    lost : bool
        A part that was off showed no entry that is: what was measured does not fit together.
    """

    single: list[Part] = field(default_factory=list)
    parts: list[Part] = field(default_factory=list)
    refused: bool = False
    lost: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Search:
    """How the parts of one direction are measured.

    Attributes
    ----------
    sight : Sight
    claim : ndarray, shape (n,)
    moves : Moves
    group : Group
    seed : int
        Of the direction.
    rel_tol, abs_tol, rounding : float
    """

    sight: Sight
    claim: Array
    moves: Moves
    group: Group
    seed: int
    rel_tol: float
    abs_tol: float
    rounding: float

    def measure(
        self, start: int, stop: int, within: float, *, graded: bool = False
    ) -> Inquiry[tuple[Part, float] | None]:
        """A part, and what it may be off; None where the budget ended.

        More digits than a share of what is off `within` the larger part are not asked for, but of single entries.
        """
        row = self.moves.row(self.group, self.seed, start, stop, graded=graded)
        allowed = self.allowed(row, start, stop)
        coarse = 0.0 if stop - start == 1 else DIGITS * abs(within)
        with np.errstate(invalid="ignore"):
            spread = root_of_squares(self.claim[start:stop] * row[start:stop])
        seen = yield from self.sight.along(row, max(allowed / 3, coarse), spread)
        if seen.refused:
            return None
        gap = float(np.dot(np.nan_to_num(self.claim[start:stop]), row[start:stop])) - seen.value
        return Part(start=start, stop=stop, gap=gap, bound=seen.bound), allowed

    def allowed(self, row: Array, start: int, stop: int) -> float:
        """What the claim may be off along a row that moves these entries only."""
        part = slice(start, stop)
        return allowed_along(
            row[part],
            self.claim[part],
            self.moves.typical[part],
            rel_tol=self.rel_tol,
            abs_tol=self.abs_tol,
            rounding=self.rounding,
        ).plain


def wrong_entries(search: Search, root: Part, allowed: float) -> Inquiry[Located]:
    """The entries that are off within `root`, which is.

    Parameters
    ----------
    search : Search
    root : Part
        All entries of the direction.
    allowed : float
        What the claim may be off along it by what was asked for. Rounding may hide an error, it does not excuse one
        that is seen; whether an entry is wrong is judged entry by entry.

    Returns
    -------
    Located
    """
    found = Located()
    level, everywhere = [(root, allowed)], 1.0
    crowded = 0
    while level:
        probable = _probably_single(len(level) / everywhere)
        crowded = crowded + 1 if len(level) >= PARTS_ENOUGH and len(level) >= NEARLY_ALL * everywhere else 0
        if crowded > 1 or len(level) + len(found.single) > MOST:
            found.parts = [part for part, _ in level]
            return found
        below: list[tuple[Part, float]] = []
        for part, limit in level:
            if part.size == 1:
                found.single.append(part)
                continue
            narrowed = None
            if probable >= LIKELY_SINGLE or part is root:
                narrowed = yield from _single(search, part, limit, found)
            if narrowed is None and not found.refused:
                below += yield from _halves(search, part, limit, found)
            if found.refused:
                return found
        level, everywhere = below, 2 * everywhere
    return found


def _probably_single(share: float) -> float:
    """Probability that a part with wrong entries holds just one, where a share of all parts of its size has some."""
    if share >= 1:
        return 0.0
    rate = -math.log1p(-share)
    return rate / math.expm1(rate)


def _single(search: Search, part: Part, limit: float, found: Located) -> Inquiry[bool | None]:
    """Narrow a part down to the only wrong entry in it; None where it is not the only one."""
    while part.size > 1:
        measured = yield from search.measure(part.start, part.stop, part.gap, graded=True)
        if measured is None:
            found.refused = True
            return None
        graded = measured[0]
        # Place within the part from 0 to 1, and how well it is known.
        place = graded.gap / part.gap - 1
        doubt = (graded.bound + abs(graded.gap / part.gap) * part.bound) / abs(part.gap)
        if not np.isfinite(doubt) or place < -doubt or place > 1 + doubt or doubt > 0.3:
            return None
        low = max(part.start, part.start + math.ceil((place - doubt) * part.size - SLIP))
        high = min(part.stop, part.start + math.floor((place + doubt) * part.size + SLIP) + 1)
        if not 0 < high - low < part.size:
            return None
        narrow = yield from search.measure(low, high, part.gap)
        if narrow is None:
            found.refused = True
            return None
        # What is off elsewhere in the part must be nothing.
        if abs(part.gap - narrow[0].gap) > limit + part.bound + narrow[0].bound:
            return None
        part, limit = narrow
        if abs(part.gap) <= limit + part.bound:
            return None
    found.single.append(part)
    return True


def _halves(search: Search, part: Part, limit: float, found: Located) -> Inquiry[list[tuple[Part, float]]]:
    """The halves of a part that hold wrong entries."""
    middle = (part.start + part.stop) // 2
    measured = yield from search.measure(part.start, middle, part.gap)
    if measured is None:
        found.refused = True
        return []
    left, left_limit = measured
    right = Part(
        start=middle,
        stop=part.stop,
        gap=part.gap - left.gap,
        bound=part.bound + left.bound,
        measurements=part.measurements + 1,
    )
    right_limit = search.allowed(search.moves.row(search.group, search.seed, middle, part.stop), middle, part.stop)
    threshold = right_limit + right.bound
    unclear = threshold / UNCLEAR < abs(right.gap) < threshold * UNCLEAR
    if unclear or right.measurements > INFERRED_MOST or (right.size == 1 and abs(right.gap) > threshold / UNCLEAR):
        measured = yield from search.measure(middle, part.stop, part.gap)
        if measured is None:
            found.refused = True
            return []
        right, right_limit = measured
    wrong = [(half, own) for half, own in ((left, left_limit), (right, right_limit)) if _off(half, own)]
    found.lost |= not wrong and abs(part.gap) > 2 * (limit + part.bound)
    return wrong


def _off(part: Part, limit: float) -> bool:
    return abs(part.gap) > limit + part.bound
