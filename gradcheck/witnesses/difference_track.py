"""The course of one direction through the stages of the difference witness: what comes next, and what is kept.

States: ``probe`` (three pairs) → ``low`` (a line or a parabola: two wider pairs) or ``main`` (seven pairs) → ``fine``
or ``wide`` (five more pairs) → ``done``; from ``main`` also back to ``main`` on a smaller interval, or to ``ladder``.
For second derivatives ``probe`` and ``main`` lead to ``broad`` (twelve pairs on the widest interval that promises
well). From an interval that the ladder found, ``outward`` looks at wider ones before it is believed.
"""

from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import partial

import numpy as np

from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.candidates import Candidate, best_of, candidate_of, only_output
from gradcheck.witnesses.difference_reasons import (
    BREAK,
    CUT_OFF,
    DOUBTS,
    FAILS,
    NO_ROOM,
    REASONS,
    RIPPLED,
    SPENT,
    TOO_NARROW,
    UNSETTLED,
)
from gradcheck.witnesses.ladder import Nature, Rungs
from gradcheck.witnesses.outward import Outward
from gradcheck.witnesses.polynomial_fit import Fit
from gradcheck.witnesses.stencils import LOW, MOST_NODES, WIDE
from gradcheck.witnesses.two_sides import Sides, meeting
from gradcheck.witnesses.widening import narrower_share, promised_ratio

#: A noise level below this many floors is rounding of the result.
ROUNDING_MARGIN = 4.0
#: Below this many it is rounding inside the model, amplified by cancellation, if the coefficients left over do not
#: decay.
AMPLIFIED_MARGIN = 1e3
#: Coefficients left over are noise if the rounding of x inside the model explains them, but for this factor.
ARGUMENT_MARGIN = 4.0
#: Coefficients left over are noise if they are not larger than this many times the noise that the ladder heard.
HEARD_MARGIN = 6.0
#: The pair close to the point is at odds with the rest if it differs by more than so many times what noise leaves over.
NARROW_FEATURE = 20.0
#: A left-over tail below this many floors, that is below a thousandth of the value, may be digits of a cancelled sum.
CANCELLED = 1e13
#: What a wide fit left over is the noise of the ladder if it is not larger than this many times that.
HEARD_WIDE = 30.0
SHRINKS_MOST = 4
#: From the second half of the six coefficients of `probe` to the end of the fourteen of `main`, in halves of `probe`.
FORESEEN_SPANS = 2.7
GROWTHS_MOST = 4
#: No course is longer; in a box of a few units in the last place intervals stop shrinking.
STAGES_MOST = 40
#: What is known when the budget ends counts where the coefficients fall by this factor from one group to the next.
DECAYS_FAST = 30.0
#: The interval shrinks by 16 each time the model fails; after that the point itself is at the edge of its domain.
ESCAPES_MOST = 6
#: An interval grows where the bound exceeds this share of the value and the function is nearly a low polynomial.
COARSE_BOUND = 1e-9
#: An interval this much narrower than the variable says little about a function that does not change on it.
NARROW = 1e-3
#: A left-over tail below this share of the variation, that does not decay (that of a kink does), is a ripple: too fine
#: to be what the function is about.
RIPPLE = 1e-2

#: An interval of its own for `broad` is at least so much wider than that of `main` ...
BROAD_LEAST = 1.3
#: ... or, straight from `probe`, not narrower than this share of it; at most so many times are tried.
BROAD_STEEP = 0.2
BROADENED_MOST = 2
#: No interval is wider than this share of the size of the variable, which keeps its sign: wider ones may leave the
#: domain of the model.
LIMIT = 0.45


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
    wider, broadened, narrow : bool, int, float
        Whether intervals of its own, wider ones, suit what is sought; how often one was tried; the half-width before.
    met : dict of output -> (value, bound, half-width)
        Where each side is smooth on its own and both together are not: what they say together.
    small, ripple : ndarray of bool, shape (m,)
        Whether what sent the track to the ladder was small beside the function's variation; and did not decay either.
    coarse_flat, same : ndarray of bool, shape (m,)
        Where the coefficients that sent the track to the ladder did not decay; where they were as large on a narrower
        interval.
    outward : Outward or None
        The course from the interval that the ladder found to wider ones; None before it.
    inner_noise, inner_order : ndarray, shape (m,)
        Noise and order of the last fit of `main` that was kept.
    settled, narrowest : float
        Half-width below which the ladder saw the quotients settle; the least that `main` was measured on.
    varied : ndarray, shape (m,)
        Largest variation seen on an interval so far.
    heard : ndarray, shape (m,)
        Noise level that the ladder saw; 0 before it.
    noisy : ndarray of bool, shape (m,)
        Where the ladder found noise.
    values : ndarray, shape (27, m)
        Values at the nodes filled so far.
    slips : ndarray, shape (27,)
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
    wider: bool = False
    broadened: int = 0
    narrow: float = 0.0
    tail: Array = field(default_factory=lambda: np.empty(0))
    ripple: BoolArray = field(default_factory=lambda: np.empty(0, bool))
    small: BoolArray = field(default_factory=lambda: np.empty(0, bool))
    settled: float = 0.0
    narrowest: float = np.inf
    coarse_tail: Array = field(default_factory=lambda: np.empty(0))
    coarse_flat: BoolArray = field(default_factory=lambda: np.zeros(0, bool))
    same: BoolArray = field(default_factory=lambda: np.zeros(0, bool))
    outward: Outward | None = None
    inner_noise: Array = field(default_factory=lambda: np.zeros(0))
    inner_order: Array = field(default_factory=lambda: np.zeros(0))
    varied: Array = field(default_factory=lambda: np.zeros(0))
    heard: Array = field(default_factory=lambda: np.zeros(0))
    noisy: BoolArray = field(default_factory=lambda: np.zeros(0, bool))
    coarse: Candidate | None = None
    latest: Callable[[], Candidate] | None = None
    left: Array = field(default_factory=lambda: np.empty(0))
    right: Array = field(default_factory=lambda: np.empty(0))
    slope_error: Array = field(default_factory=lambda: np.empty(0))
    candidates: list[Candidate] = field(default_factory=list)
    reasons: dict[int, str] = field(default_factory=dict)
    met: dict[int, tuple[float, float, float]] = field(default_factory=dict)

    @staticmethod
    def begin(
        outputs: int, half: float, side: int, reach: float, other_reach: float, widest: float, wider: bool
    ) -> "Track":
        """A track before its first value; without room it is done at once."""
        track = Track(
            half=half,
            side=side,
            reach=reach,
            other_reach=other_reach,
            widest=widest,
            wider=wider,
            values=np.zeros((MOST_NODES, outputs)),
            slips=np.zeros(MOST_NODES),
            satisfied=np.zeros(outputs, bool),
            tail=np.full(outputs, np.inf),
            heard=np.zeros(outputs),
            varied=np.zeros(outputs),
            noisy=np.zeros(outputs, bool),
            coarse_flat=np.zeros(outputs, bool),
            same=np.zeros(outputs, bool),
            inner_noise=np.zeros(outputs),
            inner_order=np.full(outputs, np.inf),
            left=np.full(outputs, np.nan),
            right=np.full(outputs, np.nan),
            slope_error=np.full(outputs, np.nan),
        )
        if half <= 0:
            track.stop(NO_ROOM)
        return track

    def stop(self, reason: str) -> None:
        """End here; outputs without an answer get the reason."""
        if reason == SPENT and self.latest is not None and not self.wider:
            # Better than nothing: what is left over counts as noise, so the bound is wide.
            unheard = np.full(self.satisfied.size, np.nan)
            latest = self.latest()
            wide = np.where(self.satisfied, np.inf, latest.bound)
            self.candidates.append(replace(latest, bound=wide, noise=unheard))
        for output in np.flatnonzero(~self.satisfied):
            self.reasons.setdefault(int(output), reason)
        self.stage = "done"

    def _if_it_decays(self, fits: Fit, i: int, half: float) -> Candidate:
        """Fit `i` where its coefficients end in rounding or decay fast; an alias or a step does neither."""
        decays = fits.before[i] > DECAYS_FAST * fits.tail[i]
        return candidate_of(fits, i, half, fits.resolved[i] & (decays | self._at_floor(fits, i)))

    # --- after a fit -----------------------------------------------------------------------------------------------

    def after_fit(self, fits: Fit, i: int, half: float, sides: Sides | None = None) -> None:
        """Decide what comes after the fit `i` of the stage just measured."""
        self.stages += 1
        if self.stages > STAGES_MOST:
            self.stop(UNSETTLED)
            return
        # needed where the budget ends and nowhere else
        self.latest = partial(self._if_it_decays, fits, i, half)
        if self._meets_plateau(fits, i):
            return
        at_floor = self._at_floor(fits, i)
        if sides is not None and self._meets_break(sides, i, half, at_floor):
            return
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
        elif self.stage == "broad":
            self._after_broad(fits, i, half, at_floor)
        elif self.stage == "outward":
            self._after_outward(fits, i, half, at_floor)
        elif self._meets_narrow_feature(fits, i):
            self._look_closer()
        else:
            # The wider interval may hold more structure than fits; then the main fit stands alone.
            self._keep(fits, i, half, at_floor | (fits.resolved[i] & self.noisy), self._pooled(fits, i))
            self._finish(fits, i)

    def _at_floor(self, fits: Fit, i: int) -> BoolArray:
        """(m,): where the coefficients of a fit end in rounding, or in noise that the ladder heard."""
        plainly: BoolArray = fits.resolved[i] & (fits.noise[i] <= ROUNDING_MARGIN * fits.floor[i])
        if plainly.all():  # the usual case; the rest takes three times as long
            return plainly
        flat = fits.resolved[i] & fits.flat[i]
        return np.asarray(
            plainly
            | (flat & (fits.noise[i] <= AMPLIFIED_MARGIN * fits.floor[i]))
            | (flat & (fits.noise[i] <= HEARD_MARGIN * self.heard))
            | (flat & (fits.noise[i] <= ARGUMENT_MARGIN * fits.argument[i]))
        )

    def _meets_break(self, sides: Sides, i: int, half: float, at_floor: BoolArray) -> bool:
        """Whether all is said because each side on its own is a polynomial although both together are not.

        Then the second derivative breaks at the point, or a higher one does and the second is that of both sides. Where
        the slopes differ it is a kink, for the ladder to tell.
        """
        both = meeting(sides, i)
        clear = self._at_floor(sides.left, i) & self._at_floor(sides.right, i) & both.one_slope
        clear &= ~at_floor & ~self.satisfied
        for output in np.flatnonzero(clear):
            self.met[int(output)] = float(both.value[output]), float(both.bound[output]), half
            if both.apart[output]:
                self.reasons[int(output)] = BREAK
        self.satisfied |= clear
        if clear.any() and self.satisfied.all():
            self.stage = "done"
        return bool(self.stage == "done")

    def _meets_plateau(self, fits: Fit, i: int) -> bool:
        """Whether the values do not change at all here although they did on a wider interval: digits were cut off."""
        if fits.variation[i].all():  # the usual case, and three times as fast
            self.varied = np.maximum(self.varied, fits.variation[i])
            return False
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
        narrow = (fits.apart[i] > NARROW_FEATURE) & self.satisfied & ~self.noisy
        if not narrow.any():
            return False
        for k, candidate in enumerate(self.candidates):
            self.candidates[k] = replace(candidate, bound=np.where(narrow, np.inf, candidate.bound))
        self.satisfied &= ~narrow
        self.tail = np.where(narrow, fits.variation[i], self.tail)
        self.coarse = self.coarse or candidate_of(fits, i, self.half, np.zeros_like(narrow))
        self.coarse_tail = np.where(narrow, fits.variation[i], 0.0)
        self.small, self.ripple = np.zeros_like(narrow), np.zeros_like(narrow)
        return True

    def _look_closer(self) -> None:
        if self.laddered:
            self.stop(UNSETTLED)
        else:
            self.stage = "ladder"

    def _after_probe(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        low = at_floor & (fits.order[i] <= 3)
        if not low.all():
            foreseen = self._foreseen(fits, i, half)
            if not self._broadens(fits, i, half, foreseen):
                # on the same interval, the values of `probe` serve `main` as well
                self.half, self.stage, self.filled = foreseen, "main", self.filled if foreseen == half else 0
        elif LOW * half <= self.reach:
            self.stage = "low"
        else:
            self._keep(fits, i, half, low)
            self._finish(fits, i)

    def _foreseen(self, fits: Fit, i: int, half: float) -> float:
        """The interval for seven pairs: this one, or a smaller one if the decay so far promises too little.

        Geometric decay from the first half of the coefficients to the second is carried on to the last of `main`.
        """
        first, second = fits.before[i], fits.tail[i]
        with np.errstate(divide="ignore", invalid="ignore"):
            decay = np.where(first > 0, second / first, 0.0)
            foreseen = second * decay ** (FORESEEN_SPANS)
            ratio = float(np.fmin.reduce(np.where(foreseen > fits.floor[i], fits.floor[i] / foreseen, 1.0)))
        too_little = decay.max() < 0.3 and ratio < 0.1
        return half * max(ratio ** (1 / 13), 0.2) if too_little else half

    def _after_main(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        self._keep(fits, i, half, at_floor)
        self.inner_noise, self.inner_order = fits.noise[i], fits.order[i].astype(float)
        # An interval of a few units in the last place does not get narrower any more.
        before, self.narrowest = self.narrowest, min(half, self.narrowest)
        waiting = ~self.satisfied
        if not waiting.any():
            if self._goes_outward(half) or self._broadens(fits, i, half, half):
                return
            nearly_low = bool((fits.order[i] <= 8).all())
            wide = self.side == 0 and nearly_low and half * WIDE <= self.reach
            self.stage = "wide" if wide else "fine"
            return
        decays = (fits.before[i] > 3 * fits.tail[i]) | ~fits.resolved[i]
        helped = fits.tail[i] < 0.3 * self.tail
        self.tail = fits.tail[i]
        if (waiting & decays & helped).any() and self.shrinks < SHRINKS_MOST:
            self.shrinks += 1
            ratio = float(
                (fits.floor[i] / np.maximum(fits.tail[i], fits.floor[i]))[waiting & (fits.tail[i] > 0)].min(initial=1.0)
            )
            self._restart(half * float(np.clip(ratio ** (1 / 13), 0.02, 0.7)))
        elif not self.laddered:
            self.coarse = candidate_of(fits, i, half, fits.resolved[i])
            self.coarse_tail, self.coarse_flat = fits.tail[i], fits.flat[i] & waiting
            self.small = fits.tail[i] < RIPPLE * fits.variation[i]
            # Beside a large value even a small ripple may be all the variation that is left: digits of a cancelled sum.
            self.ripple = (self.small | (fits.tail[i] < CANCELLED * fits.floor[i])) & fits.flat[i]
            self.stage = "ladder"
        elif half <= 1.5 * self.settled and 3 * half > self._failed_half:
            # Nearly the interval that failed: too little narrower to tell noise from structure.
            self._restart(half / 8)
        elif 1.5 * self.settled < half < before:
            # Probably noise that the ladder missed, its few values falling on one digit; the finest interval will tell.
            same = self._hears_the_same(fits, i, half)
            self.same |= same
            self._restart(self.settled if same[waiting].all() else max(half / 8, self.settled))
        else:
            # On the finest interval the few values may all fall on one digit; what was heard before counts as well.
            for output in np.flatnonzero(waiting & (self.same | self._hears_the_same(fits, i, half))):
                self._accept_noise(int(output))
            self.stop(UNSETTLED)

    def _pooled(self, fits: Fit, i: int) -> Array:
        """(m,): how much noisier the fit of `main` was than this one, where this one has taken that noise for
        structure.
        """
        with np.errstate(invalid="ignore", divide="ignore"):
            louder = np.where(fits.noise[i] > 0, self.inner_noise / fits.noise[i], 1.0)
        return np.where(fits.order[i] > self.inner_order + 1, np.fmax(louder, 1.0), 1.0)

    def _goes_outward(self, half: float) -> bool:
        """Whether the interval that the ladder found is to be looked at from outside before it is believed."""
        if self.outward is not None or self.coarse is None or not self.coarse_flat.any():
            return False
        self.outward = Outward.begin(half, self.coarse.half, self.coarse_tail, self.coarse_flat & ~self.noisy)
        return self._wider_outward(half)

    def _wider_outward(self, half: float) -> bool:
        assert self.outward is not None
        wider = self.outward.next_half(half)
        if wider:
            self.half, self.stage, self.filled = wider, "outward", 0
        return bool(wider)

    def _after_outward(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        outward = self.outward
        assert outward is not None
        outward.hear(fits, i, half, at_floor)
        if at_floor.any():
            self.candidates.append(candidate_of(fits, i, half, at_floor & self.coarse_flat))
        self.ripple = (self.ripple | outward.jumps) & ~outward.smooth
        if not self._wider_outward(half):
            self._restart(outward.inner)

    def _broadens(self, fits: Fit, i: int, half: float, narrow: float) -> bool:
        """Go on to the widest interval on which the stencil of `broad` promises to end in rounding as well.

        If it does not, `main` follows on the half-width `narrow`.
        """
        settled = self.satisfied | (fits.tail[i] <= ROUNDING_MARGIN * fits.floor[i])
        level = np.where(self.satisfied, fits.noise[i], np.maximum(fits.floor[i], self.heard))
        least = BROAD_LEAST if self.stage == "main" else BROAD_STEEP
        return self._broadened_to(half * promised_ratio(fits, i, settled, level), least * half, narrow)

    def _broadened_to(self, wanted: float, least: float, narrow: float) -> bool:
        half = min(wanted, self.reach, LIMIT * self.widest)
        if not self.wider or self.broadened >= BROADENED_MOST or half < least:
            return False
        self.narrow, self.half, self.stage, self.filled = narrow, half, "broad", 0
        self.broadened += 1
        return True

    def _after_broad(self, fits: Fit, i: int, half: float, at_floor: BoolArray) -> None:
        answered = self.satisfied.copy()
        level = np.maximum(fits.floor[i], self.heard)
        if self.noisy.any():
            # Digits that are cut off show no noise on the ladder; what the fit before it left over does.
            level = np.where(self.noisy, np.maximum(level, self.coarse_tail), level)
        accepted = at_floor | (fits.resolved[i] & self.noisy & (fits.tail[i] <= HEARD_MARGIN * level))
        self._keep(fits, i, half, accepted)
        if self._meets_narrow_feature(fits, i):
            self._look_closer()
            return
        missed = ~accepted
        decays = bool((fits.before[i] > 3 * fits.tail[i])[missed].all())
        narrower = half * narrower_share(fits, i, missed, level)
        worth = narrower > BROAD_LEAST * self.narrow or not self.candidates
        if missed.any() and decays and worth and self.broadened < BROADENED_MOST:
            self.broadened, self.half, self.filled = self.broadened + 1, narrower, 0
        elif not (answered | self.satisfied).all():
            self._restart(self.narrow)
        else:
            self.stop(UNSETTLED)

    @property
    def _failed_half(self) -> float:
        """Half-width of the interval that sent the track to the ladder; 0 before."""
        return 0.0 if self.coarse is None else self.coarse.half

    def _hears_the_same(self, fits: Fit, i: int, half: float) -> BoolArray:
        """Outputs whose left-over coefficients are as large on this interval as on the much wider one before the
        ladder.

        Those of a smooth function, and of one with a kink, shrink with the interval; noise does not.
        """
        narrower = 3 * half <= self._failed_half
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
        # Noise drowns a second derivative on a narrow interval: go on to the widest.
        elif not self._broadened_to(np.inf, BROAD_LEAST * self.half, self.half):
            self.stage = "fine" if self.filled == 14 else "done"

    def _accept_noise(self, output: int) -> None:
        self.noisy[output] = True
        if self.coarse is None or not np.isfinite(self.coarse.bound[output]):
            self.reasons[output] = UNSETTLED
        else:
            self.candidates.append(only_output(self.coarse, output))
        self.satisfied[output] = True

    # --- moves -----------------------------------------------------------------------------------------------------

    def _restart(self, half: float) -> None:
        self.half, self.stage, self.filled = half, "main", 0

    def _keep(self, fits: Fit, i: int, half: float, accepted: BoolArray, widening: Array | None = None) -> None:
        if accepted.any():
            kept = candidate_of(fits, i, half, accepted)
            self.candidates.append(kept if widening is None else replace(kept, bound=kept.bound * widening))
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
        coarse = (last.bound > COARSE_BOUND * np.abs(last.value)) & moves & (np.isfinite(last.bound) | self.wider)
        limit = min(self.reach, LIMIT * self.widest)
        if coarse.any() and (fits.order[i] <= 6).all() and self.growths < GROWTHS_MOST and last.half * 4 < limit:
            self.growths += 1
            unmoved = self.wider and (fits.order[i] == 1).all()
            self.half, self.stage, self.filled = limit if unmoved else min(last.half * 60, limit), "probe", 0
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
        for output in range(m):
            best = best_of(self.candidates, output, bool(self.noisy[output]))
            if best is not None:
                value[output], bound[output] = best.value[output], best.bound[output]
                half[output], noise[output] = best.half, best.noise[output]
                self._cover_ripple(output, value, bound)
            elif self.candidates:
                self.reasons.setdefault(output, TOO_NARROW)
            if output in self.met:
                value[output], bound[output], half[output] = self.met[output]
            elif np.isfinite(self.left[output]):
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
