"""Single constructs of numpy and scipy as models of one number, grouped by what becomes of a tiny imaginary part.

All are smooth at `POINTS` in real numbers. The grouping was observed with numpy 2 and scipy 1.17.
"""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.integrate
import scipy.interpolate
import scipy.linalg
import scipy.optimize
import scipy.special

Model = Callable[[Any], Any]

#: Not 0 nor 1, and no knot of the tables below.
POINTS = (0.7, 0.37)

_KNOTS = np.array([-2.0, -1.0, 0.0, 1.0, 2.0, 3.0])
_TABLE = np.array([0.3, 0.1, 0.4, 1.2, 1.1, 1.9])
_trapezoid = getattr(np, "trapezoid", None) or getattr(np, "trapz")  # noqa: B009  # the older name, before numpy 2


def _real_of_real(value, x):
    """What newer numpy returns as complex although x is real, as a real number."""
    return value if np.iscomplexobj(x) else np.real(value)


def _matrix(x: Any) -> Any:
    """Symmetric and positive definite, with two different eigenvalues."""
    return np.array([[2 + x, 0.3 * x], [0.3 * x, 1.5 + x**2]])


def _side(x: Any) -> Any:
    return np.array([x, 1 + x**3])


def _into_a_float_buffer(x: Any) -> Any:
    buffer = np.zeros(2)
    buffer[:] = np.array([x, x**2])
    return buffer.sum()


def _into_a_float_entry(x: Any) -> Any:
    buffer = np.zeros(2)
    buffer[0] = x
    return buffer.sum()


def _decay(x: Any, start: Any, method: str) -> Any:
    solution = scipy.integrate.solve_ivp(lambda t, y: -x * y, (0, 1), start, method=method, rtol=1e-8, atol=1e-10)
    return solution.y[0, -1]


#: The derivative is not 0, yet the imaginary part comes back as 0, or wrong, without a word.
LOST: dict[str, Model] = {
    "builtin abs": lambda x: abs(x),
    "abs": lambda x: np.abs(x) * 2,
    "sign": lambda x: np.sign(x) * x if np.isrealobj(x) else np.real(np.sign(x)) * np.real(x),
    "real": lambda x: np.real(x) ** 2,
    "conj": lambda x: np.conj(x) * 3,
    "vdot": lambda x: np.vdot(_side(x), _side(x)),
    "norm": lambda x: np.linalg.norm(_side(x)),
    "std": lambda x: np.std(_side(x)),
    "var": lambda x: np.var(_side(x)),
    "cov": lambda x: np.cov(_side(x)),
    "slogdet": lambda x: np.linalg.slogdet(_matrix(x))[1],
    "cholesky": lambda x: np.linalg.cholesky(_matrix(x))[1, 1],
    "eigvalsh": lambda x: np.linalg.eigvalsh(_matrix(x))[0],
    "svd": lambda x: np.linalg.svd(_matrix(x), compute_uv=False)[0],
    "lstsq": lambda x: np.linalg.lstsq(np.array([[1, x], [x, 2], [1, 1 + x]]), np.array([1.0, 2.0, 4.0]))[0][0],
    "pinv": lambda x: np.linalg.pinv(np.array([[1, x], [x, 2], [1, 1 + x]]))[0, 2],
    "qr": lambda x: np.linalg.qr(_matrix(x))[1][0, 0],
    "real part of fft": lambda x: np.real(np.fft.fft(np.array([x, 2 * x, x**2])))[1],
    "cho_solve": lambda x: scipy.linalg.cho_solve(scipy.linalg.cho_factor(_matrix(x)), _side(x))[0],
    "jv": lambda x: scipy.special.jv(0, 30 * x),
}
if hasattr(np.linalg, "vecdot"):
    LOST["vecdot"] = lambda x: np.linalg.vecdot(_side(x), _side(x))

#: The imaginary part is cast away, with a ComplexWarning at best.
CAST: dict[str, Model] = {
    "spline at x": lambda x: scipy.interpolate.CubicSpline(_KNOTS, _TABLE)(x),
    "grid interpolator": lambda x: scipy.interpolate.RegularGridInterpolator((_KNOTS,), _TABLE)([x])[0],
    "quadrature": lambda x: scipy.integrate.quad(lambda t: np.exp(-x * t), 0, 1)[0],
    "initial values real, parameter complex": lambda x: _decay(x, np.ones(1), "RK45"),
    "float buffer": _into_a_float_buffer,
    "astype": lambda x: np.asarray(x).astype(float) * 2,
}

#: Complex numbers raise an exception.
RAISING: dict[str, Model] = {
    "builtin max": lambda x: max(x, 0.2),
    "less than": lambda x: x if x < 1 else 2 * x,
    "float": lambda x: float(x) * 2,
    "math": lambda x: math.sin(x),
    "hypot": lambda x: np.hypot(x, 1.0),
    "arctan2": lambda x: np.arctan2(x, 1.0),
    "cbrt": lambda x: np.cbrt(x),
    "deg2rad": lambda x: np.deg2rad(x),
    "floor": lambda x: np.floor(x) + x,
    "mod": lambda x: np.mod(x, 1.0),
    "heaviside": lambda x: np.heaviside(x, 0.0) * x,
    "logaddexp": lambda x: np.logaddexp(x, 0.0),
    "interp at x": lambda x: np.interp(x, _KNOTS, _TABLE),
    "float entry": _into_a_float_entry,
    "asarray as float": lambda x: np.asarray(x, float) * 2,
    "gammaln": lambda x: scipy.special.gammaln(x),
    "expit": lambda x: scipy.special.expit(x),
    "betainc": lambda x: scipy.special.betainc(2.0, 3.0, x),
    "brentq": lambda x: scipy.optimize.brentq(lambda t: t**3 + t - x, 0, 1, xtol=1e-14),
    "fsolve": lambda x: scipy.optimize.fsolve(lambda t: t**3 + t - x, 0.5, xtol=1e-14)[0],
    "lsoda": lambda x: _decay(x, np.atleast_1d(np.exp(3 * x)), "LSODA"),
    "pchip": lambda x: scipy.interpolate.PchipInterpolator(_KNOTS, _TABLE * np.exp(x))(0.3),
}

#: The imaginary part travels through.
CARRIED: dict[str, Model] = {
    "maximum": lambda x: np.maximum(x, 0.1) ** 2,
    "clip": lambda x: np.clip(x, 0.0, 1.0) ** 2,
    "max": lambda x: np.max(np.array([x, 0.1])) ** 2,
    "sort": lambda x: np.sort(np.array([x, 0.1, 2.0]))[1] ** 2,
    "median": lambda x: np.median(np.array([x, 0.1, 2.0])) ** 2,
    "sqrt": lambda x: np.sqrt(x),
    "power": lambda x: x**2.5,
    "exp": lambda x: np.exp(x),
    "log": lambda x: np.log(x),
    "sin": lambda x: np.sin(x),
    "cos": lambda x: np.cos(x),
    "tan": lambda x: np.tan(x),
    "arctan": lambda x: np.arctan(x),
    "arcsin": lambda x: np.arcsin(x),
    "dot": lambda x: np.dot(_side(x), _side(x)),
    "solve": lambda x: np.linalg.solve(_matrix(x), _side(x))[0],
    "inv": lambda x: np.linalg.inv(_matrix(x))[0, 1],
    "det": lambda x: np.linalg.det(_matrix(x)),
    "eigvals": lambda x: _real_of_real(np.linalg.eigvals(np.array([[2 + x, 1.0], [0.0, x**2]]))[0], x),
    "roots": lambda x: np.sum(np.roots(np.array([1.0, -3 - x, 2 * x])) ** 2),
    "cumsum": lambda x: np.cumsum(_side(x))[1],
    "trapezoid": lambda x: _trapezoid(np.array([1.0, x, x**2]), np.array([0.0, 1.0, 3.0])),
    "interp in the values": lambda x: np.interp(0.3, _KNOTS, _TABLE * np.exp(x)),
    "polyval": lambda x: np.polyval([1.0, -2.0, 0.5], x),
    "zeros_like": lambda x: np.sum(np.zeros_like(_side(x)) + _side(x)),
    "erf": lambda x: scipy.special.erf(x),
    "gamma": lambda x: scipy.special.gamma(x),
    "loggamma": lambda x: scipy.special.loggamma(x),
    "logsumexp": lambda x: scipy.special.logsumexp(_side(x)),
    "ndtr": lambda x: scipy.special.ndtr(x),
    "spline in the values": lambda x: scipy.interpolate.CubicSpline(_KNOTS, _TABLE * np.exp(x))(0.3),
    "lu_solve": lambda x: scipy.linalg.lu_solve(scipy.linalg.lu_factor(_matrix(x)), _side(x))[0],
    "expm": lambda x: scipy.linalg.expm(_matrix(x))[0, 1],
    "newton": lambda x: scipy.optimize.newton(lambda t: t**3 + t - x, 0.5 + 0 * x, lambda t: 3 * t**2 + 1, tol=1e-14),
}

#: The imaginary part travels through, but the step control looks at complex moduli: neither analytic nor wrong.
ADAPTIVE: dict[str, Model] = {
    "initial values complex": lambda x: _decay(x, np.atleast_1d(np.exp(3 * x)), "RK45"),
    "stiff, initial values complex": lambda x: _decay(x, np.atleast_1d(np.exp(3 * x)), "BDF"),
}

ALL = LOST | CAST | RAISING | CARRIED | ADAPTIVE
