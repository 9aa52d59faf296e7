"""Which kind of noise: what the digits of the values say, and what they do from close by.

One set of thresholds for all parts that ask this question.
"""

from dataclasses import dataclass

import numpy as np

from gradcheck.records.arrays import Array
from gradcheck.records.noise import NoiseKind
from gradcheck.witnesses import fingerprints

EPSILON = float(np.finfo(float).eps)
#: Units in the last place of f: what is above is noise, what is below is rounding.
NOISY = 100.0
#: Times what the rounding of the point alone explains.
NOISY_ARGUMENT = 10.0
#: Noise over values that single precision somewhere inside leaves.
SINGLE_NOISE = (3e-9, 1.5e-6)
#: Standard deviation of one rounding to single precision, relative.
SINGLE_ROUNDING = 3.5e-8
#: Relative spacing of single precision.
SINGLE_STEP = 6e-8
#: Standard deviation of a uniform error, in units of its width.
UNIFORM = 12.0**-0.5
#: Fewer different values show no lattice.
FEWEST_VALUES = 3
#: Noise that exceeds what a lattice explains by more than this comes from elsewhere.
BEYOND_LATTICE = 3.0
#: Values that are multiples of a power of two so many spacings of floating-point numbers wide were left by a
#: subtraction.
CANCELLED_STEP = 8.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Digits:
    """What the digits of the values of one output say.

    Attributes
    ----------
    decimal : float
        Step of the decimal lattice on which the values lie; 0 if there is none.
    single : bool
        All are single-precision numbers.
    binary : float
        The largest power of two of which all values are multiples, if it is far wider than their rounding; else 0.
    """

    decimal: float = 0.0
    single: bool = False
    binary: float = 0.0


def digits_of(values: Array) -> Digits:
    """Read the digits of finite values (k,)."""
    values = np.unique(values)
    if values.size < FEWEST_VALUES:
        return Digits()
    magnitude = float(np.abs(values).max())
    single = fingerprints.single_precision(values)
    lattice = fingerprints.decimal_lattice(values)
    # Every binary fraction is a decimal one; single precision is the coarser lattice.
    decimal = 0.0 if single and lattice.quantum < SINGLE_STEP * magnitude else lattice.quantum
    return Digits(decimal=decimal, single=single, binary=_binary_step(values, magnitude))


def _binary_step(values: Array, magnitude: float) -> float:
    step = float(fingerprints.lowest_bits(values[values != 0.0]).min())
    return step if step >= CANCELLED_STEP * np.spacing(magnitude) else 0.0


def rounding_limit(largest: Array, argument: Array) -> Array:
    """Noise up to here is rounding.

    Parameters
    ----------
    largest : ndarray
        Largest size of a value.
    argument : ndarray, same shape
        Error of the value that the rounding of the point alone explains.
    """
    return np.fmax(NOISY * EPSILON * largest, NOISY_ARGUMENT * argument)


def explained_by_digits(digits: Digits, level: float, magnitude: float) -> tuple[NoiseKind, float] | None:
    """Kind and level where the digits of the values decide; None where they do not.

    `level` is what was measured otherwise, NaN if nothing was.
    """
    if digits.decimal > 0.0:
        own = UNIFORM * digits.decimal
        if not level > BEYOND_LATTICE * own:
            return NoiseKind.FEW_DIGITS, own
    if digits.single and not level > SINGLE_NOISE[1] * magnitude:
        own = UNIFORM * float(np.spacing(np.float32(magnitude)))
        return NoiseKind.SINGLE_PRECISION, own if np.isnan(level) else max(level, own)
    if digits.binary > 0.0 and level <= NOISY * digits.binary:
        return NoiseKind.ROUNDING, level
    return None


def kind_from_close_by(level: float, magnitude: float, *, stands_still: bool) -> NoiseKind:
    """Kind of repeatable noise above rounding that no digit explains.

    Parameters
    ----------
    level, magnitude : float
    stands_still : bool
        At steps far below those of single precision the values are smooth, and do not follow the function's slope: a
        quantity behind them stands still between its steps.
    """
    single = magnitude > 0 and SINGLE_NOISE[0] <= level / magnitude <= SINGLE_NOISE[1]
    return NoiseKind.SINGLE_PRECISION if stands_still and single else NoiseKind.INNER_TOLERANCE
