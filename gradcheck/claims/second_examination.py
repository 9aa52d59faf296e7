"""The inquiry that compares claimed second derivatives with second differences of function values."""

from dataclasses import dataclass, replace

import numpy as np

from gradcheck.claims.desk import _VERDICTS, ROUNDS_ALIKE, SUSPECT, Examined
from gradcheck.claims.examination import OTHER_WIDTH
from gradcheck.claims.rule import REFUTING_BOUNDS, Tolerance, judge
from gradcheck.evaluation.protocol import Inquiry
from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.difference_reasons import SPENT
from gradcheck.witnesses.hessian_difference import second_differences
from gradcheck.witnesses.steps import Room
from gradcheck.witnesses.testimony import Testimony

#: Why an entry stays open that the values themselves cannot decide.
FEW_DIGITS = (
    "second differences of the values leave a bound wider than the tolerance; a gradient claimed in the same call, "
    "once it is confirmed, shows more digits"
)
#: What independent errors of many terms add up to, at the most, in units of the root of the sum of their squares.
SUMMED = 4.0
#: As in `rule`, for a second derivative that is zero: the bound of the witness is about 400·ε/τ² there, and up to
#: 2e4·ε/τ² where the steps have to shrink (measured on published test problems, More, Garbow & Hillstrom 1981).
ZERO_ALLOWANCE = 1e5
OTHER_STEPS = "a second look with other steps did not agree with the first"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Curvature:
    """Second derivatives of a function of k variables after examination.

    Attributes
    ----------
    witness : Testimony
        Values and bounds (k, k), symmetric.
    tolerance : Tolerance
        Of the entries (k, k).
    """

    witness: Testimony
    tolerance: Tolerance

    def through(self, rows: Array) -> tuple[Array, Array, Tolerance]:
        """Value, bound and tolerance of the Hessian times each of some vectors (r, k): (k, r) each."""
        size = np.abs(rows)
        with np.errstate(invalid="ignore", over="ignore"):
            value = self.witness.value @ rows.T
            # An infinite bound that the vector does not touch says nothing about the product.
            bound = np.stack([self.witness.bound[:, row > 0] @ row[row > 0] for row in size], axis=1)
            rounding = self.tolerance.rounding @ size.T
        return value, bound, replace(self.tolerance, rounding=rounding)


def examine_second(
    base: Array,
    claim: Array,
    room: Room,
    centre: Array,
    *,
    rel_tol: float,
    abs_tol: float,
    unit_roundoff: float = np.finfo(float).eps / 2,
    terms: Array | None = None,
) -> Inquiry[tuple[Examined, Curvature]]:
    """Examine a claimed Hessian (k, k) of a function of one output.

    Parameters
    ----------
    base : ndarray, shape (k,)
    claim : ndarray, shape (k, k)
        Need not be symmetric; each place is judged.
    room : Room
        Along all k coordinates.
    centre : ndarray, shape (1,)
    rel_tol, abs_tol, unit_roundoff : float
    terms : ndarray, shape (k, k), optional
        Where the claims are sums of many right entries: the root of the sum of the squares of what is summed, of which
        each may be off by `rel_tol`.

    Returns
    -------
    Examined, Curvature
        The verdicts, and the witness with its tolerance. What is refuted has been looked at a second time, at other
        steps.
    """
    witness = yield from second_differences(base, room, centre)
    tolerance = Tolerance(
        rel_tol=rel_tol,
        abs_tol=abs_tol if terms is None else abs_tol + SUMMED * rel_tol * terms,
        rounding=_rounding(witness, centre, unit_roundoff) / np.outer(room.typical, room.typical),
        zero_allowance=ZERO_ALLOWANCE,
    )
    examined = judged(claim, witness.value, witness.bound, tolerance, _reasons(witness, claim.shape), witness.source)
    refuted = _is_refuted(examined)
    if refuted.any():
        other = replace(room, scale=room.scale * OTHER_WIDTH, widest=room.widest * OTHER_WIDTH)
        second = yield from second_differences(base, other, centre, wanted=refuted)
        examined = _agreed(examined, second, tolerance)
    return examined, Curvature(witness=witness, tolerance=tolerance)


def _rounding(witness: Testimony, centre: Array, unit_roundoff: float) -> float:
    """The floor ε of the values: their noise, but never more than rounding can be."""
    floor = unit_roundoff * (float(np.abs(centre).max()) or 1.0)
    return float(np.minimum(np.fmax(witness.noise.max(initial=0.0), floor), 1e3 * floor))


def _reasons(witness: Testimony, shape: tuple[int, ...]) -> np.ndarray[tuple[int, ...], np.dtype[np.object_]]:
    reasons = np.full(shape, "", dtype=object)
    for (i, j), reason in witness.reasons.items():
        reasons[i, j] = reasons[j, i] = reason
    return reasons


def judged(
    claim: Array,
    value: Array,
    bound: Array,
    tolerance: Tolerance,
    reasons: np.ndarray[tuple[int, ...], np.dtype[np.object_]],
    source: str,
) -> Examined:
    """The rule applied to arrays of one shape; undecided entries get their reason."""
    outcome = judge(claim, value, bound, tolerance)
    reason = np.where(outcome.confirmed, "", reasons).astype(object)
    reason[outcome.refuted] = np.where(np.isfinite(claim), "", NOT_FINITE)[outcome.refuted]
    by_floor = outcome.confirmed & tolerance.floor_decides(claim, value)
    reason[by_floor] = "confirmed within the rounding of the function's value"
    open_ = ~outcome.confirmed & ~outcome.refuted & (reason == "")
    with np.errstate(invalid="ignore"):
        seen = np.abs(claim - value) > tolerance.plain(claim, value) + REFUTING_BOUNDS * bound
    reason[open_] = np.where(~np.isfinite(bound), "no witness could give a finite bound", FEW_DIGITS)[open_]
    reason[open_ & seen & np.isfinite(bound)] = ROUNDS_ALIKE
    nothing = np.full(claim.shape, np.nan)
    return Examined(
        claim=claim,
        value=value,
        bound=bound,
        left=nothing,
        right=nothing,
        verdict=_VERDICTS[np.where(outcome.refuted, 2, np.where(outcome.confirmed, 1, 0))],
        source=np.full(claim.shape, source, dtype=object),
        reason=reason,
        noise=np.full(claim.shape[0], np.nan),
    )


NOT_FINITE = "the claim is not a finite number while the witness is"


def _is_refuted(examined: Examined) -> BoolArray:
    return np.asarray(examined.verdict == _VERDICTS[2])


def _agreed(examined: Examined, second: Testimony, tolerance: Tolerance) -> Examined:
    """Refutations stand only where the second look refutes as well, or sees the same value as the first."""
    refuted = _is_refuted(examined)
    again = judge(examined.claim, second.value, second.bound, tolerance).refuted
    with np.errstate(invalid="ignore"):
        parted = np.abs(second.value - examined.value)
        off = np.abs(examined.claim - second.value) > tolerance.of(examined.claim, second.value) + second.bound
    fallen = refuted & ~(again | (off & (parted <= second.bound + examined.bound)))
    if not fallen.any():
        return examined
    verdict, reason = examined.verdict.copy(), examined.reason.copy()
    verdict[fallen] = _VERDICTS[0]
    reason[fallen] = OTHER_STEPS
    for (i, j), why in second.reasons.items():
        if why == SPENT:
            for place in ((i, j), (j, i)):
                reason[place] = SUSPECT if fallen[place] else reason[place]
    known = np.isfinite(second.bound) & fallen & (reason == OTHER_STEPS)
    bound = np.where(known, np.fmax(examined.bound, np.fmax(parted, second.bound)), examined.bound)
    return replace(examined, verdict=verdict, reason=reason, bound=bound)
