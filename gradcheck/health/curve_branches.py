"""The two branches of an error curve: truncation grows with the step, noise and rounding with its inverse.

Each is a straight line in logarithms. Truncation is smooth, so its line is drawn through the run of points that keep
one slope, beginning nearest to the best step, where a single term rules. The errors of noise scatter over decades, so
their line has the median of all pairwise slopes (Theil 1950; Sen 1968) and their root mean square as its level.
"""

import numpy as np

from gradcheck.records.arrays import Array, BoolArray, IntArray
from gradcheck.records.estimate import Branch

#: Errors count as truncation where they exceed this many times what noise leaves, and what the reference resolves.
CLEAR = 5.0
#: Neighbouring slopes that differ by no more belong to one branch.
STEADY = 0.35
#: Flatter curves grow with the step too slowly to be a term of a power series.
LEAST_ORDER = 0.5
#: Points that make a branch.
TRUNCATION_LEAST, ROUNDOFF_LEAST = 3, 6


def truncation_branch(steps: Array, errors: Array, best: int, hidden: Array) -> Branch | None:
    """The branch above the best step.

    Parameters
    ----------
    steps, errors : ndarray, shape (k,)
        Steps increasing; errors may hold NaN and zeros.
    best : int
        Index of the best step.
    hidden : ndarray, shape (k,)
        What noise and the reference hide at each step.

    Returns
    -------
    Branch or None
        None if fewer than three points beyond the best step keep one slope of at least one half: linear and constant
        models, steps that are all coarser than the model's structure.
    """
    known = np.isfinite(errors) & (errors > 0)
    clear = known & (errors > CLEAR * hidden) & (np.arange(errors.size) > best)
    run = _first_steady_run(steps, errors, np.flatnonzero(clear))
    if run.size < TRUNCATION_LEAST:
        return None
    slope, level = np.polyfit(np.log(steps[run]), np.log(errors[run]), 1)
    return _branch(steps, float(slope), float(level), run)


def _first_steady_run(steps: Array, errors: Array, clear: IntArray) -> IntArray:
    """The indices of the first run of neighbours that keep one slope; the later ones see further terms, or waves."""
    for start in range(max(0, clear.size - TRUNCATION_LEAST + 1)):
        run = clear[start:]
        run = run[: int(np.argmax(np.diff(run, append=-1) != 1)) + 1]
        if run.size < TRUNCATION_LEAST:
            continue
        slopes = np.diff(np.log(errors[run])) / np.diff(np.log(steps[run]))
        first = float(np.median(slopes[: min(3, slopes.size)]))
        steady = np.abs(slopes - first) <= STEADY
        length = slopes.size if steady.all() else int(np.argmin(steady))
        if first >= LEAST_ORDER and length + 1 >= TRUNCATION_LEAST:
            return run[: length + 1]
    return clear[:0]


def roundoff_branch(steps: Array, errors: Array, best: int, resolved: float) -> Branch | None:
    """The branch below the best step.

    Parameters
    ----------
    steps, errors, best
        As in `truncation_branch`.
    resolved : float
        Errors below this are not seen by the reference.

    Returns
    -------
    Branch or None
        None if fewer than six errors show, or they do not grow as about 1/step: exact differences, or plateaus where
        every quotient is zero.
    """
    known: BoolArray = np.isfinite(errors) & (errors > 0) & (errors > resolved)
    below = np.flatnonzero(known & (np.arange(errors.size) < best))
    # The smallest steps may lie below the resolution of the values, where all quotients are zero or one and the same.
    for skipped in (0, below.size // 4, below.size // 2):
        run = below[skipped:]
        if run.size < ROUNDOFF_LEAST:
            return None
        across, up = np.log(steps[run]), np.log(errors[run])
        rows, columns = np.triu_indices(run.size, 1)
        slope = float(np.median((up[columns] - up[rows]) / (across[columns] - across[rows])))
        if abs(slope + 1) <= STEADY:
            # Rounding may cancel at half of the steps and leave much at the others: the mean square counts.
            shift = float(np.median(up - slope * across))
            spread = np.exp(np.clip(up - slope * across - shift, -300, 300))
            return _branch(steps, slope, shift + float(np.log(np.mean(spread**2))) / 2, run)
    return None


def _branch(steps: Array, slope: float, level: float, run: IntArray) -> Branch:
    with np.errstate(over="ignore", under="ignore"):
        return Branch(
            slope=slope,
            level=float(np.exp(level)),
            lower=float(steps[run[0]]),
            upper=float(steps[run[-1]]),
            errors=np.exp(level + slope * np.log(steps)),
        )
