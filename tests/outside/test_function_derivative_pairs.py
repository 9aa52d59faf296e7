"""Functions and derivatives that one library publishes side by side: scipy, numpy, statsmodels and jax.

Right ones are confirmed with the digits that the values show; wrong ones are refuted, and units and chain-rule factors
have their names. Figures are outputs of scipy 1.17, numpy 2.4, statsmodels 0.15 and jax 0.10.
"""

import numpy as np
import pytest
from scipy import interpolate, linalg, special
from scipy.spatial.transform import Rotation

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, report_on

# --- degrees for radians (scipy.special, scipy.spatial) ---

BY_DEGREE = {
    "sine": (special.sindg, lambda x: special.cosdg(x)),
    "tangent": (special.tandg, lambda x: 1 / special.cosdg(x) ** 2),
    "cotangent": (special.cotdg, lambda x: -1 / special.sindg(x) ** 2),
    "even Mathieu function": (lambda x: special.mathieu_cem(2, 5, x)[0], lambda x: special.mathieu_cem(2, 5, x)[1]),
    "odd Mathieu function": (lambda x: special.mathieu_sem(2, 5, x)[0], lambda x: special.mathieu_sem(2, 5, x)[1]),
}


@pytest.mark.parametrize("name", BY_DEGREE)
def test_a_derivative_by_radians_of_a_function_of_degrees_is_named(name):
    function, per_radian = BY_DEGREE[name]

    report = report_on(function, 40.0, gradient=per_radian)

    assert report.verdict == REFUTED
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["degrees-for-radians"]
    assert report.entries.claim[0] / report.entries.witness[0] == pytest.approx(180 / np.pi, rel=1e-9)


@pytest.mark.parametrize("name", BY_DEGREE)
def test_the_same_derivative_by_degrees_is_confirmed(name):
    function, per_radian = BY_DEGREE[name]

    report = report_on(function, 40.0, gradient=lambda x: np.pi / 180 * per_radian(x))

    assert report.verdict == CONFIRMED
    assert report.entries.digits.min() >= 8


MODIFIED = [special.mathieu_modcem1, special.mathieu_modcem2, special.mathieu_modsem1, special.mathieu_modsem2]


@pytest.mark.parametrize("both", MODIFIED, ids=lambda both: both.__name__)
def test_modified_mathieu_functions_take_plain_numbers_and_their_derivatives_are_confirmed(both):
    report = report_on(lambda x: both(2, 5, x)[0], 0.7, gradient=lambda x: both(2, 5, x)[1])

    assert report.verdict == CONFIRMED


def turned(angles):
    """An entry of a rotation matrix, by Euler angles in degrees."""
    return Rotation.from_euler("xyz", angles, degrees=True).as_matrix()[2, 0]


def test_the_slope_of_a_rotation_by_radians_is_named():
    """About x, y, z in fixed axes the entry (2, 0) is -sin of the second angle."""
    report = report_on(turned, [20.0, 30.0, 40.0], gradient=lambda a: [0.0, -np.cos(np.radians(a[1])), 0.0])

    assert [str(verdict) for verdict in report.entries.verdict] == ["confirmed", "refuted", "confirmed"]
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["degrees-for-radians"]


# --- value and derivative from one call (scipy.special) ---

BOTH = {
    "parabolic cylinder D": (lambda x: special.pbdv(1.5, x), 0.7),
    "parabolic cylinder V": (lambda x: special.pbvv(1.5, x), 0.7),
    "parabolic cylinder W": (lambda x: special.pbwa(1.5, x), 0.7),
    "prolate, angular": (lambda x: special.pro_ang1(1, 2, 1.5, x), 0.3),
    "oblate, angular": (lambda x: special.obl_ang1(1, 2, 1.5, x), 0.3),
    "prolate, radial": (lambda x: special.pro_rad1(1, 2, 1.5, x), 1.7),
    "prolate, second radial": (lambda x: special.pro_rad2(1, 2, 1.5, x), 1.7),
    "oblate, radial": (lambda x: special.obl_rad1(1, 2, 1.5, x), 0.7),
    "oblate, second radial, far out": (lambda x: special.obl_rad2(1, 2, 1.5, x), 8.0),
}


@pytest.mark.parametrize("name", BOTH)
def test_the_derivative_that_comes_with_the_value_is_confirmed(name):
    both, x = BOTH[name]

    report = report_on(lambda x: both(x)[0], x, gradient=lambda x: both(x)[1])

    assert report.verdict == CONFIRMED
    assert report.entries.digits[0] >= 8


@pytest.mark.parametrize("x", [0.3, 0.7, 1.7])
def test_the_derivative_of_the_second_oblate_radial_function_is_a_real_fault_at_small_arguments(x):
    """The Wronskian R1·R2' - R2·R1' is 1/(c(x² + 1)) (C. Flammer, "Spheroidal Wave Functions", 1957, from memory): with
    the derivative of scipy it is off by a factor that depends on x, and not at 8.
    """

    def wronskian(x):
        (r1, slope1), (r2, slope2) = special.obl_rad1(1, 2, 1.5, x), special.obl_rad2(1, 2, 1.5, x)
        return (r1 * slope2 - r2 * slope1) * 1.5 * (x * x + 1)

    report = report_on(
        lambda x: special.obl_rad2(1, 2, 1.5, x)[0], x, gradient=lambda x: special.obl_rad2(1, 2, 1.5, x)[1]
    )

    assert abs(wronskian(x) - 1) > 0.1  # a release that mends it ends this test
    assert wronskian(8.0) == pytest.approx(1, rel=1e-9)
    assert report.verdict == REFUTED


# --- a variable that is mapped on the way (numpy.polynomial) ---

SERIES = np.polynomial.Chebyshev([1.0, 0.5, 0.3, 0.2], domain=[0.0, 20.0])


def test_the_derivative_of_a_series_on_its_own_domain_is_confirmed():
    assert report_on(SERIES, 3.0, gradient=SERIES.deriv()).verdict == CONFIRMED


def test_differentiated_coefficients_lack_the_factor_of_the_domain():
    """chebder differentiates by the mapped variable t = (x - 10)/10: ten times too much."""
    derived = np.polynomial.chebyshev.chebder(SERIES.coef)

    report = report_on(SERIES, 3.0, gradient=lambda x: np.polynomial.chebyshev.chebval((x - 10) / 10, derived))

    assert report.verdict == REFUTED
    assert report.entries.claim[0] / report.entries.witness[0] == pytest.approx(10, rel=1e-10)
    assert report.diagnoses[0].code in ("unit-factor", "constant-factor", "missing-chain-rule")
    assert "10 times" in report.diagnoses[0].text


# --- matrices and curves (scipy.linalg, scipy.interpolate) ---

BASE = np.array([[0.3, 0.2, 0.1], [0.0, 0.5, 0.4], [0.2, 0.1, 0.6]])
CHANGE = np.array([[0.1, 0.7, 0.2], [0.5, 0.3, 0.1], [0.3, 0.2, 0.9]])


def test_the_derivative_of_a_matrix_exponential_is_confirmed():
    """A. H. Al-Mohy, N. J. Higham, SIAM J. Matrix Anal. Appl. 30 (2009) 1639-1657, as scipy.linalg.expm_frechet."""

    def slope(t):
        return linalg.expm_frechet(BASE + t * CHANGE, CHANGE, compute_expm=False).ravel()[:, None]

    report = report_on(lambda t: linalg.expm(BASE + t * CHANGE).ravel(), 0.4, jacobian=slope)

    assert report.verdict == CONFIRMED
    assert report.entries.digits.min() >= 9


KNOTS = np.array([0.0, 0.7, 1.1, 2.0, 3.2, 4.0])
HEIGHTS = np.array([0.0, 0.64, 0.9, 0.86, -0.06, -0.76])
CURVES = [interpolate.CubicSpline, interpolate.PchipInterpolator, interpolate.Akima1DInterpolator]


@pytest.mark.parametrize("kind", CURVES, ids=lambda kind: kind.__name__)
def test_slope_and_curvature_of_an_interpolant_are_confirmed_between_its_knots(kind):
    curve = kind(KNOTS, HEIGHTS)

    assert report_on(curve, 1.53, gradient=curve.derivative()).verdict == CONFIRMED
    assert report_on(curve.derivative(), 1.53, gradient=curve.derivative(2)).verdict == CONFIRMED


@pytest.mark.parametrize("kind", CURVES, ids=lambda kind: kind.__name__)
def test_the_slope_at_a_knot_is_not_refuted_where_the_curvature_breaks(kind):
    curve = kind(KNOTS, HEIGHTS)

    assert report_on(curve, 2.0, gradient=curve.derivative()).verdict != REFUTED


# --- links and robust norms (statsmodels) ---


@pytest.fixture(scope="module")
def links():
    return pytest.importorskip("statsmodels.genmod.families.links")


#: P. McCullagh, J. A. Nelder, "Generalized Linear Models" (1989), chapter 2: links at a mean, with their inverses.
LINKS = [
    ("Logit", 0.3),
    ("Probit", 0.3),
    ("CLogLog", 0.3),
    ("LogLog", 0.3),
    ("Cauchy", 0.3),
    ("LogC", 0.3),
    ("Log", 1.3),
    ("InversePower", 1.3),
    ("InverseSquared", 1.3),
    ("Sqrt", 1.3),
    ("NegativeBinomial", 1.3),
]


@pytest.mark.parametrize(("name", "mean"), LINKS)
def test_both_derivatives_of_a_link_and_of_its_inverse_are_confirmed(links, name, mean):
    link = getattr(links, name)()
    linear = float(link(mean))

    for function, derivative, at in (
        (link, link.deriv, mean),
        (link.deriv, link.deriv2, mean),
        (link.inverse, link.inverse_deriv, linear),
        (link.inverse_deriv, link.inverse_deriv2, linear),
    ):
        report = report_on(lambda x, f=function: float(f(x)), at, gradient=lambda x, f=derivative: float(f(x)))

        assert report.verdict == CONFIRMED


NORMS = ["HuberT", "RamsayE", "AndrewWave", "Hampel", "TukeyBiweight", "StudentT"]


@pytest.mark.parametrize("residual", [0.7, 3.1])
@pytest.mark.parametrize("name", NORMS)
def test_both_derivatives_of_a_robust_norm_are_confirmed_away_from_its_corners(name, residual):
    """P. J. Huber, "Robust Statistics" (1981): psi is the derivative of rho."""
    norm = getattr(pytest.importorskip("statsmodels.robust.norms"), name)()

    def one(function):
        return lambda x: float(np.squeeze(function(np.array([x]))))

    assert report_on(one(norm.rho), residual, gradient=one(norm.psi)).verdict == CONFIRMED
    assert report_on(one(norm.psi), residual, gradient=one(norm.psi_deriv)).verdict == CONFIRMED


# --- automatic differentiation of special functions (jax) ---


@pytest.mark.parametrize(("name", "x"), [("erf", 0.7), ("logit", 0.3)])
def test_the_rules_of_special_functions_hold_alone_and_under_transformations(name, x):
    functions = pytest.importorskip("jax.scipy.special")

    report = report_on(getattr(functions, name), x, gradient="jax")

    assert (report.verdict, report.findings) == (CONFIRMED, ())
    assert report.entries.digits[0] >= 8


def test_the_incomplete_beta_function_has_no_rule_for_its_parameters_and_the_words_of_jax_say_so():
    functions = pytest.importorskip("jax.scipy.special")

    with pytest.raises(gradcheck.UsageError, match="with respect to a and b not supported"):
        report_on(lambda p: functions.betainc(p[0], p[1], p[2]), [2.0, 3.0, 0.4], gradient="jax")


# --- awkward points (jax): what it returns there, beside the slopes on both sides ---


@pytest.fixture(scope="module")
def jnp():
    return pytest.importorskip("jax.numpy")


#: What jax gives, and the slopes below and above the point.
KINKS = {
    "maximum": (lambda np: lambda x: np.maximum(x, 0.0), 0.0, 0.5, (0.0, 1.0)),
    "clip": (lambda np: lambda x: np.clip(x, 0.0, 1.0), 1.0, 0.5, (1.0, 0.0)),
    "table": (
        lambda np: lambda x: np.interp(x, np.array([0.0, 1.0, 2.0]), np.array([0.0, 1.0, 4.0])),
        1.0,
        3.0,
        (1.0, 3.0),
    ),
}


@pytest.mark.parametrize("name", KINKS)
def test_at_a_kink_the_report_shows_what_jax_returns_between_the_slopes_of_both_sides(jnp, name):
    build, x, convention, (below, above) = KINKS[name]

    report = report_on(build(jnp), x, gradient="jax")

    text = " ".join(str(report).split())
    assert (report.verdict, report.diagnoses) == (UNDECIDED, ())
    assert report.entries.claim[0] == pytest.approx(convention)
    (finding,) = report.findings
    assert finding.code == "kink"
    assert (finding.evidence["left_slope"], finding.evidence["right_slope"]) == pytest.approx((below, above), abs=1e-9)
    assert f"claimed {convention:g}" in text
    assert f"the slope is {below:g} below it and {above:g} above" in text


def test_an_infinite_slope_is_undecided_because_the_quotients_grow_without_limit(jnp):
    report = report_on(jnp.arccos, 1.0, gradient="jax")

    assert (report.verdict, report.entries.claim[0]) == (UNDECIDED, -np.inf)
    assert "grow without limit" in report.entries.reason[0]


def test_an_angle_at_the_origin_jumps_and_its_nan_is_undecided(jnp):
    report = report_on(lambda x: jnp.arctan2(x[0], x[1]), [0.0, 0.0], gradient="jax")

    assert report.verdict == UNDECIDED
    assert {finding.code for finding in report.findings} == {"jump"}


def test_a_nan_at_a_kink_is_refuted_and_the_kink_told_beside_it(jnp):
    report = report_on(jnp.std, [0.5, 0.5, 0.5], gradient="jax")

    assert report.verdict == REFUTED
    assert {finding.code for finding in report.findings} == {"kink"}
    assert "not a finite number" in report.diagnoses[0].text


def test_a_value_that_overflows_is_told_before_any_derivative(jnp):
    """log(1 + e^x) at 800 is inf in double precision, and its derivative NaN; logaddexp(0, x) is right."""
    with pytest.raises(gradcheck.ModelFailure, match="the value is inf"):
        report_on(lambda x: jnp.log(1 + jnp.exp(x)), 800.0, gradient="jax")

    assert report_on(lambda x: jnp.logaddexp(0.0, x), 800.0, gradient="jax").verdict == CONFIRMED
