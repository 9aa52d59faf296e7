"""Fits that may become the answer of one direction, and the choice between them."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from gradcheck.records.arrays import Array, BoolArray
from gradcheck.witnesses.polynomial_fit import Fit

#: Noise that is no rounding (saws, cut-off digits) goes alike at neighbouring nodes: they are fewer samples than they
#: seem.
CORRELATED = 2.0


@dataclass(frozen=True, slots=True, eq=False)
class Candidate:
    """A fit that may become the answer: arrays (m,), and the half-width of its interval."""

    value: Array
    bound: Array
    noise: Array
    half: float


def candidate_of(fits: Fit, i: int, half: float, accepted: BoolArray) -> Candidate:
    """Fit `i`, with infinite bounds where it is not accepted."""
    return Candidate(
        np.where(accepted, fits.value[i], np.nan),
        np.where(accepted, fits.bound[i], np.inf),
        np.where(accepted, fits.noise[i], np.nan),
        half,
    )


def only_output(candidate: Candidate, output: int) -> Candidate:
    """The candidate for one output; it says nothing about the others."""
    only = np.arange(candidate.value.size) == output
    return Candidate(
        np.where(only, candidate.value, np.nan),
        np.where(only, candidate.bound, np.inf),
        np.where(only, candidate.noise, np.nan),
        candidate.half,
    )


def best_of(candidates: Sequence[Candidate], output: int, noisy: bool) -> Candidate | None:
    """The candidate of smallest bound that no finer one contradicts; None if all bounds are infinite."""
    kept: list[Candidate] = []
    for one in sorted(candidates, key=lambda candidate: candidate.half):
        wide = replace(one, bound=one.bound * CORRELATED) if noisy else one
        value, bound = wide.value[output], wide.bound[output]
        if np.isfinite(bound) and all(abs(value - k.value[output]) <= bound + k.bound[output] for k in kept):
            kept.append(wide)
    return min(kept, key=lambda candidate: float(candidate.bound[output])) if kept else None
