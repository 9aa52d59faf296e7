"""What the digits of values betray: single precision, or few decimal digits."""

import math

import numpy as np

from gradcheck.records.arrays import Array

FULL_SINGLE_BITS = 20  # of 24: integers and simple fractions have fewer
SINGLE_CLOSENESS = 1e-3  # of the spacing of single-precision numbers
MOST_DECIMAL_DIGITS = 9
MOST_DECIMALS = 12


def single_precision(values: Array) -> bool:
    """Whether all values (k,) are exact single-precision numbers, most of them with a full mantissa."""
    finite = values[np.isfinite(values) & (values != 0.0)]
    # Cast only what single precision can hold: an overflow would warn.
    if finite.size < 8 or np.abs(finite).max() > 1e38:
        return False
    if not (finite.astype(np.float32).astype(float) == finite).all():
        return False
    return float(np.median(significant_bits(finite))) >= FULL_SINGLE_BITS


def significant_bits(values: Array) -> Array:
    """(k,): length of the mantissa of each number without its trailing zeros."""
    mantissa = (np.frexp(np.abs(values))[0] * 2.0**53).astype(np.int64)
    lowest = (mantissa & -mantissa).astype(float)
    return np.asarray(53.0 - np.log2(lowest))


def decimal_quantum(values: Array) -> float:
    """The step of the decimal lattice on which all values (k,) lie; 0 if they lie on none.

    The coarser of two: the largest power of ten of which all are multiples, and, for at most nine significant digits,
    the step at the largest magnitude.
    """
    finite = values[np.isfinite(values)]
    largest = float(np.abs(finite).max(initial=0.0))
    if largest == 0.0:
        return 0.0
    return max(_fixed_quantum(finite, largest), _floating_quantum(finite, largest))


def _fixed_quantum(values: Array, largest: float) -> float:
    for decimals in range(-max(0, math.floor(math.log10(largest))), MOST_DECIMALS + 1):
        quantum = 10.0**-decimals
        if quantum < 64.0 * np.spacing(largest):
            break  # every number lies on so fine a lattice
        if _multiples(values, decimals):
            return quantum
    return 0.0


def _floating_quantum(values: Array, largest: float) -> float:
    for digits in range(2, MOST_DECIMAL_DIGITS + 1):
        if all(float(f"{value:.{digits}g}") == value for value in values.tolist()):
            return float(10.0 ** (math.floor(math.log10(largest)) - digits + 1))
    return 0.0


def _multiples(values: Array, decimals: int) -> bool:
    # Division by an exact power of ten rounds correctly, so that it meets the double nearest to the decimal number.
    if decimals >= 0:
        return bool((np.rint(values * 10.0**decimals) / 10.0**decimals == values).all())
    return bool((np.rint(values / 10.0**-decimals) * 10.0**-decimals == values).all())


def crosses_a_single(lower: Array, upper: Array) -> bool:
    """Whether a coordinate of two neighbouring points (n,) rounds to different single-precision numbers.

    Only coordinates that lie far closer together than two such numbers bear witness: others differ anyway.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        below, above = lower.astype(np.float32), upper.astype(np.float32)
        close = np.abs(upper - lower) < SINGLE_CLOSENESS * np.spacing(np.maximum(np.abs(below), np.abs(above)))
    return bool((close & (below != above)).any())
