"""Derivatives of corpus functions to many digits.

A fixed precision is no reference: ``log(1 + exp(x))`` at x = -300 has the slope 0 in 100 digits. The digits are
doubled until the answer stops changing.
"""

from typing import Any

import mpmath

from benchmarks.corpus import Case

FIRST_DIGITS = 60
MOST_DIGITS = 1920
AGREEMENT = mpmath.mpf(10) ** -25
# doubles hardly go below; what is smaller counts as zero
NEGLIGIBLE = mpmath.mpf(10) ** -300
# Two zeros agree at any precision, so they count only from here on: the step below leaves two thirds of the
# digits, and a slope of 1e-300 beside a value of 1 needs 300 of them.
DIGITS_FOR_ZERO = 480

# a second difference leaves half of the digits at a step of a quarter of them
_DIGITS_FOR_ZERO = {1: DIGITS_FOR_ZERO, 2: 2 * DIGITS_FOR_ZERO}

_known: dict[tuple[str, float, int], Any] = {}


def slope(case: Case, x: float) -> Any:
    """The first derivative; see `derivative`."""
    return derivative(case, x)


def derivative(case: Case, x: float, order: int = 1) -> Any:
    """The derivative of order 1 or 2 at the double `x` as an mpf, good to 25 digits; 0 where it is below 1e-300.

    Raises
    ------
    ArithmeticError
        If the answer still changes at 1,920 digits.
    """
    key = case.name, x, order
    if key not in _known:
        _known[key] = _settled(case, x, order)
    return _known[key]


def _settled(case: Case, x: float, order: int) -> Any:
    digits = FIRST_DIGITS
    before = _central(case, x, digits, order)
    while digits < MOST_DIGITS:
        now = _central(case, x, 2 * digits, order)
        if max(abs(before), abs(now)) < NEGLIGIBLE:
            if digits >= _DIGITS_FOR_ZERO[order]:
                return mpmath.mpf(0)
        elif abs(now - before) <= AGREEMENT * abs(now):
            return now
        digits, before = 2 * digits, now
    raise ArithmeticError(f"the derivative of {case.name!r} at {x!r} does not settle: {before}")


def _central(case: Case, x: float, digits: int, order: int) -> Any:
    """A central difference whose truncation (h²) and round-off (10^-digits / h^order) are of one size."""
    with mpmath.workdps(digits):
        # relative to x where x is small, so that models in nanometres are resolved as well
        size = min(abs(mpmath.mpf(x)), 1) or mpmath.mpf(1)
        step = size * mpmath.mpf(10) ** (-(digits // (order + 2)))
        right, left = mpmath.mpf(x) + step, mpmath.mpf(x) - step
        up, down = case.exact(mpmath.mp, right), case.exact(mpmath.mp, left)
        if order == 1:
            return (up - down) / (right - left)
        return (up - 2 * case.exact(mpmath.mp, mpmath.mpf(x)) + down) / step**2
