"""Nonlinear regressions of the NIST/ITL Statistical Reference Datasets (public domain).

Data, start values and certified values as in the 27 files of the collection, see ``data/nist_strd.json``; the sum of
squares at the first start and its gradient were computed from them with 50 digits. The models are those that the files
state; their Jacobians are written by hand.
"""

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

DATA = Path(__file__).parent.parent / "data" / "nist_strd.json"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Regression:
    """Least squares S(b) = Σ (y - f(x; b))², from one data set.

    Attributes
    ----------
    name : str
    model, slopes : callable
        ``model(b)``: f at all x, (n,); ``slopes(b)``: its Jacobian, (n, p).
    y : ndarray, shape (n,)
        Responses, in the form that the model predicts them.
    start, second, certified : ndarray, shape (p,)
        The two published starts, and the certified parameters: 11 digits.
    rss : float
        The certified S.
    sum_at_start, gradient_at_start : float and ndarray, shape (p,)
        S and dS/db at `start`.
    """

    name: str
    model: Callable[[Any], Any]
    slopes: Callable[[Any], Any]
    y: np.ndarray
    start: np.ndarray
    second: np.ndarray
    certified: np.ndarray
    rss: float
    sum_at_start: float
    gradient_at_start: np.ndarray

    def residuals(self, b: Any) -> Any:
        return self.y - self.model(b)

    def sum_of_squares(self, b: Any) -> Any:
        residuals = self.residuals(b)
        return residuals @ residuals

    def gradient(self, b: Any) -> Any:
        return -2.0 * self.slopes(b).T @ self.residuals(b)


Curve = tuple[Callable[..., Any], Callable[..., tuple[Any, ...]]]


def saturation(x: Any, b1: Any, b2: Any) -> Any:
    return b1 * (1 - np.exp(-b2 * x))


def saturation_slopes(x: Any, b1: Any, b2: Any) -> Any:
    fall = np.exp(-b2 * x)
    return 1 - fall, b1 * x * fall


def misra_b(x: Any, b1: Any, b2: Any) -> Any:
    return b1 * (1 - (1 + b2 * x / 2) ** -2)


def misra_b_slopes(x: Any, b1: Any, b2: Any) -> Any:
    inside = 1 + b2 * x / 2
    return 1 - inside**-2, b1 * x * inside**-3


def misra_c(x: Any, b1: Any, b2: Any) -> Any:
    return b1 * (1 - (1 + 2 * b2 * x) ** -0.5)


def misra_c_slopes(x: Any, b1: Any, b2: Any) -> Any:
    inside = 1 + 2 * b2 * x
    return 1 - inside**-0.5, b1 * x * inside**-1.5


def misra_d(x: Any, b1: Any, b2: Any) -> Any:
    return b1 * b2 * x / (1 + b2 * x)


def misra_d_slopes(x: Any, b1: Any, b2: Any) -> Any:
    return b2 * x / (1 + b2 * x), b1 * x / (1 + b2 * x) ** 2


def chwirut(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return np.exp(-b1 * x) / (b2 + b3 * x)


def chwirut_slopes(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    value, below = chwirut(x, b1, b2, b3), b2 + b3 * x
    return -x * value, -value / below, -x * value / below


def power(x: Any, b1: Any, b2: Any) -> Any:
    return b1 * x**b2


def power_slopes(x: Any, b1: Any, b2: Any) -> Any:
    return x**b2, b1 * x**b2 * np.log(x)


def bennett(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return b1 * (b2 + x) ** (-1 / b3)


def bennett_slopes(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    shape = (b2 + x) ** (-1 / b3)
    return shape, -b1 * shape / (b3 * (b2 + x)), b1 * shape * np.log(b2 + x) / b3**2


def cubic_over_cubic(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any, b7: Any) -> Any:
    return (b1 + b2 * x + b3 * x**2 + b4 * x**3) / (1 + b5 * x + b6 * x**2 + b7 * x**3)


def cubic_over_cubic_slopes(x: Any, *b: Any) -> Any:
    below = 1 + b[4] * x + b[5] * x**2 + b[6] * x**3
    value = cubic_over_cubic(x, *b)
    return *(x**k / below for k in range(4)), *(-value * x**k / below for k in range(1, 4))


def quadratic_over_quadratic(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any) -> Any:
    return (b1 + b2 * x + b3 * x**2) / (1 + b4 * x + b5 * x**2)


def quadratic_over_quadratic_slopes(x: Any, *b: Any) -> Any:
    below = 1 + b[3] * x + b[4] * x**2
    value = quadratic_over_quadratic(x, *b)
    return *(x**k / below for k in range(3)), *(-value * x**k / below for k in range(1, 3))


def mgh09(x: Any, b1: Any, b2: Any, b3: Any, b4: Any) -> Any:
    return b1 * (x**2 + x * b2) / (x**2 + x * b3 + b4)


def mgh09_slopes(x: Any, b1: Any, b2: Any, b3: Any, b4: Any) -> Any:
    above, below = x**2 + x * b2, x**2 + x * b3 + b4
    return above / below, b1 * x / below, -b1 * above * x / below**2, -b1 * above / below**2


def mgh10(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return b1 * np.exp(b2 / (x + b3))


def mgh10_slopes(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    value = mgh10(x, b1, b2, b3)
    return value / b1, value / (x + b3), -value * b2 / (x + b3) ** 2


def mgh17(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any) -> Any:
    return b1 + b2 * np.exp(-x * b4) + b3 * np.exp(-x * b5)


def mgh17_slopes(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any) -> Any:
    first, second = np.exp(-x * b4), np.exp(-x * b5)
    return np.ones_like(first), first, second, -b2 * x * first, -b3 * x * second


def rat42(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return b1 / (1 + np.exp(b2 - b3 * x))


def rat42_slopes(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    grown = np.exp(b2 - b3 * x)
    return 1 / (1 + grown), -b1 * grown / (1 + grown) ** 2, b1 * x * grown / (1 + grown) ** 2


def rat43(x: Any, b1: Any, b2: Any, b3: Any, b4: Any) -> Any:
    return b1 / (1 + np.exp(b2 - b3 * x)) ** (1 / b4)


def rat43_slopes(x: Any, b1: Any, b2: Any, b3: Any, b4: Any) -> Any:
    grown = np.exp(b2 - b3 * x)
    value = rat43(x, b1, b2, b3, b4)
    by_exponent = -value / b4 * grown / (1 + grown)
    return value / b1, by_exponent, -x * by_exponent, value * np.log(1 + grown) / b4**2


def eckerle(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return b1 / b2 * np.exp(-0.5 * ((x - b3) / b2) ** 2)


def eckerle_slopes(x: Any, b1: Any, b2: Any, b3: Any) -> Any:
    value, z = eckerle(x, b1, b2, b3), (x - b3) / b2
    return value / b1, value * (z**2 - 1) / b2, value * z / b2


def two_peaks(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any, b7: Any, b8: Any) -> Any:
    fall = b1 * np.exp(-b2 * x)
    return fall + b3 * np.exp(-(((x - b4) / b5) ** 2)) + b6 * np.exp(-(((x - b7) / b8) ** 2))


def two_peaks_slopes(x: Any, b1: Any, b2: Any, *peaks: Any) -> Any:
    fall = np.exp(-b2 * x)
    columns = [fall, -b1 * x * fall]
    for height, middle, width in (peaks[:3], peaks[3:]):
        z = (x - middle) / width
        shape = np.exp(-(z**2))
        columns += [shape, 2 * height * shape * z / width, 2 * height * shape * z**2 / width]
    return tuple(columns)


def three_exponentials(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any) -> Any:
    return b1 * np.exp(-b2 * x) + b3 * np.exp(-b4 * x) + b5 * np.exp(-b6 * x)


def three_exponentials_slopes(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any) -> Any:
    columns = []
    for height, rate in ((b1, b2), (b3, b4), (b5, b6)):
        fall = np.exp(-rate * x)
        columns += [fall, -height * x * fall]
    return tuple(columns)


def three_cycles(x: Any, b1: Any, b2: Any, b3: Any, b4: Any, b5: Any, b6: Any, b7: Any, b8: Any, b9: Any) -> Any:
    year, first, second = (2 * np.pi * x / period for period in (12, b4, b7))
    value = b1 + b2 * np.cos(year) + b3 * np.sin(year)
    value = value + b5 * np.cos(first) + b6 * np.sin(first)
    return value + b8 * np.cos(second) + b9 * np.sin(second)


def three_cycles_slopes(x: Any, b1: Any, b2: Any, b3: Any, *cycles: Any) -> Any:
    year = 2 * np.pi * x / 12
    columns = [np.ones_like(x), np.cos(year), np.sin(year)]
    for period, even, odd in (cycles[:3], cycles[3:]):
        angle = 2 * np.pi * x / period
        by_period = angle / period * (even * np.sin(angle) - odd * np.cos(angle))
        columns += [by_period, np.cos(angle), np.sin(angle)]
    return tuple(columns)


def nelson(x: Any, temperature: Any, b1: Any, b2: Any, b3: Any) -> Any:
    return b1 - b2 * x * np.exp(-b3 * temperature)


def nelson_slopes(x: Any, temperature: Any, b1: Any, b2: Any, b3: Any) -> Any:
    rate = x * np.exp(-b3 * temperature)
    return np.ones_like(rate), -rate, b2 * temperature * rate


def roszman(x: Any, b1: Any, b2: Any, b3: Any, b4: Any) -> Any:
    return b1 - b2 * x - np.arctan(b3 / (x - b4)) / np.pi


def roszman_slopes(x: Any, b1: Any, b2: Any, b3: Any, b4: Any) -> Any:
    away = x - b4
    below = np.pi * (away**2 + b3**2)
    return np.ones_like(away), -x, -away / below, -b3 / below


CURVES: dict[str, Curve] = {
    "Bennett5": (bennett, bennett_slopes),
    "BoxBOD": (saturation, saturation_slopes),
    "Chwirut1": (chwirut, chwirut_slopes),
    "Chwirut2": (chwirut, chwirut_slopes),
    "DanWood": (power, power_slopes),
    "ENSO": (three_cycles, three_cycles_slopes),
    "Eckerle4": (eckerle, eckerle_slopes),
    "Gauss1": (two_peaks, two_peaks_slopes),
    "Gauss2": (two_peaks, two_peaks_slopes),
    "Gauss3": (two_peaks, two_peaks_slopes),
    "Hahn1": (cubic_over_cubic, cubic_over_cubic_slopes),
    "Kirby2": (quadratic_over_quadratic, quadratic_over_quadratic_slopes),
    "Lanczos1": (three_exponentials, three_exponentials_slopes),
    "Lanczos2": (three_exponentials, three_exponentials_slopes),
    "Lanczos3": (three_exponentials, three_exponentials_slopes),
    "MGH09": (mgh09, mgh09_slopes),
    "MGH10": (mgh10, mgh10_slopes),
    "MGH17": (mgh17, mgh17_slopes),
    "Misra1a": (saturation, saturation_slopes),
    "Misra1b": (misra_b, misra_b_slopes),
    "Misra1c": (misra_c, misra_c_slopes),
    "Misra1d": (misra_d, misra_d_slopes),
    "Nelson": (nelson, nelson_slopes),
    "Rat42": (rat42, rat42_slopes),
    "Rat43": (rat43, rat43_slopes),
    "Roszman1": (roszman, roszman_slopes),
    "Thurber": (cubic_over_cubic, cubic_over_cubic_slopes),
}
#: The file of this set gives its model for the logarithm of y.
LOGARITHMIC = ("Nelson",)


def _regression(name: str, entry: dict[str, Any]) -> Regression:
    curve, slopes = CURVES[name]
    predictors = [np.array(column) for column in entry["x"]]
    y = np.array(entry["y"])

    def model(b: Any) -> Any:
        return curve(*predictors, *b)

    def jacobian(b: Any) -> Any:
        return np.column_stack(slopes(*predictors, *b))

    return Regression(
        name=name,
        model=model,
        slopes=jacobian,
        y=np.log(y) if name in LOGARITHMIC else y,
        start=np.array(entry["start"]),
        second=np.array(entry["second"]),
        certified=np.array(entry["certified"]),
        rss=entry["rss"],
        sum_at_start=entry["sum_at_start"],
        gradient_at_start=np.array(entry["gradient_at_start"]),
    )


REGRESSIONS: tuple[Regression, ...] = tuple(
    _regression(name, entry) for name, entry in json.loads(DATA.read_text(encoding="utf-8"))["sets"].items()
)
