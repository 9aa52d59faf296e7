"""The inquiry that checks a claimed gradient with many entries along random directions, and finds the wrong entries.

Each direction checks all entries of a group at once. Where one is refuted, the wrong entries are searched for, put
right, and new directions look again: they find what cancelled by chance, and are the second look without which nothing
is accused.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from gradcheck.claims.directions import (
    GROUPS,
    Allowed,
    Group,
    Moves,
    allowed_along,
    moves_of,
    root_of_squares,
    with_level,
)
from gradcheck.claims.localisation import Located, Part, Search, wrong_entries
from gradcheck.claims.rule import REFUTING_BOUNDS
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.problem.domain import Domain
from gradcheck.records.arrays import Array
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.joint_look import WIDEST, Sight
from gradcheck.witnesses.steps import Room

#: Random directions of each group, unless the caller gives a number. Two equal errors of a thousandth each cancel
#: beyond recognition in one direction out of ten.
USUAL = {Group.SCALED: 4, Group.ZERO: 2, Group.INWARD: 2}
#: S is raised by no more than this.
RAISED_MOST = 1e3
#: The search begins anew after every pass that found something; it ends after so many quiet directions, or passes.
QUIET, PASSES = 2, 8
#: A claim that is off by this share of its terms or more may be a multiple of the derivative everywhere; so many
#: directions must say so.
LARGE, ALIKE = 0.1, 3
#: Blocks of x that are looked at one by one.
BLOCKS_MOST = 40
#: Directions of later passes have other seeds.
_PASS, _GROUP = 1000, 100
APART = "the slope very close to the point is another one than around it: a narrow feature at the point"


@dataclass(frozen=True, slots=True, kw_only=True)
class Direction:
    """One random direction: claim and witness along it, and the verdict.

    Attributes
    ----------
    group : Group
    seed : int
    claim, witness, bound : float
    allowed : Allowed
    verdict : Verdict
    left, right : float
        One-sided slopes where there is a kink; NaN elsewhere.
    reason : str
        Why it is undecided.
    """

    group: Group
    seed: int
    claim: float
    witness: float
    bound: float
    allowed: Allowed
    verdict: Verdict
    left: float = np.nan
    right: float = np.nan
    reason: str = ""

    @property
    def visible(self) -> float:
        """What surely would have been seen, if it were added along the direction."""
        return self.allowed.plain + REFUTING_BOUNDS * self.bound + abs(self.claim - self.witness)

    @property
    def suspect(self) -> bool:
        """Whether an error is seen beyond what was asked for, though rounding might excuse it."""
        gap = abs(self.claim - self.witness)
        return bool(np.isfinite(self.bound) and gap > self.allowed.plain + REFUTING_BOUNDS * self.bound)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Culprit:
    """An entry that is off: its place, the value that was measured ± bound."""

    place: int
    value: float
    bound: float


@dataclass(slots=True, kw_only=True, eq=False)
class JointlyExamined:
    """What the directions showed.

    Attributes
    ----------
    moves : Moves
    directions : list of Direction
        Those of the claim as it was given.
    culprits : list of Culprit
        Wrong entries; `agreed` says whether a second look stands behind them.
    agreed : bool
        New directions found nothing once the culprits were put right.
    doubted : bool
        Far smaller steps do not see what the culprits are said to be off.
    quiet : list of Direction
        Directions of the claim with the culprits put right.
    parts : list of Part
        Parts that hold more wrong entries than can be named one by one.
    blocks : dict of slice start -> bool
        Where nearly everything may be wrong: which of the blocks hold wrong entries.
    ratio : float
        Where the claim is the same multiple of the derivative along several directions: that multiple; else NaN.
    refused : bool
        The budget or the time ended.
    noise : float
    """

    moves: Moves
    directions: list[Direction] = field(default_factory=list)
    culprits: list[Culprit] = field(default_factory=list)
    agreed: bool = True
    doubted: bool = False
    quiet: list[Direction] = field(default_factory=list)
    parts: list[Part] = field(default_factory=list)
    blocks: dict[int, bool] = field(default_factory=dict)
    ratio: float = np.nan
    refused: bool = False
    noise: float = np.nan


def examine_jointly(
    base: Array,
    claim: Array,
    domain: Domain,
    centre: Array,
    *,
    rel_tol: float,
    abs_tol: float,
    unit_roundoff: float = np.finfo(float).eps / 2,
    directions: int | None = None,
    seed: int = 0,
    blocks: Sequence[slice] = (),
) -> Inquiry[JointlyExamined]:
    """Check a gradient claim (n,) of a scalar function along random directions.

    Parameters
    ----------
    base : ndarray, shape (n,)
    claim : ndarray, shape (n,)
    domain : Domain
    centre : ndarray, shape (1,)
        Value at the point.
    rel_tol, abs_tol, unit_roundoff
        As in `examine`.
    directions : int, optional
        How many of each group; by default as many as their sizes ask for.
    seed : int
        Of the random directions.
    blocks : sequence of slice
        Parts of x with a name of their own: where too much is wrong to be named, the blocks that are wrong are told.

    Returns
    -------
    JointlyExamined
    """
    floor = unit_roundoff * (abs(float(centre[0])) or 1.0)
    examination = _Examination(base, claim, domain, centre, rel_tol, abs_tol, floor, directions, seed)
    result = yield from examination.run()
    if result.parts and 1 < len(blocks) <= BLOCKS_MOST:
        yield from examination.look_at_blocks(blocks)
    return result


class _Examination:
    def __init__(
        self,
        base: Array,
        claim: Array,
        domain: Domain,
        centre: Array,
        rel_tol: float,
        abs_tol: float,
        floor: float,
        wanted: int | None,
        seed: int,
    ) -> None:
        self.base, self.claim, self.domain, self.centre = base, claim, domain, centre
        self.rel_tol, self.abs_tol, self.floor = rel_tol, abs_tol, floor
        self.wanted, self.seed = wanted, seed
        moves = moves_of(base, claim, domain, floor)
        self.sight = Sight.at(base, centre, _wobble(base, claim))
        self.result = JointlyExamined(moves=moves)
        #: The claim with the culprits put right; the same array until there are any.
        self.mended = claim

    def run(self) -> Inquiry[JointlyExamined]:
        yield from self._settle_level()
        result = self.result
        for group in GROUPS:
            if result.moves.count(group) == 0:
                continue
            for number in range(self.wanted or USUAL[group]):
                seed = self._seed_of(group, number)
                direction = yield from self._judged(group, seed)
                result.directions.append(direction)
                if result.refused:
                    return result
                if direction.verdict == Verdict.REFUTED or direction.suspect:
                    yield from self._search(group, seed, direction)
                    break
        yield from self._close_look()
        yield from self._second_look()
        result.noise = self.sight.noise
        return result

    def _seed_of(self, group: Group, number: int) -> int:
        return (self.seed + 1) * 1_000_003 + group * _GROUP + number

    def _settle_level(self) -> Inquiry[None]:
        """Survey a first direction, and raise S until rounding does not hide what is to be seen, as far as that helps.

        What was evaluated is remembered, and not paid for again by the first direction.
        """
        moves = self.result.moves
        group = next((group for group in GROUPS if moves.count(group)), None)
        if group is None or group is Group.INWARD:
            return
        row = moves.row(group, self._seed_of(group, 0), 0, self.base.size)
        plain = self._allowed(row).plain
        seen = yield from self.sight.survey(row, self._spread(row), plain / 3)
        if group is Group.SCALED and np.isfinite(seen.bound) and REFUTING_BOUNDS * seen.bound > plain > 0:
            # Rounding hides what is to be seen: a larger S is seen better. The smallest entries are then seen hardly
            # worse, for the tolerance that they share grows to what rounding takes anyway.
            factor = min(RAISED_MOST, REFUTING_BOUNDS * seen.bound / plain)
            self.result.moves = with_level(moves, self.claim, moves.level * factor)

    def _spread(self, row: Array) -> float:
        """Size of the terms of the claim along a row."""
        total = 0.0
        for first in range(0, row.size, 1 << 16):
            part = slice(first, first + (1 << 16))
            with np.errstate(invalid="ignore"):
                total = math.hypot(total, root_of_squares(self.mended[part] * row[part]))
        return total

    def _judged(self, group: Group, seed: int) -> Inquiry[Direction]:
        """The verdict along one direction of the claim, as mended so far; the whole witness is heard in doubt."""
        row = self.result.moves.row(group, seed, 0, self.base.size)
        allowed = self._allowed(row)
        claimed = float(np.dot(np.nan_to_num(self.mended), row))
        direction = Direction(
            group=group,
            seed=seed,
            claim=claimed,
            witness=np.nan,
            bound=np.inf,
            allowed=allowed,
            verdict=Verdict.UNDECIDED,
        )
        if group is not Group.INWARD:
            seen = yield from self.sight.along(row, allowed.plain / 3, self._spread(row))
            self.result.refused |= seen.refused
            direction = _decided(replace(direction, witness=seen.value, bound=seen.bound))
            if direction.verdict != Verdict.UNDECIDED or direction.suspect or seen.refused:
                return direction if not seen.refused else replace(direction, reason=SPENT)
        return (yield from self._whole_witness(direction, row))

    def _whole_witness(self, direction: Direction, row: Array) -> Inquiry[Direction]:
        inward = direction.group is Group.INWARD
        one = np.ones(1)
        room = Room(
            scale=one,
            typical=one,
            widest=one,
            below=np.zeros(1) if inward else one * WIDEST,
            above=one if inward else one * WIDEST,
            grain=one * np.finfo(float).eps,
        )
        heard = yield from finite_difference(self.base, row[None, :], room, self.centre)
        reason = heard.reasons.get((0, 0), "") or heard.reason
        self.result.refused |= reason == SPENT
        judged = replace(
            direction,
            witness=float(heard.value[0, 0]),
            bound=float(heard.bound[0, 0]),
            left=float(heard.left[0, 0]),
            right=float(heard.right[0, 0]),
            reason=reason,
        )
        decided = _decided(judged)
        if decided.verdict == Verdict.UNDECIDED and not decided.reason:
            return replace(decided, reason="rounding and truncation leave a bound wider than the tolerance")
        return decided if decided.verdict == Verdict.UNDECIDED else replace(decided, reason="")

    def _allowed(self, row: Array) -> Allowed:
        return allowed_along(
            row,
            self.mended,  # the rule's max(|c|, |w|): a wrong zero that was put right is allowed a share of its value
            self.result.moves.typical,
            rel_tol=self.rel_tol,
            abs_tol=self.abs_tol,
            rounding=self._rounding(),
        )

    def _rounding(self) -> float:
        """ε: the noise of the values, but no more than rounding can be, and no more than is known of it."""
        return float(np.fmax(self.floor, min(self.sight.heard, 1e3 * self.floor)))

    def _search(self, group: Group, seed: int, direction: Direction) -> Inquiry[None]:
        """Find the wrong entries of a group; new directions look again until they find nothing more."""
        if (yield from self._one_factor(group, seed, direction)):
            return
        quiet, passes = 0, 0
        while quiet < QUIET and passes < PASSES:
            if direction.verdict == Verdict.CONFIRMED:
                quiet += 1
            else:
                quiet, passes = 0, passes + 1
                found = yield from self._located(group, seed, direction)
                self.result.refused |= found.refused
                self._put_right(group, seed, found)
                if found.refused or found.parts or not found.single:
                    self.result.parts += found.parts
                    self.result.agreed = False
                    return
            if quiet < QUIET:
                seed = self._seed_of(group, _PASS * (passes + 1) + quiet)
                direction = yield from self._judged(group, seed)
                self.result.quiet.append(direction)
                if self.result.refused or direction.verdict == Verdict.UNDECIDED:
                    self.result.agreed = False
                    return
        self.result.agreed &= quiet >= QUIET

    def _one_factor(self, group: Group, seed: int, first: Direction) -> Inquiry[bool]:
        """Whether the claim is the same multiple of the derivative along several directions.

        Asked only where what is off is as large as the sum of all terms would be: few wrong entries cannot do that.
        """
        if group is Group.ZERO or not abs(first.witness) > first.bound:
            return False
        row = self.result.moves.row(group, seed, 0, self.base.size)
        if abs(first.claim - first.witness) < LARGE * self._spread(row):
            return False
        ratio = first.claim / first.witness
        for number in range(1, ALIKE):
            other = yield from self._judged(group, self._seed_of(group, number))
            self.result.directions.append(other)
            doubt = abs(ratio) * (other.bound + first.bound * abs(other.witness / first.witness))
            if not abs(other.claim - ratio * other.witness) <= doubt + abs(ratio) * other.allowed.plain:
                return False
        self.result.ratio, self.result.agreed = ratio, False
        self.result.parts = [Part(start=0, stop=self.base.size, gap=first.claim - first.witness, bound=first.bound)]
        return True

    def _located(self, group: Group, seed: int, direction: Direction) -> Inquiry[Located]:
        search = Search(
            self.sight,
            self.mended,
            self.result.moves,
            group,
            seed,
            self.rel_tol,
            self.abs_tol,
            self._rounding(),
        )
        gap = direction.claim - direction.witness
        root = Part(start=0, stop=self.base.size, gap=gap, bound=direction.bound)
        return (yield from wrong_entries(search, root, direction.allowed.plain))

    def _put_right(self, group: Group, seed: int, found: Located) -> None:
        for part in found.single:
            move = float(self.result.moves.row(group, seed, part.start, part.stop)[part.start])
            value = float(self.mended[part.start]) - part.gap / move
            self.result.culprits = [c for c in self.result.culprits if c.place != part.start]
            self.result.culprits.append(Culprit(place=part.start, value=value, bound=part.bound / abs(move)))
            if self.mended is self.claim:
                self.mended = self.claim.copy()
            self.mended[part.start] = value

    def look_at_blocks(self, blocks: Sequence[slice]) -> Inquiry[None]:
        """Which blocks hold wrong entries, by one direction each."""
        result = self.result
        for block in blocks:
            wrong = False
            for group in (Group.SCALED, Group.ZERO):
                row = result.moves.row(group, self._seed_of(group, 1), block.start, block.stop)
                if not row.any():
                    continue
                seen = yield from self.sight.along(row, self._allowed(row).plain / 3, self._spread(row))
                gap = abs(float(np.dot(np.nan_to_num(self.claim), row)) - seen.value)
                wrong |= gap > self._allowed(row).plain + REFUTING_BOUNDS * seen.bound
                if seen.refused:
                    return
            result.blocks[block.start] = wrong

    def _close_look(self) -> Inquiry[None]:
        """Where all is confirmed: is the slope very close to the point the same?"""
        result = self.result
        if not result.directions or any(d.verdict != Verdict.CONFIRMED for d in result.directions):
            return
        first = result.directions[0]
        if first.group is Group.INWARD:
            return
        row = result.moves.row(first.group, self._seed_of(first.group, 0), 0, self.base.size)
        terms = float(np.dot(np.abs(np.nan_to_num(self.claim)), np.abs(row)))
        same = yield from self.sight.close_to_the_point(row, first.claim, terms)
        if not same:
            judged = yield from self._whole_witness(replace(first, verdict=Verdict.UNDECIDED), row)
            if judged.verdict == Verdict.CONFIRMED:
                judged = replace(judged, verdict=Verdict.UNDECIDED, reason=APART)
            result.directions[0] = judged

    def _second_look(self) -> Inquiry[None]:
        """What is off is looked at with far smaller steps, too: around a narrow feature, wide steps see another slope.

        Culprits must be seen by them as well, or are examined one by one; a direction that is seen as it is claimed is
        not refuted.
        """
        result = self.result
        if result.culprits and result.agreed:
            yield from self._second_look_at_culprits()
        for place, direction in enumerate(result.directions):
            if direction.verdict != Verdict.REFUTED or (result.culprits and result.agreed):
                continue
            row = result.moves.row(direction.group, direction.seed, 0, self.base.size)
            slopes, excess = yield from self._closer(row, direction.witness, direction.group)
            with np.errstate(invalid="ignore"):
                spoken = excess > np.abs(slopes - direction.claim)
            if spoken.any():
                result.directions[place] = replace(direction, verdict=Verdict.UNDECIDED, reason=APART)
            elif not result.refused:  # where no entries explain it, steps of all sizes must agree
                doubted = replace(direction, verdict=Verdict.UNDECIDED)
                result.directions[place] = yield from self._whole_witness(doubted, row)
        if all(direction.verdict != Verdict.REFUTED for direction in result.directions):
            result.parts, result.ratio = [], np.nan

    def _second_look_at_culprits(self) -> Inquiry[None]:
        result = self.result
        for group in GROUPS:
            places = [culprit.place for culprit in result.culprits if result.moves.group[culprit.place] == group]
            if not places:
                continue
            row = np.zeros(self.base.size)
            whole = result.moves.row(group, self._seed_of(group, 0), 0, self.base.size)
            row[places] = whole[places]
            _, excess = yield from self._closer(row, float(np.dot(self.mended[places], row[places])), group)
            result.doubted |= bool((excess > 0).any())
            result.agreed &= not result.doubted

    def _closer(self, row: Array, seen: float, group: Group) -> Inquiry[tuple[Array, Array]]:
        sizes = np.fmax(np.abs(np.nan_to_num(self.claim)), np.abs(np.nan_to_num(self.mended)))
        terms = float(np.dot(sizes, np.abs(row)))
        return (yield from self.sight.speaks_against(row, seen, terms, inward=group is Group.INWARD))


def _decided(direction: Direction) -> Direction:
    """The rule, along a direction."""
    allowed, bound = direction.allowed, direction.bound
    if not np.isfinite(bound) or not np.isfinite(direction.witness):
        return direction
    gap = abs(direction.claim - direction.witness)
    if np.isfinite(direction.left) and np.isfinite(direction.right):
        low, high = sorted((direction.left, direction.right))
        outside = max(low - direction.claim, direction.claim - high)
        slope_error = max(0.0, bound - (high - low) / 2)
        refuted = outside > allowed.whole + REFUTING_BOUNDS * slope_error
        kink = "the slope jumps along this direction, and the claim lies between the slopes of both sides"
        if refuted:
            return replace(direction, verdict=Verdict.REFUTED)
        return replace(direction, verdict=Verdict.UNDECIDED, reason=direction.reason or kink)
    if gap > allowed.whole + REFUTING_BOUNDS * bound:
        return replace(direction, verdict=Verdict.REFUTED)
    if gap + bound <= allowed.whole and gap <= allowed.plain + REFUTING_BOUNDS * bound:
        return replace(direction, verdict=Verdict.CONFIRMED)
    return direction


def _wobble(base: Array, claim: Array) -> float:
    """What the rounding of x + h may do to the values: each entry is off by up to half a unit in its last place."""
    total = 0.0
    for first in range(0, base.size, 1 << 16):
        part = slice(first, first + (1 << 16))
        with np.errstate(invalid="ignore", over="ignore"):
            total = math.hypot(total, root_of_squares(claim[part] * base[part]))
    return 0.3 * np.finfo(float).eps * total if np.isfinite(total) else 0.0
