"""The course of one direction through the stages of the difference witness: what comes next, and what is kept.

States: ``probe`` (three pairs) → ``low`` (a line or a parabola: two wider pairs) or ``main`` (seven pairs) → ``fine``
or ``wide`` (five more pairs) → ``done``; from ``main`` also back to ``main`` on a smaller interval, or to ``ladder``.
"""

from dataclasses import dataclass, field, replace

import numpy as np

from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.ladder import Nature, Rungs
from gradcheck.witnesses.polynomial_fit import Fit
from gradcheck.witnesses.stencils import LOW, MOST_NODES, WIDE

#: A noise level below this many floors is rounding of the result.
ROUNDING_MARGIN = 4.0
#: Below this many it is rounding inside the model, amplified by cancellation, if the coefficients left over do not
#: decay.
AMPLIFIED_MARGIN = 1e3
#: Coefficients left over are noise if they are not larger than this many times the noise that the ladder heard.
HEARD_MARGIN = 6.0
#: The pair close to the point is at odds with the rest if it differs by more than so many times what noise leaves over.
NARROW_FEATURE = 20.0
#: A left-over tail below this many floors, that is below a thousandth of the value, may be digits of a cancelled sum.
CANCELLED = 1e13
#: What a wide fit left over is the noise of the ladder if it is not larger than this many times that.
HEARD_WIDE = 30.0
#: Noise that is no rounding (saws, cut-off digits) goes alike at neighbouring nodes: they are fewer samples than they
#: seem.
CORRELATED = 2.0
SHRINKS_MOST = 4
#: From the second half of the six coefficients of `probe` to the end of the fourteen of `main`, in halves of `probe`.
FORESEEN_SPANS = 2.7
GROWTHS_MOST = 4
#: No course is longer; in a box of a few units in the last place intervals stop shrinking.
STAGES_MOST = 40
#: The interval shrinks by 16 each time the model fails; after that the point itself is at the edge of its domain.
ESCAPES_MOST = 6
#: An interval grows where the bound exceeds this share of the value and the function is nearly a low polynomial.
COARSE_BOUND = 1e-9
#: An interval this much narrower than the variable says little about a function that does not change on it.
NARROW = 1e-3
#: A left-over tail below this share of the variation, that does not decay (that of a kink does), is a ripple: too fine
#: to be what the function is about.
RIPPLE = 1e-2

REASONS = {
    Nature.KINK: "kink at the point: the slopes on both sides differ",
    Nature.JUMP: "jump at the point: the values on both sides differ",
    Nature.PLATEAU: "plateau: the values do not change at all at small steps",
    Nature.STEEP: "the difference quotients grow without limit as the step shrinks",
}
UNSETTLED = "the values settle at no step size"
SPENT = "the budget was spent"
NO_ROOM = "the bounds leave no room for a step"
FAILS = "the model fails close to the point"
CUT_OFF = "digits are cut off: the values do not change at small steps"
RIPPLED = "small steps and wide steps see different slopes: a ripple, an inner tolerance, or digits that were cut off"

#: Reasons that noise can bring about.
DOUBTS = (REASONS[Nature.JUMP], REASONS[Nature.PLATEAU], UNSETTLED, CUT_OFF, RIPPLED)


@dataclass(frozen=True, slots=True, eq=False)
class Candidate:
    """A fit that may become the answer: arrays (m,), and the half-width of its interval."""

    value: Array
    bound: Array
    noise: Array
    half: float


@dataclass(slots=True, eq=False)
class Track:
    """One direction on its way.

    Attributes
    ----------
    half : float
        Half-width of the interval, in units of the direction.
    side : int
        0 for both sides, +1 or −1 for one.
    reach, widest : float
        Largest half-width that the bounds allow, and that is sensible.
    small, ripple : ndarray of bool, shape (m,)
        Whether what sent the track to the ladder was small beside the function's variation; and did not decay either.
    settled : float
        Half-width below which the ladder saw the quotients settle.
    varied : ndarray, shape (m,)
        Largest variation seen on an interval so far.
    heard : ndarray, shape (m,)
        Noise level that the ladder saw; 0 before it.
    noisy : ndarray of bool, shape (m,)
        Where the ladder found noise.
    values : ndarray, shape (26, m)
        Values at the nodes filled so far.
    slips : ndarray, shape (26,)
        Displacement realised minus displacement meant.
    """

    half: float
    side: int
    reach: float
    other_reach: float
    widest: float
    values: Array
    slips: Array
    satisfied: BoolArray
    stage: str = "probe"
    filled: int = 0
    stages: int = 0
    shrinks: int = 0
    growths: int = 0
    escapes: int = 0
    laddered: bool = False
    tail: Array = field(default_factory=lambda: np.empty(0))
    ripple: BoolArray = field(default_factory=lambda: np.empty(0, bool))
    small: BoolArray = field(default_factory=lambda: np.empty(0, bool))
    settled: float = 0.0
    coarse_tail: Array = field(default_factory=lambda: np.empty(0))
    varied: Array = field(default_factory=lambda: np.zeros(0))
    heard: Array = field(default_factory=lambda: np.zeros(0))
    noisy: BoolArray = field(default_factory=lambda: np.zeros(0, bool))
    coarse: Candidate | None = None
    latest: Candidate | None = None
    left: Array = field(default_factory=lambda: np.empty(0))
    right: Array = field(default_factory=lambda: np.empty(0))
    slope_error: Array = field(default_factory=lambda: np.empty(0))
    candidates: list[Candidate] = field(default_factory=list)
    reasons: dict[int, str] = field(default_factory=dict)

    @staticmethod
    def begin(outputs: int, half: float, side: int, reach: float, other_reach: float, widest: float) -> "Track":
        """A track before its first value; without room it is done at once."""
        track = Track(
            half=half,
            side=side,
            reach=reach,
            other_reach=other_reach,
            widest=widest,
            values=np.zeros((MOST_NODES, outputs)),
            slips=np.zeros(MOST_NODES),
            satisfied=np.zeros(outputs, bool),
            tail=np.full(outputs, np.inf),
            heard=np.zeros(outputs),
            varied=np.zeros(outputs),
            noisy=np.zeros(outputs, bool),
            left=np.full(outputs, np.nan),
            right=np.full(outputs, np.nan),
            slope_error=np.full(outputs, np.nan),
        )
        if half <= 0:
            track.stop(NO_ROOM)
        return track

    def stop(self, reason: str) -> None:
        """End here; outputs without an answer get the reason."""
        if reason == SPENT and self.latest is not None:
            # Better than nothing: what is left over counts as noise, so the bound is wide.
            unheard = np.full(self.satisfied.size, np.nan)
            wide = np.where(self.satisfied, np.inf, self.latest.bound)
            self.candidates.append(replace(self.latest, bound=wide, noise=unheard))
        for output in np.flatnonzero(~self.satisfied):
            self.reasons.setdefault(int(output), reason)
        self.stage = "done"

    # --- after a fit -----------------------------------------------------------------------------------------------

    def after_fit(self, fits: Fit, i: int, half: float) -> None:
        """Decide what comes after the fit `i` of the stage just measured."""
        self.stages += 1
        if self.stages > STAGES_MOST:
            self.stop(UNSETTLED)
            return
        self.latest = _candidate(fits, i, half, fits.resolved[i])
        if self._meets_plateau(fits, i):
            return
        at_floor = fits.resolved[i] & (
            (fits.noise[i] <= ROUNDING_MARGIN * fits.floor[i])
            | (fits.flat[i] & (fits.noise[i] <= AMPLIFIED_MARGIN * fits.floor[i]))
            | (fits.flat[i] & (fits.noise[i] <= HEARD_MARGIN * self.heard))
        )
        if self.stage == "probe":
            self._after_probe(fits, i, half, at_floor)
        elif self.stage == "low":
            low = at_floor & (fits.order[i] <= 3) & (fits.apart[i] <= NARROW_FEATURE)
            self._keep(fits, i, half, low)
            if low.all():
                self._finish(fits, i)
            else:
                self.stage = "main"
        elif self.stage == "main":
            self._after_main(fits, i, half, at_floor)
        elif self._meets_narrow_feature(fits, i):
            if self.laddered:
                self.stop(UNSETTLED)
            else:
                self.stage = "ladder"
        else:
            # The wider interval may hold more structure than fits; then the main fit stands alone.
            self._keep(fits, i, half, at_floor | (fits.resolved[i] & self.noisy))
            self._finish(fits, i)

    def _meets_plateau(self, fits: Fit, i: int) -> bool:
        """Whether the values do not change at all here although they did on a wider interval: digits were cut off."""
        still = (fits.variation[i] == 0) & (self.varied > AMPLIFIED_MARGIN * fits.floor[i]) & ~self.satisfied
        self.varied = np.maximum(self.varied, fits.variation[i])
        for output in np.flatnonzero(still):
            if self.coarse is not None and self.small[output]:
                self._accept_noise(int(output))
            else:
                self.reasons[int(output)] = REASONS[Nature.PLATEAU]
        self.satisfied |= still
        if still.any() and self.satisfied.all():
            self.stage = "done"
        return bool(self.stage == "done")

    def _meets_narrow_feature(self, fits: Fit, i: int) -> bool:
        """Whether the pair close to the point parts from all other nodes: their common slope is not that there."""
        narrow = (fits.apart[i] > NARROW_FEATURE) & self.satisfied & ~self.noisy & (self.side == 0)
        if not narrow.any():
            return False
        for k, candidate in enumerate(self.candidates):
            self.candidates[k] = replace(candidate, bound=np.where(narrow, np.inf, candidate.bound))
        self.satisfied &= ~narrow
        self.tail = np.where(narrow, fits.variation[i], self.tail)
        self.coarse = self.coarse or _candidate(fits, i, self.half, np.zeros_like(narrow))
        self.coarse_tail = np.where(narrow, fits.variation[i], 0.0)
        self.small, self.ripple = np.zeros_like(narrow), np.zeros_like(narrow)
        return True

    def _after_probe(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        low = at_floor & (fits.order[i] <= 3)
        if not low.all():
            self._foresee(fits, i, half)
        elif LOW * half <= self.reach:
            self.stage = "low"
        else:
            self._keep(fits, i, half, low)
            self._finish(fits, i)

    def _foresee(self, fits: Fit, i: int, half: float) -> None:
        """Seven pairs come next: on this interval, or at once on a smaller one if the decay so far promises too little.

        Geometric decay from the first half of the coefficients to the second is carried on to the last of `main`.
        """
        first, second = fits.before[i], fits.tail[i]
        with np.errstate(divide="ignore", invalid="ignore"):
            decay = np.where(first > 0, second / first, 0.0)
            foreseen = second * decay ** (FORESEEN_SPANS)
            ratio = float(np.nanmin(np.where(foreseen > fits.floor[i], fits.floor[i] / foreseen, 1.0)))
        if decay.max() < 0.3 and ratio < 0.1:
            self._restart(half * max(ratio ** (1 / 13), 0.2))
        else:
            self.stage = "main"

    def _after_main(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        self._keep(fits, i, half, at_floor)
        waiting = ~self.satisfied
        if not waiting.any():
            nearly_low = bool((fits.order[i] <= 8).all())
            wide = self.side == 0 and nearly_low and half * WIDE <= self.reach
            self.stage = "wide" if wide else "fine"
            return
        decays = (fits.before[i] > 3 * fits.tail[i]) | ~fits.resolved[i]
        helped = fits.tail[i] < 0.3 * self.tail
        self.tail = fits.tail[i]
        if (waiting & decays & helped).any() and self.shrinks < SHRINKS_MOST:
            self.shrinks += 1
            ratio = float((fits.floor[i] / np.maximum(fits.tail[i], fits.floor[i]))[waiting & (fits.tail[i] > 0)].min())
            self._restart(half * float(np.clip(ratio ** (1 / 13), 0.02, 0.7)))
        elif not self.laddered:
            self.coarse = _candidate(fits, i, half, fits.resolved[i])
            self.coarse_tail = fits.tail[i]
            self.small = fits.tail[i] < RIPPLE * fits.variation[i]
            # Beside a large value even a small ripple may be all the variation that is left: digits of a cancelled sum.
            self.ripple = (self.small | (fits.tail[i] < CANCELLED * fits.floor[i])) & fits.flat[i]
            self.stage = "ladder"
        elif half > 1.5 * self.settled:
            # Probably noise that the ladder missed, its few values falling on one digit; the finest interval will tell.
            same = self._hears_the_same(fits, i, half)[waiting].all()
            self._restart(self.settled if same else max(half / 8, self.settled))
        else:
            for output in np.flatnonzero(self._hears_the_same(fits, i, half)):
                self._accept_noise(int(output))
            self.stop(UNSETTLED)

    def _hears_the_same(self, fits: Fit, i: int, half: float) -> BoolArray:
        """Outputs whose left-over coefficients are as large on this interval as on the much wider one before the
        ladder.

        Those of a smooth function, and of one with a kink, shrink with the interval; noise does not.
        """
        assert self.coarse is not None
        narrower = 4 * half <= self.coarse.half
        same: BoolArray = ~self.satisfied & narrower & fits.flat[i] & (fits.tail[i] >= 0.5 * self.coarse_tail)
        return same

    # --- after the ladder ------------------------------------------------------------------------------------------

    def after_ladder(self, rungs: Rungs, i: int, zero: BoolArray) -> None:
        """Accept noise, restart on a smaller interval, or end with a reason.

        `zero` (m,) marks outputs that are exactly zero at the point: zeros have no digits to be cut off.
        """
        self.laddered = True
        self.heard = rungs.noise[i]
        smaller = []
        for output in np.flatnonzero(~self.satisfied):
            nature = Nature(rungs.nature[i, output])
            if nature == Nature.NOISE and self.coarse_tail[output] > HEARD_WIDE * rungs.noise[i, output]:
                # Second differences that do not shrink, but much smaller than what the wide fit left over: rounding at
                # an inflection of something fast, not the noise that the wide fit met.
                nature = Nature.SMOOTH
            if nature == Nature.PLATEAU and self.small[output] and not zero[output]:
                # Digits that are cut off: steps much larger than they see through it.
                nature = Nature.NOISE
                self.reasons[int(output)] = CUT_OFF
            if nature in REASONS:
                self.reasons[int(output)] = REASONS[nature]
                self.satisfied[output] = True
                self.left[output], self.right[output] = rungs.left[i, output], rungs.right[i, output]
                self.slope_error[output] = rungs.slope_error[i, output]
            elif nature == Nature.NOISE:
                self._accept_noise(int(output))
            else:
                smaller.append((float(rungs.wide_step[i, output]), float(rungs.step[i, output])))
        if smaller:
            self.settled = min(step for _, step in smaller)
            self._restart(min(wide for wide, _ in smaller))
        elif not self.candidates:
            self.stop(UNSETTLED)
        else:
            self.stage = "fine" if self.filled == 14 else "done"

    def _accept_noise(self, output: int) -> None:
        coarse = self.coarse
        self.noisy[output] = True
        if coarse is None or not np.isfinite(coarse.bound[output]):
            self.reasons[output] = UNSETTLED
        else:
            only = np.arange(coarse.value.size) == output
            self.candidates.append(
                Candidate(
                    np.where(only, coarse.value, np.nan),
                    np.where(only, coarse.bound, np.inf),
                    np.where(only, coarse.noise, np.nan),
                    coarse.half,
                )
            )
        self.satisfied[output] = True

    # --- moves -----------------------------------------------------------------------------------------------------

    def _restart(self, half: float) -> None:
        self.half, self.stage, self.filled = half, "main", 0

    def _keep(self, fits: Fit, i: int, half: float, accepted: BoolArray) -> None:
        if accepted.any():
            self.candidates.append(_candidate(fits, i, half, accepted))
            self.satisfied |= accepted

    def _finish(self, fits: Fit, i: int) -> None:
        """Grow where rounding drowns a function that is nearly a low polynomial on this interval; else done."""
        if not self.candidates:
            self.stop(UNSETTLED)
            return
        last = self.candidates[-1]
        # A function that does not change at all need not be looked at wider, unless the interval is so narrow that this
        # says little.
        moves = (last.value != 0) | (last.half < NARROW * self.widest)
        coarse = (last.bound > COARSE_BOUND * np.abs(last.value)) & moves & np.isfinite(last.bound)
        # A variable keeps its sign: a wider interval may leave the domain of the model.
        limit = min(self.reach, 0.45 * self.widest)
        if coarse.any() and (fits.order[i] <= 6).all() and self.growths < GROWTHS_MOST and last.half * 4 < limit:
            self.growths += 1
            self.half, self.stage, self.filled = min(last.half * 60, limit), "probe", 0
        else:
            self.stop(UNSETTLED)

    def after_failure(self, up_failed: bool, down_failed: bool) -> None:
        """The model failed (NaN, exception) at some node: a smaller interval, then the side where it works."""
        self.escapes += 1
        if self.candidates:  # a wider interval was only to sharpen what is known
            self.stop(UNSETTLED)
        elif self.side == 0 and self.escapes >= ESCAPES_MOST and up_failed != down_failed:
            self.side = -1 if up_failed else 1
            self.reach = self.other_reach if up_failed else self.reach
            self.half, self.stage, self.filled = self.half * 16.0 ** (self.escapes - 1), "probe", 0
        elif self.escapes >= ESCAPES_MOST:
            self.stop(FAILS)
        else:
            self.half, self.stage, self.filled = self.half / 16, "probe", 0

    # --- the answer ------------------------------------------------------------------------------------------------

    def answer(self) -> tuple[Array, Array, Array, Array]:
        """Value, bound, half-width and noise, each (m,), of the fit of smallest bound that no finer fit contradicts."""
        m = self.satisfied.size
        value, bound = np.full(m, np.nan), np.full(m, np.inf)
        half, noise = np.full(m, np.nan), np.full(m, np.nan)
        ordered = sorted(self.candidates, key=lambda candidate: candidate.half)
        for output in range(m):
            kept: list[Candidate] = []
            for one in ordered:
                v, b = one.value[output], one.bound[output]
                b = b * CORRELATED if self.noisy[output] else b
                if np.isfinite(b) and all(abs(v - k.value[output]) <= b + k.bound[output] for k in kept):
                    kept.append(replace(one, bound=np.where(np.arange(m) == output, b, one.bound)))
            if kept:
                best = min(kept, key=lambda candidate: float(candidate.bound[output]))
                value[output], bound[output] = best.value[output], best.bound[output]
                half[output], noise[output] = best.half, best.noise[output]
                self._cover_ripple(output, value, bound)
            if np.isfinite(self.left[output]):
                value[output] = (self.left[output] + self.right[output]) / 2
                bound[output] = abs(self.right[output] - self.left[output]) / 2 + self.slope_error[output]
            elif output in self.reasons and self.reasons[output] in REASONS.values():
                bound[output] = np.inf
        return value, bound, half, noise

    def doubtful(self) -> BoolArray:
        """(m,): outputs whose values carry, or may carry, noise that the answer's own interval does not show."""
        doubts = self.noisy | (self.ripple if self.ripple.size else False)
        for output, reason in self.reasons.items():
            doubts[output] |= reason in DOUBTS
        return doubts

    def _cover_ripple(self, output: int, value: Array, bound: Array) -> None:
        """Where a small ripple makes fine and wide slopes differ, the bound covers both; neither is surely true."""
        coarse = self.coarse
        if coarse is None or not np.isfinite(coarse.bound[output]):
            return
        apart = abs(coarse.value[output] - value[output])
        if self.ripple[output] and apart > bound[output] + coarse.bound[output]:
            bound[output] = max(bound[output], coarse.bound[output]) + apart
            self.reasons.setdefault(output, RIPPLED)


def _candidate(fits: Fit, i: int, half: float, accepted: BoolArray) -> Candidate:
    return Candidate(
        np.where(accepted, fits.value[i], np.nan),
        np.where(accepted, fits.bound[i], np.inf),
        np.where(accepted, fits.noise[i], np.nan),
        half,
    )
