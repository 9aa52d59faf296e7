"""Models in which mistakes are planted: what people really differentiate, from two variables to sixty.

All are written so that complex numbers pass through them: their exact derivative is the complex step (Squire & Trapp
1998), correct to rounding, which needs nothing of the library and no second derivation that could itself be wrong.

A third of the models is kept aside (`aside=True`): they were not looked at while the rules were written.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

Function = Callable[[np.ndarray], Any]


def complex_step(function: Function, x: np.ndarray) -> np.ndarray:
    """Exact derivative, shape (n,) or (m, n); x flat."""
    rows = [np.imag(np.ravel(function(x + 1e-40j * unit))) / 1e-40 for unit in np.eye(x.size)]
    columns = np.stack(rows, axis=-1)
    return columns if np.ndim(function(x)) else columns[0]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Model:
    """One model; functions take a flat vector (n,).

    Attributes
    ----------
    name : str
    terms : tuple of callable
        The model is their sum.
    x0 : ndarray, shape (n,)
    shapes : tuple of (name, shape)
        How the model takes its parameters: empty for a flat vector, one without a name for a matrix, several for a dict
        of arrays.
    output : tuple of int
        Shape of what it returns.
    observations : int
        How many observations it sums or averages over; 0 for none.
    angles : tuple of int
        Which variables are angles in degrees.
    aside : bool
        Kept aside while the rules were written.
    """

    name: str
    terms: tuple[Function, ...]
    x0: np.ndarray
    shapes: tuple[tuple[str, tuple[int, ...]], ...] = ()
    output: tuple[int, ...] = ()
    observations: int = 0
    angles: tuple[int, ...] = ()
    aside: bool = False

    @property
    def kind(self) -> str:
        return "jacobian" if self.output else "gradient"

    def value(self, x: np.ndarray) -> Any:
        """Sum of the terms, in the shape of the output."""
        total = sum(term(x) for term in self.terms)
        return np.reshape(total, self.output) if self.output else total

    def derivative(self, x: np.ndarray, *, without: int | None = None) -> np.ndarray:
        """Exact derivative (n,) or (m, n), perhaps without one of the terms."""
        return sum(complex_step(term, x) for k, term in enumerate(self.terms) if k != without)

    def pack(self, x: np.ndarray) -> Any:
        """A flat vector as the model takes it."""
        if not self.shapes:
            return np.array(x)
        parts, first = {}, 0
        for name, shape in self.shapes:
            size = int(np.prod(shape))
            parts[name] = np.reshape(x[first : first + size], shape)
            first += size
        return parts.get("", parts)

    def flat(self, packed: Any) -> np.ndarray:
        """The vector of what the model takes."""
        return np.concatenate([np.ravel(p) for p in packed.values()]) if isinstance(packed, dict) else np.ravel(packed)

    def __call__(self, packed: Any) -> Any:
        return self.value(self.flat(packed))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Regimes:
    """A model of two regimes: below and above a threshold of one variable; both branches and their meeting are known.

    Attributes
    ----------
    below, above : callable
    variable : int
    threshold : float
    width : float
        Points lie within this distance of the threshold.
    """

    name: str
    below: Function
    above: Function
    variable: int
    threshold: float
    x0: np.ndarray
    width: float
    aside: bool = False

    def __call__(self, x: np.ndarray) -> Any:
        return self.below(x) if np.real(x[self.variable]) < self.threshold else self.above(x)

    def derivative(self, x: np.ndarray) -> np.ndarray:
        return complex_step(self, x)


def _spread(count: int, low: float, high: float) -> np.ndarray:
    """Fixed numbers that are neither even nor round: golden-ratio steps through an interval."""
    return low + (high - low) * ((0.137 + 0.6180339887498949 * np.arange(count)) % 1.0)


@dataclass(frozen=True, slots=True)
class _Data:
    """Observations that the models share."""

    inputs: np.ndarray = field(default_factory=lambda: _spread(20, -1.4, 1.9))
    noise: np.ndarray = field(default_factory=lambda: _spread(20, -0.31, 0.27)[::-1])
    more: np.ndarray = field(default_factory=lambda: _spread(160, -0.9, 1.1).reshape(20, 8))
    labels: np.ndarray = field(default_factory=lambda: (np.arange(20) * 7 % 3 == 0) * 1.0)


DATA = _Data()
RADIANS = np.pi / 180.0


# --- likelihoods and fits --------------------------------------------------------------------------------------------


def _normal(x: Any) -> Any:
    """Minus the log-likelihood of 12 observations; mean, logarithm of the scale."""
    return 0.5 * np.sum(((DATA.noise[:12] + 1.2 - x[0]) / np.exp(x[1])) ** 2)


def _normal_scale(x: Any) -> Any:
    return 12.0 * x[1]


def _logistic(x: Any) -> Any:
    margin = DATA.more[:14, :5] @ x
    return np.sum(np.log(1.0 + np.exp(margin)) - DATA.labels[:14] * margin)


def _ridge(x: Any) -> Any:
    return 0.35 * np.sum(x**2)


def _cholesky(x: Any) -> Any:
    """Two means and the factor of a covariance; its diagonal as logarithms."""
    first = (DATA.more[:11, 0] - x[0]) / np.exp(x[2])
    second = (DATA.more[:11, 1] - x[1] - x[3] * first) / np.exp(x[4])
    return 0.5 * np.sum(first**2 + second**2)


def _cholesky_scale(x: Any) -> Any:
    return 11.0 * (x[2] + x[4])


def _poisson(x: Any) -> Any:
    rate = DATA.more[:, :4] @ x
    return np.sum(np.exp(rate) - (DATA.labels + 1.0) * rate) / 20.0


def _polynomial(x: Any) -> Any:
    t = DATA.inputs[:15]
    return np.sum((x[0] + x[1] * t + x[2] * t**2 + x[3] * t**3 - np.sin(2.0 * t) - DATA.noise[:15]) ** 2) / 15.0


def _saturation(x: Any) -> Any:
    """Enzyme kinetics: logarithms of the largest rate and of the half-saturation, baseline."""
    dose = _spread(13, 0.2, 6.0)
    seen = 2.3 * dose / (1.7 + dose) + 0.3 * DATA.noise[:13]
    return np.sum((np.exp(x[0]) * dose / (np.exp(x[1]) + dose) + x[2] - seen) ** 2)


def _mixture(x: Any) -> Any:
    """Two normal populations; the share of the first is x[0] itself, between 0 and 1."""
    y = DATA.inputs[:17]
    first = np.exp(-0.5 * (y - x[1]) ** 2)
    second = np.exp(-0.5 * ((y - x[2]) / x[3]) ** 2) / x[3]
    return -np.sum(np.log(x[0] * first + (1.0 - x[0]) * second))


def _decay_residuals(x: Any) -> Any:
    t = _spread(10, 0.1, 3.0)
    return x[0] * np.exp(-x[1] * t) - DATA.noise[:10]


def _drift(x: Any) -> Any:
    return x[2] * _spread(10, 0.1, 3.0)


# --- structures and geometry -----------------------------------------------------------------------------------------


def _tip_load(x: Any) -> Any:
    """Deflection of a cantilever in mm; load in N, length, width and height in m."""
    return 1e3 * x[0] * x[1] ** 3 / (3.0 * 2.1e11 * x[2] * x[3] ** 3 / 12.0)


def _own_weight(x: Any) -> Any:
    return 1e3 * 7850.0 * 9.80665 * x[2] * x[3] * x[1] ** 4 / (8.0 * 2.1e11 * x[2] * x[3] ** 3 / 12.0)


def _triangle_perimeter(x: Any) -> Any:
    """Two sides and the angle between them in degrees."""
    return x[0] + x[1] + np.sqrt(x[0] ** 2 + x[1] ** 2 - 2.0 * x[0] * x[1] * np.cos(x[2] * RADIANS))


def _triangle_area(x: Any) -> Any:
    return 0.5 * x[0] * x[1] * np.sin(x[2] * RADIANS)


def _arm(x: Any) -> Any:
    """Tip of three links: angles in degrees, then lengths."""
    turned = np.cumsum(x[:3]) * RADIANS
    return np.array([np.sum(x[3:] * np.cos(turned)), np.sum(x[3:] * np.sin(turned))])


def _arm_miss(x: Any) -> Any:
    return np.sum((_arm(x) - np.array([1.1, 0.4])) ** 2)


def _arm_twist(x: Any) -> Any:
    return 0.2 * np.sum((x[:3] * RADIANS) ** 2)


def _stresses(x: Any) -> Any:
    """Six stresses of a hollow beam: width, height, wall, load."""
    width, height, wall, load = x
    inertia = width * height**3 / 12.0 - (width - 2 * wall) * (height - 2 * wall) ** 3 / 12.0
    at = np.array([0.2, 0.5, 0.9, 1.3, 1.8, 2.4])
    return load * at * height / (2.0 * inertia)


def _shear(x: Any) -> Any:
    return np.ones(6) * x[3] / (2.0 * x[2] * x[1])


def _chain_energy(x: Any) -> Any:
    """Twelve nodes in the plane, springs between neighbours, gravity; x is (12, 2)."""
    nodes = x.reshape(12, 2)
    steps = np.diff(nodes, axis=0)
    length = np.sqrt(np.sum(steps**2, axis=1))
    return np.sum(4.0 * (length - 0.8) ** 2)


def _chain_weight(x: Any) -> Any:
    return 0.3 * np.sum(x.reshape(12, 2)[:, 1] * (1.0 + 0.1 * np.arange(12)))


def _camera(x: Any) -> Any:
    """Image of four points: two angles in degrees, three shifts, focal length; the output is (4, 2)."""
    points = DATA.more[:4, :3]
    a, b = x[0] * RADIANS, x[1] * RADIANS
    px = points[:, 0] * np.cos(a) - points[:, 1] * np.sin(a) + x[2]
    turned = points[:, 0] * np.sin(a) + points[:, 1] * np.cos(a)
    py = turned * np.cos(b) - points[:, 2] * np.sin(b) + x[3]
    depth = turned * np.sin(b) + points[:, 2] * np.cos(b) + x[4]
    return np.stack([x[5] * px / depth, x[5] * py / depth], axis=1)


# --- flows, reactions, heat ------------------------------------------------------------------------------------------


def _arrhenius(x: Any) -> Any:
    """Rates at eight temperatures: logarithm of the factor, activation energy in kJ/mol, order."""
    temperature = _spread(8, 290.0, 380.0)
    rate = x[0] - x[1] * 1e3 / (8.314462618 * temperature) + x[2] * np.log(0.7 + 0.1 * np.arange(8))
    return np.sum((rate + 6.3 - 0.4 * DATA.noise[:8]) ** 2)


def _head_loss(x: Any) -> Any:
    """Three pipes in series and a bypass: flows in l/s, then diameters in m."""
    return np.sum(10.67 * np.array([120.0, 85.0, 210.0]) * (1e-3 * x[:3] / 130.0) ** 1.852 / x[3:] ** 4.87)


def _pumping(x: Any) -> Any:
    return 0.04 * np.sum(x[:3]) ** 1.3


def _fin(x: Any) -> Any:
    """Heat of a fin: film coefficient, conductivity, thickness in mm, length in mm."""
    film, conductivity, thickness, length = x[0], x[1], 1e-3 * x[2], 1e-3 * x[3]
    m = np.sqrt(2.0 * film / (conductivity * thickness))
    return 60.0 * np.sqrt(2.0 * film * conductivity * thickness) * np.tanh(m * length)


def _species(x: Any) -> Any:
    """Rates of three species that turn into one another."""
    a, b, c = x
    return np.array([-0.8 * a + 0.3 * b * c, 0.8 * a - 0.3 * b * c - 1.7 * b**2, 1.7 * b**2 - 0.2 * a * c])


def _circuit(x: Any) -> Any:
    """Currents into four nodes of a network."""
    links = np.array([[2.1, -0.7, -0.4, 0.0], [-0.7, 1.9, -0.5, -0.2], [-0.4, -0.5, 2.6, -0.9], [0.0, -0.2, -0.9, 1.4]])
    return links @ x


def _diodes(x: Any) -> Any:
    return 0.05 * np.exp(2.0 * x) * np.array([1.0, 1.4, 0.7, 1.9]) * np.roll(x, 1)


def _tanks(x: Any) -> Any:
    """Six tanks in a row; outflow by the square root of the level, one return line."""
    out = np.array([0.9, 1.3, 0.7, 1.1, 0.8, 1.6]) * np.sqrt(x)
    return -out + np.concatenate([[0.4 * out[5] + 0.02 * x[0] * x[3]], out[:5]])


# --- learning, control, fields ---------------------------------------------------------------------------------------


def _network(x: Any) -> Any:
    """One hidden layer: W (4, 3), b (4,), v (4,); nine observations."""
    hidden = np.tanh(DATA.more[:9, :3] @ x[:12].reshape(4, 3).T + x[12:16])
    return np.sum((hidden @ x[16:20] - np.sin(DATA.inputs[:9])) ** 2) / 9.0


def _decay_of_weights(x: Any) -> Any:
    return 0.02 * np.sum(x[:12] ** 2)


def _thrust(x: Any) -> Any:
    """Thirty thrusts on a damped mass; where and how fast it ends."""
    place, speed = 0.0, 0.0
    for push in x:
        speed = speed + 0.1 * (push - 0.3 * speed - 0.2 * place**3)
        place = place + 0.1 * speed
    return (place - 1.0) ** 2 + 0.5 * speed**2


def _effort(x: Any) -> Any:
    return 0.01 * np.sum(x**2)


def _risk(x: Any) -> Any:
    factor = DATA.more[:8, :]
    return x @ (factor.T @ factor + 0.1 * np.eye(8)) @ x - 0.5 * np.sum(x * np.linspace(0.3, 1.1, 8))


def _alignment(x: Any) -> Any:
    """A (3, 4) matrix that maps five vectors near five others."""
    return np.sum((DATA.more[:5, :3] @ x.reshape(3, 4) - DATA.more[5:10, :4]) ** 2)


def _field_data(x: Any) -> Any:
    """A picture of 7 by 8 near its data."""
    return 0.5 * np.sum((x.reshape(7, 8) - DATA.more[:7, :8]) ** 2)


def _field_smooth(x: Any) -> Any:
    u = x.reshape(7, 8)
    return np.sum(np.sqrt(0.1 + np.diff(u, axis=0) ** 2)) + 0.7 * np.sum(np.sqrt(0.1 + np.diff(u, axis=1) ** 2))


def _trajectory(x: Any) -> Any:
    """Five steps of two populations; six parameters; the output is (5, 2)."""
    prey, hunters, steps = x[4], x[5], []
    for _ in range(5):
        eaten = x[1] * prey * hunters
        prey, hunters = prey + 0.2 * (x[0] * prey - eaten), hunters + 0.2 * (x[2] * eaten - x[3] * hunters)
        steps.append([prey, hunters])
    return np.array(steps)


def _layer(x: Any) -> Any:
    """tanh(A X): X is (3, 2), the output (4, 2)."""
    return np.tanh(DATA.more[:4, :3] @ x.reshape(3, 2))


def _fluxes(x: Any) -> Any:
    """Fluxes between twenty cells."""
    return x**2 - 0.4 * np.roll(x, 1) * x


def _mean_field(x: Any) -> Any:
    """What the cells feel of their mean."""
    mean = np.sum(x * np.linspace(0.5, 1.5, 20)) / 20.0
    return 0.8 * np.sin(mean) * np.linspace(1.0, 2.0, 20)


MODELS = (
    Model(name="normal likelihood", terms=(_normal, _normal_scale), x0=np.array([0.83, -0.47]), observations=12),
    Model(
        name="logistic regression",
        terms=(_logistic, _ridge),
        x0=np.array([0.41, -0.73, 1.12, 0.29, -0.55]),
        observations=14,
    ),
    Model(
        name="covariance by its factor",
        terms=(_cholesky, _cholesky_scale),
        x0=np.array([0.21, -0.34, -0.52, 0.37, -0.61]),
        observations=11,
        aside=True,
    ),
    Model(name="Poisson counts", terms=(_poisson,), x0=np.array([0.37, -0.62, 0.51, 0.94]), observations=20),
    Model(name="polynomial fit", terms=(_polynomial,), x0=np.array([0.31, 1.44, -0.27, -0.68]), observations=15),
    Model(name="enzyme saturation", terms=(_saturation,), x0=np.array([0.74, 0.38, 0.17]), observations=13, aside=True),
    Model(name="two populations", terms=(_mixture,), x0=np.array([0.38, -0.57, 1.13, 0.71]), observations=17),
    Model(name="decay residuals", terms=(_decay_residuals, _drift), x0=np.array([1.34, 0.83, 0.29]), output=(10,)),
    Model(name="cantilever", terms=(_tip_load, _own_weight), x0=np.array([870.0, 1.37, 0.043, 0.081]), aside=True),
    Model(name="triangle", terms=(_triangle_perimeter, _triangle_area), x0=np.array([2.31, 1.74, 53.7]), angles=(2,)),
    Model(
        name="arm miss",
        terms=(_arm_miss, _arm_twist),
        x0=np.array([31.0, -47.0, 68.0, 0.92, 0.71, 0.43]),
        angles=(0, 1, 2),
    ),
    Model(
        name="arm tip",
        terms=(_arm,),
        x0=np.array([24.0, 39.0, -71.0, 0.83, 0.64, 0.37]),
        output=(2,),
        angles=(0, 1, 2),
        aside=True,
    ),
    Model(name="beam stresses", terms=(_stresses, _shear), x0=np.array([0.12, 0.21, 0.011, 3400.0]), output=(6,)),
    Model(
        name="hanging chain",
        terms=(_chain_energy, _chain_weight),
        x0=np.stack([_spread(12, 0.0, 0.3) + 0.9 * np.arange(12), _spread(12, -1.1, 0.4)], axis=1).ravel(),
        shapes=(("", (12, 2)),),
    ),
    Model(
        name="camera",
        terms=(_camera,),
        x0=np.array([17.0, -28.0, 0.24, -0.37, 4.1, 1.7]),
        output=(4, 2),
        angles=(0, 1),
        aside=True,
    ),
    Model(name="reaction rates", terms=(_arrhenius,), x0=np.array([13.2, 51.7, 0.83])),
    Model(
        name="pipes in series",
        terms=(_head_loss, _pumping),
        x0=np.array([21.0, 34.0, 17.0, 0.143, 0.187, 0.121]),
    ),
    Model(name="cooling fin", terms=(_fin,), x0=np.array([37.0, 205.0, 1.3, 42.0]), aside=True),
    Model(name="three species", terms=(_species,), x0=np.array([0.73, 0.41, 1.27]), output=(3,)),
    Model(
        name="diode circuit", terms=(_circuit, _diodes), x0=np.array([0.43, 0.71, 0.29, 0.86]), output=(4,), aside=True
    ),
    Model(name="tanks in a row", terms=(_tanks,), x0=np.array([1.2, 0.7, 1.9, 0.53, 1.4, 0.88]), output=(6,)),
    Model(
        name="hidden layer",
        terms=(_network, _decay_of_weights),
        x0=_spread(20, -0.9, 1.1),
        shapes=(("W", (4, 3)), ("b", (4,)), ("v", (4,))),
        observations=9,
    ),
    Model(name="thrust on a mass", terms=(_thrust, _effort), x0=_spread(30, 0.3, 1.7)),
    Model(name="risk of a mix", terms=(_risk,), x0=_spread(8, 0.05, 0.45), aside=True),
    Model(name="alignment", terms=(_alignment,), x0=_spread(12, -0.8, 1.2), shapes=(("", (3, 4)),), observations=20),
    Model(
        name="picture",
        terms=(_field_data, _field_smooth),
        x0=_spread(56, -1.0, 1.4),
        shapes=(("u", (7, 8)),),
        aside=True,
    ),
    Model(
        name="two species in steps",
        terms=(_trajectory,),
        x0=np.array([0.83, 0.37, 0.62, 0.48, 1.9, 0.74]),
        output=(5, 2),
    ),
    Model(name="matrix layer", terms=(_layer,), x0=_spread(6, -0.7, 0.9), shapes=(("", (3, 2)),), output=(4, 2)),
    Model(name="fluxes", terms=(_fluxes, _mean_field), x0=_spread(20, 0.4, 1.8), output=(20,), aside=True),
)


# --- models of two regimes -------------------------------------------------------------------------------------------


def _soft(x: Any) -> Any:
    return 0.5 * x[0] * x[1] ** 2 + 0.3 * x[1] * x[2]


def _with_stop(x: Any) -> Any:
    return _soft(x) + 40.0 * (x[1] - 0.5) ** 2 * x[2]


def _elastic(x: Any) -> Any:
    return 0.5 * x[1] * x[0] ** 2 + x[2] * x[0]


def _plastic(x: Any) -> Any:
    return 0.7 * x[1] * (x[0] - 0.35) + 0.5 * x[1] * 0.35**2 + x[2] * x[0] - 0.7 * 0.35 * x[1]


def _laminar(x: Any) -> Any:
    return 32.0 * x[0] / x[1] ** 2


def _turbulent(x: Any) -> Any:
    return 0.158 * x[0] ** 1.75 * 9.0 / x[1] ** 1.25


def _unsaturated(x: Any) -> Any:
    return x[1] * x[0] + 0.2 * x[2] ** 2


def _saturated(x: Any) -> Any:
    return x[1] * 0.8 * np.tanh(x[0] / 0.8) + 0.2 * x[2] ** 2


REGIMES = (
    Regimes(
        name="spring with a stop",
        below=_soft,
        above=_with_stop,
        variable=1,
        threshold=0.5,
        x0=np.array([3.1, 0.5, 1.7]),
        width=0.3,
    ),
    Regimes(
        name="yielding rod",
        below=_elastic,
        above=_plastic,
        variable=0,
        threshold=0.35,
        x0=np.array([0.35, 2.3, 0.8]),
        width=0.2,
        aside=True,
    ),
    Regimes(
        name="pipe flow",
        below=_laminar,
        above=_turbulent,
        variable=0,
        threshold=2.3,
        x0=np.array([2.3, 0.9]),
        width=1.2,
    ),
    Regimes(
        name="actuator",
        below=_unsaturated,
        above=_saturated,
        variable=0,
        threshold=0.6,
        x0=np.array([0.6, 1.9, -0.7]),
        width=0.4,
        aside=True,
    ),
)
