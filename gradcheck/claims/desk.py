"""Collects what witnesses say about the entries of one claim and applies the rule after each."""

from dataclasses import dataclass, replace

import numpy as np

from gradcheck.claims.rule import REFUTING_BOUNDS, Tolerance, digits_agreed, judge
from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.verdict import Verdict
from gradcheck.witnesses.difference_reasons import CUT_OFF, REASONS, SPENT
from gradcheck.witnesses.ladder import Nature
from gradcheck.witnesses.testimony import Testimony
from gradcheck.wording import number

#: What the difference witness says of points without a derivative.
NO_DERIVATIVE = frozenset(REASONS.values())
#: What is said of an entry that is off by no more than the jumps of the model explain.
INNER_JUMPS = (
    "the values jump a little as variables move (an inner iteration, an adaptive step), which explains the difference: "
    "the slope of the program is not that of the model; tighten its tolerance"
)
#: What is said of an entry whose slope very close to the point is what is claimed.
NARROW_FEATURE = (
    "the slope very close to the point is what is claimed, and another one around it: a narrow feature or a ripple, "
    "which an optimizer takes for noise"
)
#: How well a slope close to the point must be known, beside the difference in question.
NARROW_SHARE = 0.1
#: A claim this close to the witness is nearly right.
LITTLE = 1e-2
#: What is said of an entry that is seen to be off, but by no more than rounding may do to honest code.
ROUNDS_ALIKE = (
    "claim and derivative differ, but by no more than the rounding of a value of this size may leave in honest code; "
    "values or a claim with more digits decide"
)
#: What is said of a zero that is the flat of a staircase.
STAIRCASE = "flat at the point, but on other levels farther away: a staircase, whose derivative of zero means nothing"
#: What is said of an entry that would be refuted if there had been evaluations left for the second look.
SUSPECT = "suspect: the first look refutes it, but the budget or the time ended before a second look could agree"

#: Picked from by number: to fill an array with a member of an enumeration takes numpy ten times as long.
_VERDICTS = np.array([Verdict.UNDECIDED, Verdict.CONFIRMED, Verdict.REFUTED], dtype=object)
#: Why an entry is confirmed that only the allowance for rounding confirms.
BY_ROUNDING = "confirmed within the rounding of the function's value"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Examined:
    """Entries of a claim after examination; arrays have shape (m, d): outputs by examined variables.

    Attributes
    ----------
    claim, value, bound : ndarray
    left, right : ndarray
        One-sided slopes at kinks; NaN elsewhere.
    verdict : ndarray of object
        A `Verdict` each.
    source, reason : ndarray of object
        The witness that decided; why an entry is undecided, or was decided by more than the plain rule.
    noise : ndarray, shape (m,)
        Noise level of each output, where it was measured.
    """

    claim: Array
    value: Array
    bound: Array
    left: Array
    right: Array
    verdict: np.ndarray[tuple[int, ...], np.dtype[np.object_]]
    source: np.ndarray[tuple[int, ...], np.dtype[np.object_]]
    reason: np.ndarray[tuple[int, ...], np.dtype[np.object_]]
    noise: Array

    @property
    def jumps(self) -> BoolArray:
        """Entries whose values jump at the point."""
        return np.asarray(self.reason == REASONS[Nature.JUMP])

    @property
    def stairs(self) -> BoolArray:
        """Entries that are flat at the point and on other levels farther away."""
        return np.asarray(self.reason == STAIRCASE)

    @property
    def digits(self) -> Array:
        """Decimal digits to which claim and witness are seen to agree."""
        return digits_agreed(self.claim, self.value, self.bound)


class Desk:
    """Collects testimonies about the entries of one claim and applies the rule after each."""

    def __init__(
        self,
        claim: Array,
        centre: Array,
        typical: Array,
        rel_tol: float,
        abs_tol: float | Array,
        unit_roundoff: float,
        magnitude: Array | None = None,
    ) -> None:
        self.claim = claim
        self.typical = typical
        self.rel_tol, self.abs_tol = rel_tol, abs_tol
        # Outputs that are sums round as their terms do, however much of them cancels.
        largest = np.abs(centre) if magnitude is None else np.fmax(np.abs(centre), magnitude)
        # A value of zero shows no size: that of the other outputs, or 1 (as the difference witness assumes).
        largest = np.where(largest > 0, largest, largest.max() if largest.max() > 0 else 1.0)
        self.floor = unit_roundoff * largest
        self.noise = np.full(centre.size, np.nan)
        self.noise_along = np.full(claim.shape, np.nan)
        self.value = np.full(claim.shape, np.nan)
        self.bound = np.full(claim.shape, np.inf)
        self.left = np.full(claim.shape, np.nan)
        self.right = np.full(claim.shape, np.nan)
        self.confirmed = np.zeros(claim.shape, bool)
        self.refuted = np.zeros(claim.shape, bool)
        self.provisional = np.zeros(claim.shape, bool)
        self.closed = np.zeros(claim.shape, bool)
        self.source = np.full(claim.shape, "", dtype=object)
        self.reason = np.full(claim.shape, "", dtype=object)

    def tolerance(self, columns: IntArray) -> Tolerance:
        # The measured noise of an output, but never more than rounding can be: algorithmic noise buys no confirmation.
        # Along some variables the values may be rounded more coarsely than along others.
        floor = self.floor[:, None]
        heard = np.fmax(self.noise[:, None], self.noise_along[:, columns])
        rounding = np.minimum(np.fmax(heard, floor), 1e3 * floor)
        return Tolerance(rel_tol=self.rel_tol, abs_tol=self.abs_tol, rounding=rounding / self.typical[None, columns])

    def hear(
        self,
        testimony: Testimony,
        columns: IntArray,
        *,
        final: bool = True,
        replacing: bool = False,
        contested: bool = False,
    ) -> None:
        """Apply the rule to the entries still open.

        A quick look (not final) may confirm, by the tolerance that the caller asked for and no share of rounding unless
        both are exactly zero, but not refute; what replaces it is believed even where its bound is wider. What is
        contested cannot decide against the witness heard before it: where the two part beyond their bounds, the entry
        stays open.
        """
        if final:
            self.noise = np.fmax(self.noise, testimony.noise)
            heard = self.noise_along[:, columns]
            self.noise_along[:, columns] = np.fmax(heard, testimony.noise_along.T)
        tolerance = self.tolerance(columns)
        part = self._part(columns)
        claim, value, bound = self.claim[part], testimony.value.T, testimony.bound.T
        if not final:
            zero = (claim == 0) & (value == 0)
            tolerance = replace(tolerance, rounding=np.where(zero, tolerance.rounding, 0.0))
        left, right = testimony.left.T, testimony.right.T
        if np.isfinite(left).any():
            # At a kink the bound covers half the gap between the slopes; the rest is what the slopes may be off.
            slope_error = np.nan_to_num(bound - np.abs(right - left) / 2)
            outcome = judge(claim, value, bound, tolerance, left=left, right=right, slope_error=slope_error)
        else:
            outcome = judge(claim, value, bound, tolerance)
        fresh = ~self.confirmed[part] & ~self.refuted[part] & ~self.closed[part]
        if contested:
            fresh = fresh & ~self._conflict(part, value, bound)
        by_rounding = self._only_by_rounding(outcome.confirmed, tolerance, columns, value, bound)
        confirmed = fresh & outcome.confirmed & ~by_rounding
        sharper = fresh & ((bound < self.bound[part]) | replacing | (self.source[part] == ""))
        self.provisional[part] = np.where(sharper, by_rounding, self.provisional[part])
        # A later witness replaces an earlier one where it decides, or knows more.
        better = confirmed | (fresh & outcome.refuted & final) | sharper
        for mine, theirs in (
            (self.value, value),
            (self.bound, bound),
            (self.left, left),
            (self.right, right),
        ):
            mine[part] = np.where(better, theirs, mine[part])
        self.source[part] = np.where(better, testimony.source, self.source[part])
        self.confirmed[part] |= confirmed
        if final:
            self.refuted[part] |= fresh & outcome.refuted
        self._note(testimony, columns, better)
        if replacing:
            self._close(part)

    def _part(self, columns: IntArray) -> tuple[slice, slice | IntArray]:
        """Where these columns (increasing) stand in the arrays: as a slice if they are all, which is five times as fast
        to read and to write.
        """
        return slice(None), slice(None) if columns.size == self.claim.shape[1] else columns

    def _close(self, part: tuple[slice, slice | IntArray]) -> None:
        """Close the entries for which no derivative exists, or none that differences of any size agree on.

        On a plateau the derivative is zero and means nothing; another witness would only repeat that zero. Where digits
        are cut off there is a plateau too, and a claim of zero stays open.
        """
        reason = self.reason[part]
        self.closed[part] |= np.isin(reason, list(NO_DERIVATIVE)) & ~self.confirmed[part] & ~self.refuted[part]
        zero = (self.claim[part] == 0) & (reason == CUT_OFF)
        self.refuted[part] &= ~zero
        self.closed[part] |= zero & ~self.confirmed[part]

    def _conflict(self, part: tuple[slice, slice | IntArray], value: Array, bound: Array) -> BoolArray:
        """Entries where two witnesses part beyond their bounds; neither is believed then."""
        with np.errstate(invalid="ignore"):
            parted: BoolArray = np.abs(value - self.value[part]) > bound + self.bound[part]
        parted = parted & np.isfinite(bound) & np.isfinite(self.bound[part])
        reason = self.reason[part]
        reason[parted & ~self.confirmed[part] & ~self.refuted[part]] = (
            "two witnesses, differences and the complex step, contradict each other"
        )
        self.reason[part] = reason
        return parted

    def _only_by_rounding(
        self, confirmed: BoolArray, tolerance: Tolerance, columns: IntArray, value: Array, bound: Array
    ) -> BoolArray:
        """Entries, claimed not to be zero, that only the allowance for rounding confirms.

        That says little where x is tiny and the function is not. Another witness may see more; until then they are
        confirmed provisionally.
        """
        claim = self.claim[:, columns]
        with np.errstate(invalid="ignore"):
            plainly = np.abs(claim - value) + bound <= tolerance.plain(claim, value)
        only: BoolArray = confirmed & ~plainly & (claim != 0)
        return only

    def _note(self, testimony: Testimony, columns: IntArray, better: BoolArray) -> None:
        for (row, output), reason in testimony.reasons.items():
            if better[output, row]:
                self.reason[output, columns[row]] = reason

    def second(self, testimony: Testimony, columns: IntArray) -> None:
        """Keep a refutation only where the second look agrees: with the first one, and that the claim is off."""
        claim, value, bound = self.claim[:, columns], testimony.value.T, testimony.bound.T
        left, right = testimony.left.T, testimony.right.T
        tolerance = self.tolerance(columns)
        part = self._part(columns)
        alone = judge(claim, value, bound, tolerance, left=left, right=right).refuted
        with np.errstate(invalid="ignore"):
            parted = np.abs(value - self.value[part])
            # The first look is beyond three bounds already; a look on other nodes that sees the same value needs one.
            joined = (parted <= bound + self.bound[part]) & (np.abs(claim - value) > tolerance.of(claim, value) + bound)
        agrees = alone | (joined & ~np.isfinite(left) & ~np.isfinite(self.left[part]))
        fallen = self.refuted[part] & ~agrees
        self.refuted[part] &= agrees
        reason = self.reason[part]
        reason[fallen] = "a second look with other steps did not agree with the first"
        cut_short = np.zeros(self.claim.shape, bool)[part]
        for (row, output), why in testimony.reasons.items():
            cut_short[output, row] = why == SPENT
        reason[fallen & cut_short] = SUSPECT
        self.reason[part] = reason
        # Two looks that part show how much the first bound is worth; one that sees less shows how little is sure.
        doubt = np.fmax(parted, np.where(np.isfinite(bound), bound, 0.0))
        self.bound[part] = np.where(fallen & ~cut_short, np.fmax(self.bound[part], doubt), self.bound[part])

    def refuted_by_little(self) -> tuple[IntArray, Array]:
        """Columns with entries that are refuted although they are nearly right, and how much these are off: (m, d)."""
        with np.errstate(invalid="ignore"):
            gap = np.where(self.refuted, np.abs(self.claim - self.value), np.nan)
            gap[~(gap <= LITTLE * np.abs(self.value))] = np.nan
        columns = np.flatnonzero(np.isfinite(gap).any(axis=0))
        return columns, gap[:, columns]

    def excuse(self, columns: IntArray, explained: BoolArray) -> None:
        """Take back the refutation of entries whose difference the jumps of the model explain."""
        part = self._part(columns)
        self.refuted[part] &= ~explained
        self.closed[part] |= explained
        reason = self.reason[part]
        reason[explained] = INNER_JUMPS
        self.reason[part] = reason

    def hear_narrowly(self, columns: IntArray, slopes: Array, doubt: Array) -> None:
        """Take back refutations where slopes very close to the point (d, k, m), each ± doubt, are what is claimed.

        They must also be seen to differ from the witness, and the doubt be small beside what is in question.
        """
        part = self._part(columns)
        claim, value, bound = (array[part].T[:, None, :] for array in (self.claim, self.value, self.bound))
        with np.errstate(invalid="ignore"):
            for_claim = (np.abs(slopes - claim) <= doubt) & (doubt <= NARROW_SHARE * np.abs(claim - value))
            against = np.abs(slopes - value) > doubt + bound
        spoken = (for_claim & against).any(axis=1).T & self.refuted[part]
        self.refuted[part] &= ~spoken
        self.closed[part] |= spoken
        self.reason[part] = np.where(spoken, NARROW_FEATURE, self.reason[part])

    def run_out(self) -> None:
        """The budget or the time is over: what is open stays open."""
        self.reason[~self.confirmed & ~self.refuted & (self.reason == "")] = SPENT

    def flat_columns(self) -> IntArray:
        """Columns in which every witness value and every claim is exactly zero."""
        return np.flatnonzero(((self.value == 0) & (self.claim == 0)).all(axis=0))

    def leave_open(self, columns: IntArray, entries: BoolArray, why: str) -> None:
        """Entries (m, d) of some columns that nobody can decide."""
        part = self._part(columns)
        for mine, mark in ((self.confirmed, False), (self.provisional, False), (self.closed, True)):
            mine[part] = np.where(entries, mark, mine[part])
        self.reason[part] = np.where(entries, why, self.reason[part])
        self.bound[part] = np.where(entries, np.inf, self.bound[part])

    def doubt(self, outputs: BoolArray) -> None:
        """Take back what a quick look confirmed of these outputs: the whole witness has to look."""
        self.confirmed[outputs] = False

    def open_columns(self) -> IntArray:
        return np.flatnonzero(~(self.confirmed | self.refuted | self.closed).all(axis=0))

    def refuted_columns(self) -> IntArray:
        return np.flatnonzero(self.refuted.any(axis=0))

    def result(self) -> Examined:
        self.confirmed |= self.provisional & ~self.refuted
        columns = np.arange(self.claim.shape[1])
        tolerance = self.tolerance(columns)
        verdict = _VERDICTS[np.where(self.refuted, 2, np.where(self.confirmed, 1, 0))]
        by_floor = self.confirmed & tolerance.floor_decides(self.claim, self.value) & (self.reason == "")
        self.reason[by_floor] = BY_ROUNDING
        undecided = ~self.confirmed & ~self.refuted & (self.reason == "")
        if undecided.any():
            self._explain_doubt(undecided)
        self.reason[self.refuted & ~np.isfinite(self.claim)] = "the claim is not a finite number while the witness is"
        return Examined(
            claim=self.claim,
            value=self.value,
            bound=self.bound,
            left=self.left,
            right=self.right,
            verdict=verdict,
            source=self.source,
            reason=self.reason,
            noise=self.noise,
        )

    def _explain_doubt(self, undecided: BoolArray) -> None:
        """Give every undecided entry without a reason its reason."""
        columns = np.arange(self.claim.shape[1])
        tolerance = self.tolerance(columns)
        with np.errstate(invalid="ignore"):
            gap = np.abs(self.claim - self.value)
            seen = gap > tolerance.plain(self.claim, self.value) + REFUTING_BOUNDS * self.bound
        known = np.isfinite(self.bound)
        self.reason[undecided & ~known] = "no witness could give a finite bound"
        self.reason[undecided & known & seen] = ROUNDS_ALIKE
        rest = undecided & known & ~seen
        for output in np.flatnonzero(rest.any(axis=1)):
            noise = self.noise[output]
            noisy = np.isfinite(noise) and noise > 100 * self.floor[output]
            doubt = f"noise of {number(noise, digits=2)} in the values" if noisy else "rounding and truncation"
            leaves = "makes the bound wider than the tolerance" if noisy else "leave a bound wider than the tolerance"
            self.reason[output, rest[output]] = f"{doubt} {leaves}; values with more digits decide"
