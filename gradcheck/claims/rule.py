"""When a claim counts as confirmed, refuted or undecided.

For a claim c, a witness w ± b and the tolerance T = abs_tol + rel_tol·max(|c|, |w|) + allowance·ε/τ:

* confirmed: |c − w| + b <= T, and the witness sees no difference beyond what was asked for, that is
  |c − w| <= abs_tol + rel_tol·max(|c|, |w|) + 3b: rounding may hide a difference, it does not excuse one that is seen;
  where the witness tells the derivative from zero, they must also agree in the first digit;
* refuted: |c − w| > T + 3b (a second look has to agree; see `examination`);
* else undecided.

At a kink the claim is measured against the hull of the one-sided slopes: inside it nobody can say, outside it by 3b the
claim is refuted. A claim that is NaN where the witness is finite is refuted. An infinite bound decides nothing.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array, BoolArray

#: Share of the rounding floor ε over the typical size τ of the variable that a claim may be off.
ALLOWANCE = 64.0
#: The same for a claim that is as good as zero. A zero at a smooth point (an optimum) must be confirmable: the bound of
#: the difference witness is about 200·ε/τ on its first interval, and up to 3000·ε/τ where it has to shrink or terms
#: cancel (measured at published optima and critical points).
ZERO_ALLOWANCE = 3000.0
#: A claim is as good as zero if its variable, moved by its own size, changes the value by less than so many ε.
ZERO_CLAIM = 1e5
#: Where the witness tells the derivative from zero, rounding confirms a claim only if both agree to this share of it.
LEAST_AGREED = 0.3
#: How many bounds beyond the tolerance a claim must be off to be refuted.
REFUTING_BOUNDS = 3.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tolerance:
    """What may separate a right claim from the truth.

    Attributes
    ----------
    rel_tol : float
    abs_tol : float or ndarray, broadcastable to the claim
    rounding : ndarray, broadcastable to the claim
        ε/τ: rounding floor of the output over the typical size of the variable.
    """

    rel_tol: float
    abs_tol: float | Array
    rounding: Array

    def of(self, claim: Array, value: Array) -> Array:
        """T for each entry; an entry without finite size has no relative part."""
        return self.plain(claim, value) + self.allowance(claim)

    def allowance(self, claim: Array) -> Array:
        """The part of T that rounding takes."""
        zero = np.abs(claim) <= ZERO_CLAIM * self.rounding
        return np.where(zero, ZERO_ALLOWANCE, ALLOWANCE) * self.rounding

    def plain(self, claim: Array, value: Array) -> Array:
        """The part of T that the caller asked for."""
        return self.abs_tol + self.rel_tol * _size(claim, value)

    def floor_decides(self, claim: Array, value: Array) -> BoolArray:
        """Where the rounding floor is the larger part of T."""
        decides: BoolArray = self.allowance(claim) > self.plain(claim, value)
        return decides


def _size(claim: Array, value: Array) -> Array:
    size: Array = np.fmax(np.abs(claim), np.abs(value))
    return np.where(np.isfinite(size), size, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judgement:
    """The rule's outcome for arrays of entries; neither mark set means undecided."""

    confirmed: BoolArray
    refuted: BoolArray


def judge(
    claim: Array,
    value: Array,
    bound: Array,
    tolerance: Tolerance,
    *,
    left: Array | None = None,
    right: Array | None = None,
    slope_error: Array | None = None,
) -> Judgement:
    """Apply the rule entry by entry.

    Parameters
    ----------
    claim, value, bound : ndarray of one shape
    tolerance : Tolerance
    left, right : ndarray, optional
        One-sided slopes where there is a kink; NaN elsewhere.
    slope_error : ndarray, optional
        Bound of these slopes.

    Returns
    -------
    Judgement
    """
    plain = tolerance.plain(claim, value)
    allowed = plain + tolerance.allowance(claim)
    with np.errstate(invalid="ignore"):
        gap = np.abs(claim - value)
        known = np.isfinite(bound) & np.isfinite(value)
        unseen = gap <= plain + REFUTING_BOUNDS * bound
        agreed = (gap + bound <= LEAST_AGREED * np.abs(claim)) | (np.abs(value) <= REFUTING_BOUNDS * bound)
        confirmed = known & np.isfinite(claim) & (gap + bound <= allowed) & unseen & (agreed | (gap + bound <= plain))
        refuted = known & ((gap > allowed + REFUTING_BOUNDS * bound) | ~np.isfinite(claim))
        if left is not None and right is not None:
            kink = np.isfinite(left) & np.isfinite(right)
            error = np.zeros_like(value) if slope_error is None else slope_error
            outside = np.maximum(np.minimum(left, right) - claim, claim - np.maximum(left, right))
            beyond = (outside > allowed + REFUTING_BOUNDS * error) | ~np.isfinite(claim)
            confirmed = confirmed & ~kink
            refuted = np.where(kink, beyond, refuted)
    return Judgement(confirmed=confirmed, refuted=refuted)


def digits_agreed(claim: Array, value: Array, bound: Array) -> Array:
    """Decimal digits to which claim and witness are seen to agree: the worst that the bound allows, from 0 to 17."""
    size = np.fmax(np.abs(claim), np.abs(value))
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = (np.abs(claim - value) + bound) / size
        digits = -np.log10(relative)
    digits = np.where(size == 0, np.where(bound == 0, 17.0, 0.0), digits)
    agreed: Array = np.where(np.isnan(digits), 0.0, digits).clip(0.0, 17.0)
    return agreed
