"""Derivatives of special functions against closed forms.

NIST Digital Library of Mathematical Functions (dlmf.nist.gov), sections named with each function in
``tests/problem_sets/one_variable.py``; values computed with 50 digits from the identities (J0' = -J1 and so on).
"""

import numpy as np
import pytest
from scipy import special

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, report_on, verdict_on
from tests.problems import SPECIAL_FUNCTIONS


def each_function(test):
    return pytest.mark.parametrize("problem", SPECIAL_FUNCTIONS, ids=lambda problem: problem.name)(test)


def size(problem):
    """Of the derivative; where it is zero, of the function over its variable."""
    return abs(problem.derivative) or abs(problem.value / problem.x)


@each_function
def test_the_estimate_meets_the_closed_form_to_twelve_digits_and_within_its_bound(problem):
    answer = gradcheck.estimate(problem.function, at=problem.x)

    error = abs(answer.value - problem.derivative)
    assert error <= 1e-12 * size(problem)
    assert error <= answer.bound <= 1e-11 * size(problem)


@each_function
def test_the_closed_form_is_confirmed(problem):
    assert verdict_on(problem.function, problem.x, problem.derivative) == CONFIRMED


@each_function
def test_a_claim_off_in_the_seventh_digit_is_refuted(problem):
    assert verdict_on(problem.function, problem.x, problem.derivative + 1e-6 * size(problem)) == REFUTED


#: function and derivative of scipy.special (DLMF 10.6, 10.29, 10.51): pairs by order.
BESSEL = {
    "J": (special.jv, special.jvp),
    "Y": (special.yv, special.yvp),
    "I": (special.iv, special.ivp),
    "K": (special.kv, special.kvp),
}


@pytest.mark.parametrize("x", [0.1, 0.7, 3.0, 12.0, 100.0])
@pytest.mark.parametrize("order", [0, 1, 2.5])
@pytest.mark.parametrize("kind", BESSEL)
def test_derivatives_of_bessel_functions_are_confirmed(kind, order, x):
    function, derivative = BESSEL[kind]

    report = report_on(lambda x: function(order, x), x, gradient=lambda x: derivative(order, x))

    assert report.verdict == CONFIRMED


@pytest.mark.parametrize(
    "function", [special.spherical_jn, special.spherical_yn, special.spherical_in, special.spherical_kn]
)
def test_derivatives_of_spherical_bessel_functions_are_confirmed(function):
    report = report_on(lambda x: function(2, x), 1.7, gradient=lambda x: function(2, x, derivative=True))

    assert report.verdict == CONFIRMED


#: DLMF 10.61. Kelvin functions of scipy keep ten or eleven digits at these places, and change their series at 10.
KELVIN = [
    (special.ber, special.berp),
    (special.bei, special.beip),
    (special.ker, special.kerp),
    (special.kei, special.keip),
]


@pytest.mark.parametrize("x", [8.0, 10.0, 12.0])
@pytest.mark.parametrize(("function", "derivative"), KELVIN, ids=["ber", "bei", "ker", "kei"])
def test_right_derivatives_of_kelvin_functions_are_not_refuted_for_the_digits_that_these_lack(function, derivative, x):
    assert report_on(function, x, gradient=derivative).verdict != REFUTED


@pytest.mark.parametrize(("function", "derivative"), KELVIN, ids=["ber", "bei", "ker", "kei"])
def test_derivatives_of_kelvin_functions_are_confirmed_where_their_series_is_quiet(function, derivative):
    assert report_on(function, 12.0, gradient=derivative).verdict == CONFIRMED


def test_the_incomplete_beta_function_has_derivatives_by_its_parameters_that_no_formula_is_needed_for():
    """I_0.4(2, 3) by a, b, x: values computed with 50 digits; by x also x^(a-1) (1-x)^(b-1) / B(a, b) = 1.728."""
    truth = np.array([-0.24086937608755657821, 0.15634433641359877266, 1.728])

    answer = gradcheck.estimate(lambda p: special.betainc(*p), at=[2.0, 3.0, 0.4])

    assert np.all(np.abs(answer.value - truth) <= answer.bound)
    assert np.all(answer.bound <= 1e-11)


def test_the_elliptic_integral_taken_for_one_of_the_modulus_is_refuted():
    """K(m) against K(k): d/dk = 2k·d/dm, a classic confusion (DLMF 19.2.8 uses the modulus)."""
    by_modulus = 0.84721308479397908661 * 2 * np.sqrt(0.5)

    assert verdict_on(special.ellipk, 0.5, by_modulus) == REFUTED


def test_the_closed_form_of_an_elliptic_integral_has_a_gap_at_zero_where_values_show_the_slope():
    """K'(m) = (E - (1 - m)K)/(2m(1 - m)) is 0/0 at m = 0; its limit is pi/8 (DLMF 19.4.1)."""

    def closed_form(m):
        m = np.float64(m)
        with np.errstate(invalid="ignore"):
            return (special.ellipe(m) - (1 - m) * special.ellipk(m)) / (2 * m * (1 - m))

    assert report_on(special.ellipk, 0.0, gradient=closed_form).verdict == REFUTED
    assert verdict_on(special.ellipk, 0.0, np.pi / 8) == CONFIRMED
    assert report_on(special.ellipk, 0.3, gradient=closed_form).verdict == CONFIRMED


@pytest.mark.parametrize(
    ("function", "x", "second"),
    [
        (lambda x: special.airy(x)[0], 1.0, 0.13529241631288141552),
        (special.gammaln, 0.5, 4.9348022005446793094),
        (special.j0, 1.0, -0.32514710081303303549),
    ],
    ids=["Ai''(1) = Ai(1)", "(log gamma)''(1/2) = pi^2/2", "J0''(1) = -J1'(1)"],
)
def test_second_derivatives_follow_from_the_rows_of_the_table(function, x, second):
    answer = gradcheck.estimate(function, at=x, order=2)

    assert abs(answer.value - second) <= answer.bound <= 1e-8 * abs(second)


#: The identities of the table as functions (DLMF 5.2, 5.15, 6.2, 7.2, 8.8, 9.2, 19.4, 4.13, 10.6, 10.29).
IDENTITIES = {
    "J0": (special.j0, lambda x: -special.j1(x), (0.3, 10.0)),
    "J1": (special.j1, lambda x: special.j0(x) - special.j1(x) / x, (0.3, 10.0)),
    "I0": (special.i0, special.i1, (0.3, 10.0)),
    "K0": (special.k0, lambda x: -special.k1(x), (0.3, 10.0)),
    "gamma": (special.gamma, lambda x: special.gamma(x) * special.digamma(x), (0.3, 1.0, 7.5)),
    "log gamma": (special.gammaln, special.digamma, (0.3, 7.5)),
    "psi": (special.digamma, lambda x: special.polygamma(1, x), (0.3, 7.5)),
    "erf": (special.erf, lambda x: 2 / np.sqrt(np.pi) * np.exp(-(x**2)), (-2.0, 0.0, 1.0)),
    "normal distribution": (special.ndtr, lambda x: np.exp(-(x**2) / 2) / np.sqrt(2 * np.pi), (-3.0, 0.0, 1.0)),
    "Ai": (lambda x: special.airy(x)[0], lambda x: special.airy(x)[1], (-2.0, 0.0, 3.0)),
    "Bi": (lambda x: special.airy(x)[2], lambda x: special.airy(x)[3], (-2.0, 0.0, 3.0)),
    "elliptic E": (special.ellipe, lambda m: (special.ellipe(m) - special.ellipk(m)) / (2 * m), (0.1, 0.9)),
    "Lambert W": (
        lambda x: special.lambertw(x).real,
        lambda x: special.lambertw(x).real / (x * (1 + special.lambertw(x).real)),
        (0.1, 10.0),
    ),
    "sine integral": (lambda x: special.sici(x)[0], lambda x: np.sin(x) / x, (0.3, 10.0)),
    "exponential integral": (special.expi, lambda x: np.exp(x) / x, (0.3, 5.0)),
    "Legendre P5": (
        lambda x: special.eval_legendre(5, x),
        lambda x: 5 * (special.eval_legendre(4, x) - x * special.eval_legendre(5, x)) / (1 - x**2),
        (-0.7, 0.2),
    ),
    "Chebyshev T5": (lambda x: special.eval_chebyt(5, x), lambda x: 5 * special.eval_chebyu(4, x), (-0.7, 0.3)),
    "P(2.5, x)": (
        lambda x: special.gammainc(2.5, x),
        lambda x: x**1.5 * np.exp(-x) / special.gamma(2.5),
        (0.3, 3.0, 9.0),
    ),
}


@pytest.mark.parametrize("name", IDENTITIES)
def test_the_identities_are_confirmed_as_functions_away_from_the_points_of_the_table_too(name):
    function, derivative, points = IDENTITIES[name]

    for x in points:
        assert report_on(function, x, gradient=derivative).verdict == CONFIRMED
