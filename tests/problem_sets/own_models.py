"""Smooth scalar models of our own, 1 to 50 variables, with gradients written by hand.

Each stands for a way of modelling that people differentiate by hand, and go wrong in: means, angles in degrees,
logarithms of parameters, chains of layers, grids, likelihoods, badly scaled variables. All take complex arrays as well.
"""

from collections.abc import Callable
from typing import Any

import numpy as np

from tests.problem_sets.record import ScalarProblem

OWN = "our own"


def insulation_cost(x: Any) -> Any:
    """Material in proportion to the thickness, heat losses that fall with it."""
    return 35.0 * x[0] + 120.0 / (0.4 + 6.0 * x[0])


def insulation_cost_gradient(x: Any) -> Any:
    return np.array([35.0 - 720.0 / (0.4 + 6.0 * x[0]) ** 2])


def spring_energy(x: Any) -> Any:
    """Two springs of rest length 1 and 2 that hold a loaded point."""
    left, right = np.sqrt((x[0] + 1.0) ** 2 + x[1] ** 2), np.sqrt((x[0] - 2.0) ** 2 + x[1] ** 2)
    return 8.0 * (left - 1.0) ** 2 + 3.0 * (right - 2.0) ** 2 - 1.5 * x[1]


def spring_energy_gradient(x: Any) -> Any:
    left, right = np.sqrt((x[0] + 1.0) ** 2 + x[1] ** 2), np.sqrt((x[0] - 2.0) ** 2 + x[1] ** 2)
    pull_left, pull_right = 16.0 * (left - 1.0) / left, 6.0 * (right - 2.0) / right
    return np.array(
        [
            pull_left * (x[0] + 1.0) + pull_right * (x[0] - 2.0),
            pull_left * x[1] + pull_right * x[1] - 1.5,
        ]
    )


def throw_range(x: Any) -> Any:
    """How far a throw goes; speed in m/s, angle in degrees."""
    return x[0] ** 2 / 9.81 * np.sin(2.0 * x[1] * np.pi / 180.0)


def throw_range_gradient(x: Any) -> Any:
    angle = x[1] * np.pi / 180.0
    return np.array(
        [
            2.0 * x[0] / 9.81 * np.sin(2.0 * angle),
            x[0] ** 2 / 9.81 * 2.0 * np.cos(2.0 * angle) * np.pi / 180.0,
        ]
    )


def yield_of_two_steps(x: Any) -> Any:
    """Intermediate product of a consecutive reaction; parameters are the logarithms of two rates and of the time."""
    first, second, time = np.exp(x)
    return first / (second - first) * (np.exp(-first * time) - np.exp(-second * time))


def yield_of_two_steps_gradient(x: Any) -> Any:
    first, second, time = np.exp(x)
    gap = second - first
    early, late = np.exp(-first * time), np.exp(-second * time)
    by_first = second / gap**2 * (early - late) - first / gap * time * early
    by_second = -first / gap**2 * (early - late) + first / gap * time * late
    by_time = first / gap * (second * late - first * early)
    # parameters are logarithms, hence the factor of the parameter itself
    return np.array([by_first * first, by_second * second, by_time * time])


BEAM_POWERS = np.array([1.0, 3.0, -1.0, -3.0])


def beam_deflection(x: Any) -> Any:
    """Load times length cubed over width and height cubed."""
    return 4.0 / 2.1e5 * x[0] * x[1] ** 3 / (x[2] * x[3] ** 3)


def beam_deflection_gradient(x: Any) -> Any:
    return beam_deflection(x) * BEAM_POWERS / x


DECAY_T = np.array([0.0, 0.5, 1.0, 1.7, 2.6, 4.0, 6.5, 9.0])
DECAY_Y = np.array([5.1, 3.9, 3.2, 2.4, 1.9, 1.4, 1.1, 1.05])


def mean_squared_misfit(x: Any) -> Any:
    """Mean over the measurements of the squared misfit of an exponential decay."""
    misfit = x[0] * np.exp(-x[1] * DECAY_T) + x[2] - DECAY_Y
    return np.mean(misfit**2)


def mean_squared_misfit_gradient(x: Any) -> Any:
    decay = np.exp(-x[1] * DECAY_T)
    misfit = x[0] * decay + x[2] - DECAY_Y
    rows = np.stack([decay, -x[0] * DECAY_T * decay, np.ones(DECAY_T.size)])
    return 2.0 / DECAY_T.size * rows @ misfit


def log_sum_exp(x: Any) -> Any:
    """A smooth maximum."""
    return np.log(np.sum(np.exp(3.0 * x))) / 3.0


def log_sum_exp_gradient(x: Any) -> Any:
    weights = np.exp(3.0 * x)
    return weights / weights.sum()


def mixed_scales(x: Any) -> Any:
    """Capacitance (1e-9), stiffness (1e8), and four in between, all with an effect of order 1."""
    u = x / MIXED_SCALES
    return np.sum(np.sin(u)) + 0.3 * np.exp(u[0] - u[1]) + 0.2 * u[2] * u[3] ** 2 + u[4] / (1.0 + u[5] ** 2)


def mixed_scales_gradient(x: Any) -> Any:
    u = x / MIXED_SCALES
    gradient = np.cos(u)
    coupling = 0.3 * np.exp(u[0] - u[1])
    gradient[0] += coupling
    gradient[1] -= coupling
    gradient[2] += 0.2 * u[3] ** 2
    gradient[3] += 0.4 * u[2] * u[3]
    gradient[4] += 1.0 / (1.0 + u[5] ** 2)
    gradient[5] -= 2.0 * u[4] * u[5] / (1.0 + u[5] ** 2) ** 2
    return gradient / MIXED_SCALES


MIXED_SCALES = np.array([1e-9, 1e8, 1e-3, 1.0, 1e4, 20.0])

LABELS = np.array([1.0, 0.0, 1.0, 1.0, 0.0, 0.0, 1.0, 0.0, 1.0, 0.0, 0.0, 1.0])
FEATURES = np.stack([np.sin(1.7 * np.arange(12.0) * (k + 1) + k) for k in range(6)], axis=1)


def logistic_loss(x: Any) -> Any:
    """Mean negative log-likelihood of a logistic regression with a ridge."""
    score = FEATURES @ x
    return np.mean(np.log(1.0 + np.exp(score)) - LABELS * score) + 0.05 * (x @ x)


def logistic_loss_gradient(x: Any) -> Any:
    probability = 1.0 / (1.0 + np.exp(-(FEATURES @ x)))
    return FEATURES.T @ (probability - LABELS) / LABELS.size + 0.1 * x


def risk_and_return(x: Any) -> Any:
    """A quadratic form, a linear gain and costs that grow with the fourth power."""
    return 0.5 * x @ (COVARIANCE @ x) - GAIN @ x + 0.01 * np.sum(x**4)


def risk_and_return_gradient(x: Any) -> Any:
    return COVARIANCE @ x - GAIN + 0.04 * x**3


COVARIANCE = 0.6 ** np.abs(np.subtract.outer(np.arange(8), np.arange(8)))
GAIN = np.array([0.3, 0.1, 0.25, 0.4, 0.15, 0.2, 0.35, 0.05])

INPUTS = np.linspace(-1.0, 1.0, 9)
TARGETS = np.cos(2.5 * INPUTS)


def small_network(x: Any) -> Any:
    """Half the sum of squares of a network with one layer of four units: 4 weights, 4 shifts, 4 outputs, 1 offset."""
    weights, shifts, outputs = x[:12].reshape(3, 4)
    return np.sum((np.tanh(np.outer(INPUTS, weights) + shifts) @ outputs + x[12] - TARGETS) ** 2) / 2.0


def small_network_gradient(x: Any) -> Any:
    weights, shifts, outputs = x[:12].reshape(3, 4)
    hidden = np.tanh(np.outer(INPUTS, weights) + shifts)
    misfit = hidden @ outputs + x[12] - TARGETS
    back = misfit[:, None] * outputs * (1.0 - hidden**2)
    return np.concatenate([INPUTS @ back, back.sum(axis=0), misfit @ hidden, [misfit.sum()]])


def cascade(x: Any) -> Any:
    """Stages in series: the product of their transmissions."""
    return np.prod(1.0 - 0.4 * np.exp(-x))


def cascade_gradient(x: Any) -> Any:
    return cascade(x) * 0.4 * np.exp(-x) / (1.0 - 0.4 * np.exp(-x))


def pendulum_chain(x: Any) -> Any:
    """Potential of coupled pendulums."""
    return np.sum(1.0 - np.cos(x)) + 2.0 * np.sum(np.diff(x) ** 2) + 0.25 * np.sum(np.diff(x) ** 4)


def pendulum_chain_gradient(x: Any) -> Any:
    tension = 4.0 * np.diff(x) + np.diff(x) ** 3
    return np.sin(x) + np.concatenate([[0.0], tension]) - np.concatenate([tension, [0.0]])


def mixing_free_energy(x: Any) -> Any:
    """Ideal mixing and pairwise interaction of amounts."""
    total = np.sum(x)
    return np.sum(x * np.log(x / total)) + 0.8 * np.sum(x[:-1] * x[1:]) / total


def mixing_free_energy_gradient(x: Any) -> Any:
    total = np.sum(x)
    pairs = np.sum(x[:-1] * x[1:])
    neighbours = np.concatenate([[0.0], x[:-1]]) + np.concatenate([x[1:], [0.0]])
    return np.log(x / total) + 0.8 * neighbours / total - 0.8 * pairs / total**2


def membrane_energy(x: Any) -> Any:
    """A one-dimensional membrane with an exponential source, fixed at both ends."""
    h = 1.0 / (x.size + 1)
    padded = np.concatenate([[0.0], x, [0.0]])
    return np.sum(np.diff(padded) ** 2) / (2.0 * h) - h * np.sum(np.exp(x))


def membrane_energy_gradient(x: Any) -> Any:
    h = 1.0 / (x.size + 1)
    padded = np.concatenate([[0.0], x, [0.0]])
    return (2.0 * x - padded[:-2] - padded[2:]) / h - h * np.exp(x)


def curve_length(x: Any) -> Any:
    """Length of a polygon over an even grid from (0, 0) to (1, 1)."""
    h = 1.0 / (x.size + 1)
    rises = np.diff(np.concatenate([[0.0], x, [1.0]]))
    return np.sum(np.sqrt(h**2 + rises**2))


def curve_length_gradient(x: Any) -> Any:
    h = 1.0 / (x.size + 1)
    rises = np.diff(np.concatenate([[0.0], x, [1.0]]))
    sines = rises / np.sqrt(h**2 + rises**2)
    return sines[:-1] - sines[1:]


def well(x: Any) -> Any:
    """A bowl whose minimum lies exactly at (1, -2, 0.5): the gradient there is zero."""
    away = x - np.array([1.0, -2.0, 0.5])
    return 3.0 + away @ away + np.sum(away**4) + away[0] * away[1]


def well_gradient(x: Any) -> Any:
    away = x - np.array([1.0, -2.0, 0.5])
    return 2.0 * away + 4.0 * away**3 + np.array([away[1], away[0], 0.0])


def _own(name: str, function: Callable[[Any], Any], gradient: Callable[[Any], Any], x0: Any) -> ScalarProblem:
    return ScalarProblem(name=name, source=OWN, function=function, gradient=gradient, x0=np.asarray(x0))


def _ripple(n: int, centre: float, width: float) -> np.ndarray:
    """A point without symmetry, no entry like another."""
    return centre + width * np.sin(1.0 + 2.3 * np.arange(n)) * np.cos(0.17 * np.arange(n))


MODELS: tuple[ScalarProblem, ...] = (
    _own("insulation cost", insulation_cost, insulation_cost_gradient, [0.11]),
    _own("spring energy", spring_energy, spring_energy_gradient, [0.3, 0.8]),
    _own("throw range", throw_range, throw_range_gradient, [21.0, 32.0]),
    _own("yield of two steps", yield_of_two_steps, yield_of_two_steps_gradient, [-0.4, -1.3, 0.7]),
    _own("well at its minimum", well, well_gradient, [1.0, -2.0, 0.5]),
    _own("well", well, well_gradient, [0.4, -1.1, 0.9]),
    _own("mean squared misfit", mean_squared_misfit, mean_squared_misfit_gradient, [3.5, 0.6, 0.8]),
    _own("beam deflection", beam_deflection, beam_deflection_gradient, [900.0, 1800.0, 42.0, 95.0]),
    _own("log-sum-exp", log_sum_exp, log_sum_exp_gradient, [0.2, -0.5, 0.9, 0.4, -1.3]),
    _own("mixed scales", mixed_scales, mixed_scales_gradient, [4e-10, 7e7, 1.2e-3, -0.8, 9e3, 31.0]),
    _own("logistic loss", logistic_loss, logistic_loss_gradient, _ripple(6, 0.1, 0.9)),
    _own("risk and return", risk_and_return, risk_and_return_gradient, _ripple(8, 0.4, 0.5)),
    _own("cascade", cascade, cascade_gradient, _ripple(12, 0.8, 0.6)),
    _own("small network", small_network, small_network_gradient, _ripple(13, 0.1, 0.8)),
    _own("pendulum chain", pendulum_chain, pendulum_chain_gradient, _ripple(20, 0.2, 0.7)),
    _own("mixing free energy", mixing_free_energy, mixing_free_energy_gradient, _ripple(25, 1.0, 0.7)),
    _own("membrane energy", membrane_energy, membrane_energy_gradient, _ripple(30, 0.5, 0.4)),
    _own("curve length", curve_length, curve_length_gradient, _ripple(50, 0.5, 0.3)),
)
