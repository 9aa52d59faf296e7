"""Step sizes for difference quotients from derivatives and noise, and the error that each leaves.

Forward: h = 8^(1/4)·sqrt(ε/|f''|) (Moré & Wild 2012, for noise of standard deviation ε). Central: h = (3ε/|f'''|)^(1/3)
(Gill, Murray, Saunders & Wright 1983); the step of three values on one side follows from its remainder f'''h²/3
(Fornberg 1988) in the same way. All functions take arrays of one shape, or shapes that broadcast; a derivative of zero
gives an infinite step.
"""

import numpy as np

from gradcheck.records.arrays import Array

#: What independent errors of the values are multiplied by, at a step of 1: Euclidean norms of the weights.
FORWARD_NORM, CENTRAL_NORM, ONE_SIDED_NORM = np.sqrt(2.0), np.sqrt(0.5), np.sqrt(6.5)


def forward_step(noise: Array, second: Array) -> Array:
    """Moré & Wild's step of a forward (or backward) difference."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(second == 0, np.inf, 8**0.25 * np.sqrt(noise / np.abs(second)))


def forward_step_at_inflection(noise: Array, third: Array) -> Array:
    """The step of a forward difference where f'' vanishes: the minimum of |f'''|h²/6 + sqrt(2)·ε/h."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(third == 0, np.inf, np.cbrt(3 * FORWARD_NORM * noise / np.abs(third)))


def central_step(noise: Array, third: Array) -> Array:
    """Gill, Murray, Saunders & Wright's step of a central difference."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(third == 0, np.inf, np.cbrt(3 * noise / np.abs(third)))


def one_sided_step(noise: Array, third: Array) -> Array:
    """The step of the difference of second order from f(x), f(x+h) and f(x+2h): the minimum of |f'''|h²/3 + 4ε/h."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(third == 0, np.inf, np.cbrt(6 * noise / np.abs(third)))


def forward_error(step: Array, noise: Array, second: Array, third: Array) -> Array:
    """Two terms of the truncation, and the standard deviation that two noisy values leave."""
    return np.asarray(np.abs(second) * step / 2 + np.abs(third) * step**2 / 6 + FORWARD_NORM * noise / step)


def central_error(step: Array, noise: Array, third: Array) -> Array:
    """Truncation, and the standard deviation that two noisy values leave."""
    return np.asarray(np.abs(third) * step**2 / 6 + CENTRAL_NORM * noise / step)


def one_sided_error(step: Array, noise: Array, third: Array) -> Array:
    """Truncation, and the standard deviation that three noisy values on one side leave."""
    return np.asarray(np.abs(third) * step**2 / 3 + ONE_SIDED_NORM * noise / step)
