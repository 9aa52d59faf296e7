"""What the digits of values betray: single precision, or few decimal digits."""

import math
from dataclasses import dataclass

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
    mantissa, _ = np.frexp(np.abs(values))
    return np.asarray(53.0 - np.log2(_lowest_bit(mantissa)))


def lowest_bits(values: Array) -> Array:
    """(k,): the largest power of two that divides each number; infinite where that is 0."""
    mantissa, exponent = np.frexp(np.abs(values))
    with np.errstate(divide="ignore", under="ignore"):
        return np.where(mantissa > 0, np.ldexp(_lowest_bit(mantissa), exponent - 53), np.inf)


def _lowest_bit(mantissa: Array) -> Array:
    """(k,): value of the last bit set of mantissas in [0.5, 1), in units of the last bit that there is."""
    whole = (mantissa * 2.0**53).astype(np.int64)
    return np.asarray((whole & -whole).astype(float))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DecimalLattice:
    """The lattice of few decimal digits on which values lie.

    Attributes
    ----------
    quantum : float
        Its step at the typical magnitude; 0 if there is no such lattice.
    coarsest : float
        Its step at the largest magnitude.
    whole : bool
        All values are whole numbers, and not all multiples of ten.
    """

    quantum: float = 0.0
    coarsest: float = 0.0
    whole: bool = False


def decimal_lattice(values: Array) -> DecimalLattice:
    """The decimal lattice of values (k,), if they lie on one.

    Either all are multiples of a power of ten, or all have at most nine significant digits; the coarser counts.
    """
    finite = np.abs(values[np.isfinite(values) & (values != 0.0)])
    if finite.size == 0:
        return DecimalLattice()
    largest, typical = float(finite.max()), float(np.median(finite))
    fixed, digits = _fixed_quantum(finite, largest), _significant_digits(finite)
    floating = [10.0 ** (math.floor(math.log10(size)) - digits + 1) for size in (typical, largest) if digits]
    return DecimalLattice(quantum=max([fixed, *floating[:1]]), coarsest=max([fixed, *floating]), whole=fixed == 1.0)


def _fixed_quantum(values: Array, largest: float) -> float:
    for decimals in range(-max(0, math.floor(math.log10(largest))), MOST_DECIMALS + 1):
        quantum = 10.0**-decimals
        if quantum < 64.0 * np.spacing(largest):
            break  # every number lies on so fine a lattice
        if _multiples(values, decimals):
            return quantum
    return 0.0


def _significant_digits(values: Array) -> int:
    """Fewest digits, from 2 to 9, that print all values exactly; 0 if nine do not."""
    for digits in range(2, MOST_DECIMAL_DIGITS + 1):
        if all(float(f"{value:.{digits}g}") == value for value in values.tolist()):
            return digits
    return 0


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
