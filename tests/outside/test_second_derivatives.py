"""Second derivatives from function values against published ones; what a source does not print was computed to 40 or
more digits from its formula."""

import math

import numpy as np
import pytest
from scipy import interpolate, optimize

from gradcheck import estimate


def second(function, at, **options):
    """Value and bound of a second derivative."""
    answer = estimate(function, at=at, order=2, **options)
    return answer.value, answer.bound


def cubes(x):
    return math.sin(x) ** 3 + math.cos(x) ** 3


@pytest.mark.parametrize(
    ("function", "at", "right"),
    [
        # Lyness & Moler, SIAM J. Numer. Anal. 4 (1967) 202; Squire & Trapp, SIAM Review 40 (1998) 110; Martins, Sturdza
        # & Alonso, ACM TOMS 29 (2003) 245
        (lambda x: math.exp(x) / cubes(x), 1.5, 14.56828426829999154),
        (lambda x: math.exp(x) / math.sqrt(cubes(x)), 1.5, 9.463073681596603352),
        (lambda x: x**4.5, 1.5, 43.40189637993942694),
        # Gill, Murray, Saunders & Wright, SIAM J. Sci. Stat. Comput. 4 (1983) 310
        (lambda x: (math.exp(x) - 1) ** 2 + (1 / math.sqrt(1 + x * x) - 1) ** 2, 1.0, 24.26610734821123668),
        # Lennard-Jones potential at its minimum
        (lambda r: 4 * (r**-12 - r**-6), 1.1224620483093729814, 57.146437870855181091),
        # ratio of areas of an isentropic flow at Mach 1, ratio of heats 1.4
        (lambda m: ((1 + 0.2 * m * m) / 1.2) ** 3 / m, 1.0, 5 / 3),
    ],
)
def test_published_second_derivatives_lie_within_a_narrow_bound(function, at, right):
    value, bound = second(function, at)

    assert abs(value - right) <= bound <= 1e-10 * abs(right)


def test_at_the_critical_point_of_a_van_der_waals_gas_the_second_derivative_is_zero():
    value, bound = second(lambda v: 8 / (3 * v - 1) - 3 / v**2, 1.0)

    assert abs(value) <= bound <= 1e-10


def normal(x):
    return math.erfc(-x / math.sqrt(2)) / 2


def call(share, strike=50.0, rate=0.05, volatility=0.2, years=0.3846):
    """Black & Scholes 1973; the example with these figures in Hull, "Options, Futures and Other Derivatives"."""
    spread = volatility * math.sqrt(years)
    first = (math.log(share / strike) + (rate + volatility**2 / 2) * years) / spread
    return share * normal(first) - strike * math.exp(-rate * years) * normal(first - spread)


def test_the_gamma_of_an_option_is_the_second_derivative_of_its_price():
    """Printed as 0.066."""
    value, bound = second(call, 49.0)

    assert abs(value - 0.0655453772524787) <= bound + 1e-16
    assert bound <= 1e-11


def test_the_mixed_derivative_of_an_option_is_that_of_its_delta_in_volatility():
    """Closed form: −φ(d1)·d2/σ."""
    value, bound = second(lambda x: call(x[0], volatility=x[1]), [49.0, 0.2])

    spread = 0.2 * math.sqrt(0.3846)
    first = (math.log(49 / 50) + (0.05 + 0.02) * 0.3846) / spread
    right = -math.exp(-(first**2) / 2) / math.sqrt(2 * math.pi) * (first - spread) / 0.2
    assert abs(value[0, 1] - right) <= bound[0, 1] <= 1e-9


ROSENBROCK_POINT = [1.3, 0.7, 0.8, 1.9, 1.2]
#: H. H. Rosenbrock, Comput. J. 3 (1960) 175-184, as scipy.optimize chains it: scipy.optimize.rosen_hess.
ROSENBROCK_HESSIAN = np.diag([1750.0, 470.0, 210.0, 4054.0, 200.0]) + sum(
    np.diag([-520.0, -280.0, -320.0, -760.0], k) for k in (-1, 1)
)


def test_the_hessian_of_rosenbrocks_function_has_ten_digits_and_exact_zeros():
    value, bound = second(optimize.rosen, ROSENBROCK_POINT)

    np.testing.assert_allclose(optimize.rosen_hess(np.array(ROSENBROCK_POINT)), ROSENBROCK_HESSIAN, rtol=1e-14)
    assert np.all(np.abs(value - ROSENBROCK_HESSIAN) <= bound)
    assert bound.max() <= 1e-10 * np.abs(ROSENBROCK_HESSIAN).max()
    assert np.array_equal(value == 0, ROSENBROCK_HESSIAN == 0)


KNOTS = np.arange(6.0)
HEIGHTS = np.array([0.0, 0.2, 0.1, 1.0, 1.2, 1.1])


def test_a_cubic_spline_has_a_second_derivative_at_its_knots():
    spline = interpolate.CubicSpline(KNOTS, HEIGHTS)

    for knot in KNOTS[1:-1]:
        value, bound = second(lambda x: float(spline(x)), knot)
        assert abs(value - spline(knot, 2)) <= bound <= 1e-8


@pytest.mark.parametrize(
    ("kind", "jumps"),
    [
        (interpolate.PchipInterpolator, [-0.1, 4.145455, 3.981818, 0.445455]),
        (interpolate.Akima1DInterpolator, [-1.546154, 2.215385, 3.327692, 0.456923]),
    ],
)
def test_an_interpolant_with_a_continuous_slope_only_has_two_second_derivatives_at_a_knot(kind, jumps):
    """Fritsch & Carlson 1980; Akima 1970: outputs of scipy 1.17."""
    curve = kind(KNOTS, HEIGHTS)

    for knot, jump in zip(KNOTS[1:-1], jumps, strict=True):
        answer = estimate(lambda x: float(curve(x)), at=knot, order=2)
        assert 2 * answer.bound == pytest.approx(abs(jump), rel=1e-5)
        assert "curvature break" in answer.reasons["x"]
