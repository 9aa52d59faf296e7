"""Formulas that engineers look up, with their jumps, kinks and derivatives.

Figures were computed with 40 digits from the formulas; formulas and printed values from memory of the sources named.
"""

import math
from functools import partial

import numpy as np
import pytest
from scipy.interpolate import Akima1DInterpolator, CubicSpline, PchipInterpolator
from scipy.special import ndtr

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, interval_of, places, report_on, verdict_on

# --- friction in pipes ---
# Laminar 64/Re; C. F. Colebrook, J. Inst. Civ. Eng. 11 (1939) 133-156; S. E. Haaland, J. Fluids Eng. 105 (1983) 89-90;
# P. K. Swamee, A. K. Jain, J. Hydraul. Div. ASCE 102 (1976) 657-664. Switching at Re = 2300 is common practice.

SWITCH = 2300.0


def laminar(reynolds):
    return 64.0 / reynolds


def colebrook(reynolds, roughness=0.0):
    """1/sqrt f = -2 log10(e/3.7 + 2.51/(Re sqrt f)), by Newton's method down to rounding."""
    y = -2 * math.log10(roughness / 3.7 + 5.74 / reynolds**0.9)
    for _ in range(20):
        inside = roughness / 3.7 + 2.51 * y / reynolds
        slope = 1 + 2 / math.log(10) * 2.51 / reynolds / inside
        y -= (y + 2 * math.log10(inside)) / slope
    return y**-2


def haaland(reynolds, roughness=0.0):
    return (-1.8 * math.log10((roughness / 3.7) ** 1.11 + 6.9 / reynolds)) ** -2


def swamee_jain(reynolds, roughness=0.0):
    return 0.25 / math.log10(roughness / 3.7 + 5.74 / reynolds**0.9) ** 2


def friction(reynolds, roughness=0.0):
    return laminar(reynolds) if reynolds < SWITCH else colebrook(reynolds, roughness)


@pytest.mark.parametrize(("lower", "upper"), [(1000.0, 4000.0), (500.0, 1e4), (1000.0, 1e5)])
@pytest.mark.parametrize(
    ("roughness", "turbulent"),
    [(0.0, 0.047283313905224845), (1e-4, 0.047364169041322065), (1e-3, 0.048087413608550176)],
)
def test_the_jump_of_the_friction_factor_is_found_and_measured(roughness, turbulent, lower, upper):
    (jump,) = interval_of(partial(friction, roughness=roughness), lower, upper).irregularities

    ((below, above),) = places((jump,), lower, upper)
    assert str(jump.kind) == "jump"
    assert below <= SWITCH <= above <= below + 1e-10 * (upper - lower)
    assert jump.left == pytest.approx(0.027826086956521739, rel=1e-7)
    assert jump.right == pytest.approx(turbulent, rel=1e-7)


def test_an_audit_tells_the_jump_of_the_friction_factor_with_its_height():
    report = gradcheck.audit(friction, at=3000.0, bounds=(1000.0, 1e4))

    (jump,) = [finding for finding in report.findings if finding.code == "jump"]
    assert jump.evidence["height"] == pytest.approx(0.0194572269, rel=1e-6)
    assert (jump.where.lower + jump.where.upper) / 2 == pytest.approx(SWITCH, abs=1e-6)


@pytest.mark.parametrize(
    ("formula", "place", "value", "slope"),
    [
        (laminar, SWITCH, 0.027826086956521739, -1.20982986767486e-5),
        (colebrook, SWITCH, 0.047283313905224845, -6.53195403610088e-6),
        (haaland, SWITCH, 0.048491122097241634, -7.25859101735707e-6),
        (swamee_jain, SWITCH, 0.048660178813528691, -7.2965829968183e-6),
        (partial(colebrook, roughness=1e-4), 1e5, 0.018513866077471643, -3.46021793971501e-8),
        (partial(colebrook, roughness=1e-3), 1e6, 0.019943465840476866, -2.99630082502521e-10),
        (partial(colebrook, 1e5), 1e-4, 0.018513866077471643, 5.06963353367736),
    ],
    ids=["laminar", "Colebrook", "Haaland", "Swamee-Jain", "Re 1e5", "Re 1e6", "by roughness"],
)
def test_slopes_of_friction_factors_are_estimated_within_bounds_and_confirmed(formula, place, value, slope):
    answer = gradcheck.estimate(formula, at=place)

    assert formula(place) == pytest.approx(value, rel=1e-14)
    assert abs(answer.value - slope) <= answer.bound + 1e-14 * abs(slope)  # the printed digits end there
    assert answer.bound <= 1e-11 * abs(slope)
    assert verdict_on(formula, place, slope) == CONFIRMED


def test_at_the_switch_neither_branch_has_the_slope():
    for slope in (-1.20982986767486e-5, -6.53195403610088e-6):
        assert verdict_on(friction, SWITCH, slope) == UNDECIDED


# --- diffuse solar radiation ---
# D. G. Erbs, S. A. Klein, J. A. Duffie, Solar Energy 28 (1982) 293-302: fraction by the clearness index k.


def erbs(k):
    if k <= 0.22:
        return 1 - 0.09 * k
    if k <= 0.8:
        return 0.9511 - 0.1604 * k + 4.388 * k**2 - 16.638 * k**3 + 12.336 * k**4
    return 0.165


def test_the_tiny_jumps_of_the_erbs_correlation_are_found_and_measured():
    """0.9802 to 0.97992759616 at 0.22, and 0.1652696 to 0.165 at 0.8: three parts in ten thousand."""
    found = interval_of(erbs, 0.0, 1.0).irregularities

    assert [str(jump.kind) for jump in found] == ["jump", "jump"]
    assert places(found, 0.0, 1.0).mean(axis=1).tolist() == pytest.approx([0.22, 0.8], abs=1e-10)
    assert [jump.size for jump in found] == pytest.approx([-2.724e-4, -2.696e-4], abs=5e-8)
    assert [jump.left for jump in found] == pytest.approx([0.9802, 0.1652696], abs=1e-10)


@pytest.mark.parametrize(("k", "slope"), [(0.22, -0.09), (0.22, -0.120102688), (0.8, 0.179568), (0.8, 0.0)])
def test_no_slope_is_confirmed_at_a_jump(k, slope):
    assert verdict_on(erbs, k, slope) != CONFIRMED


@pytest.mark.parametrize(
    ("k", "slope"), [(0.219, -0.09), (0.5, -0.1604 + 8.776 * 0.5 - 49.914 * 0.25 + 49.344 * 0.125)]
)
def test_between_the_jumps_the_slope_is_confirmed(k, slope):
    assert verdict_on(erbs, k, slope) == CONFIRMED


# --- van der Waals gas ---
# Reduced form p = 8T/(3v - 1) - 3/v², critical point (1, 1): J. D. van der Waals, thesis, Leiden (1873).


def isotherm(v):
    return 8 / (3 * v - 1) - 3 / v**2


def test_the_true_zero_slope_at_the_critical_point_is_confirmed():
    assert verdict_on(isotherm, 1.0, 0.0) == CONFIRMED


def test_the_true_zero_slope_at_the_critical_point_is_confirmed_where_a_size_that_matters_is_given():
    assert verdict_on(isotherm, 1.0, 0.0, abs_tol=1e-10) == CONFIRMED


def test_a_small_slope_at_the_critical_point_is_refuted():
    assert verdict_on(isotherm, 1.0, 1e-9) == REFUTED


@pytest.mark.parametrize("order", [1, 2])
def test_first_and_second_derivative_at_the_critical_point_are_zero_within_bounds(order):
    answer = gradcheck.estimate(isotherm, at=1.0, order=order)

    assert abs(answer.value) <= answer.bound <= {1: 1e-11, 2: 1e-8}[order]


# --- options ---
# J. C. Hull, "Options, Futures and Other Derivatives", example of the chapter on Greek letters: S = 49, K = 50,
# r = 5 %, sigma = 20 %, T = 0.3846 years; printed 2.40, delta 0.522, gamma 0.066, vega 12.1,
# theta -4.31 a year, rho 8.91.

OPTION = np.array([49.0, 0.05, 0.2, 0.3846])  # spot, rate, volatility, time
GREEKS = np.array([0.521601633971576, 8.90657409880095, 12.1052427542438, 4.3053899645461])


def call_price(x, strike=50.0):
    spot, rate, volatility, time = x
    spread = volatility * np.sqrt(time)
    first = (np.log(spot / strike) + (rate + volatility**2 / 2) * time) / spread
    return spot * ndtr(first) - strike * np.exp(-rate * time) * ndtr(first - spread)


def test_the_price_and_the_greeks_of_the_textbook_are_those_of_the_formula():
    assert round(call_price(OPTION), 2) == 2.40
    assert (round(GREEKS[0], 3), round(GREEKS[1], 2), round(GREEKS[2], 1), round(GREEKS[3], 2)) == (
        0.522,
        8.91,
        12.1,
        4.31,
    )


def test_delta_rho_vega_and_theta_are_confirmed():
    assert report_on(call_price, OPTION, gradient=GREEKS).verdict == CONFIRMED


def test_gamma_is_estimated_within_its_bound():
    answer = gradcheck.estimate(call_price, at=OPTION, direction=[1, 0, 0, 0], order=2)

    assert abs(answer.value - 0.0655453772524787) <= answer.bound <= 1e-9


def test_greeks_of_the_same_option_with_twenty_weeks_left_are_confirmed():
    """T = 20/52, of which 0.3846 is the rounded value; 40 digits."""
    point = np.array([49.0, 0.05, 0.2, 20 / 52])
    greeks = np.array([0.521604661066396, 8.90696194960835, 12.1054798826288])

    report = report_on(lambda x: call_price(np.append(x, 20 / 52)), point[:3], gradient=greeks)

    assert report.verdict == CONFIRMED


def test_call_and_put_of_the_textbook_obey_their_parity_and_so_do_their_slopes():
    """S = 42, K = 40, r = 10 %, sigma = 20 %, T = 0.5: printed 4.76 and 0.81; the put is C - S + K·e^(-rT)."""
    point = np.array([42.0, 0.1, 0.2, 0.5])

    def put_price(x):
        return call_price(x, 40.0) - x[0] + 40.0 * np.exp(-x[1] * x[3])

    call, put = (gradcheck.estimate(price, at=point) for price in (lambda x: call_price(x, 40.0), put_price))

    assert call_price(point, 40.0) == pytest.approx(4.75942239287, rel=1e-12)
    assert put_price(point) == pytest.approx(0.8085993729, rel=1e-10)
    discounted = 40.0 * np.exp(-0.05)
    parity = np.array([1.0, 0.5 * discounted, 0.0, 0.1 * discounted])
    assert np.all(np.abs(call.value - put.value - parity) <= call.bound + put.bound)


def test_theta_with_the_sign_of_the_trade_is_diagnosed_as_a_flipped_sign():
    """Traders quote the change as time passes, which is minus the derivative by the time left."""
    report = report_on(call_price, OPTION, gradient=GREEKS * [1, 1, 1, -1])

    assert [str(verdict) for verdict in report.entries.verdict] == ["confirmed"] * 3 + ["refuted"]
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["sign-flipped"]


def test_vega_per_percent_is_diagnosed_as_a_matter_of_units():
    report = report_on(call_price, OPTION, gradient=GREEKS * [1, 1, 0.01, 1])

    assert [str(verdict) for verdict in report.entries.verdict] == ["confirmed"] * 2 + ["refuted", "confirmed"]
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["unit-factor"]


# --- rate laws and vapour pressure ---
# Hill equation: A. V. Hill, J. Physiol. 40 (1910) iv-vii. Antoine equation: C. Antoine, C. R. Acad. Sci. 107 (1888)
# 681; constants for water, 1 to 100 °C and mmHg, as in common collections.


def hill(p):
    rate, half, power, x = p
    return rate * x**power / (half**power + x**power)


def test_all_derivatives_of_the_hill_equation_are_confirmed():
    slopes = [0.11473087818696884, -1.6250832604386521, -0.10376677127315554, 2.7084721007310868]

    assert hill([2.0, 0.5, 4.0, 0.3]) == pytest.approx(0.22946175637393768, rel=1e-15)
    assert report_on(hill, [2.0, 0.5, 4.0, 0.3], gradient=np.array(slopes)).verdict == CONFIRMED


def antoine(celsius):
    return 10 ** (8.07131 - 1730.63 / (233.426 + celsius))


@pytest.mark.parametrize(
    ("celsius", "pressure", "slope"),
    [(25.0, 23.6864135530952, 1.4133405294766), (100.0, 760.086369164931, 27.2448195669536)],
)
def test_the_slope_of_the_antoine_equation_is_confirmed_and_without_its_ln_10_refuted(celsius, pressure, slope):
    assert antoine(celsius) == pytest.approx(pressure, rel=1e-14)
    assert verdict_on(antoine, celsius, slope) == CONFIRMED
    assert verdict_on(antoine, celsius, slope / math.log(10)) == REFUTED


# --- cut potentials ---
# J. E. Lennard-Jones, Proc. R. Soc. A 106 (1924) 463; cut at 2.5 sigma, common practice in molecular dynamics.

CUT = 2.5


def lennard_jones(r):
    return 4 * (r**-12 - r**-6)


def test_the_slope_at_the_bottom_of_the_well_is_zero_within_its_bound_and_the_curvature_is_the_published_one():
    bottom = 1.1224620483093729814

    slope, curvature = (gradcheck.estimate(lennard_jones, at=bottom, order=order) for order in (1, 2))

    # the nearest double lies up to 1.1e-16 off the bottom
    assert abs(slope.value) <= slope.bound + 1.2e-16 * 57.2
    assert abs(curvature.value - 57.146437870855181091) <= curvature.bound


def test_the_attraction_is_strongest_where_the_curvature_vanishes():
    """-2.3964292612442332399 at r = 1.244455060259807886."""
    strongest = 1.244455060259807886

    slope, curvature = (gradcheck.estimate(lennard_jones, at=strongest, order=order) for order in (1, 2))

    assert abs(slope.value - 2.3964292612442332399) <= slope.bound
    assert abs(curvature.value) <= curvature.bound + 1.2e-16 * 150


def test_value_and_slope_at_the_cut_are_those_of_the_formula_and_no_slope_is_confirmed_there():
    assert lennard_jones(CUT) == pytest.approx(-0.016316891136, rel=1e-11)
    assert verdict_on(lennard_jones, CUT, 0.0389994774528) == CONFIRMED
    assert verdict_on(lambda r: lennard_jones(r) if r < CUT else 0.0, CUT, 0.0389994774528) == UNDECIDED


def test_a_potential_cut_off_jumps_and_one_that_is_shifted_first_has_a_kink():
    """At 2.5: V = -0.016316891136, V' = 0.0389994774528."""
    plain = interval_of(lambda r: lennard_jones(r) if r < CUT else 0.0, 0.95, 4.0)
    shifted = interval_of(lambda r: lennard_jones(r) - lennard_jones(CUT) if r < CUT else 0.0, 0.95, 4.0)

    (jump,), (kink,) = plain.irregularities, shifted.irregularities
    assert (str(jump.kind), str(kink.kind)) == ("jump", "kink")
    assert jump.size == pytest.approx(0.016316891136, rel=1e-6)
    assert kink.left / 3.05 == pytest.approx(0.0389994774528, rel=0.05)
    assert places((jump, kink), 0.95, 4.0).mean(axis=1).tolist() == pytest.approx([CUT, CUT], abs=1e-6)


# --- gas dynamics ---
# NACA Report 1135 (1953), "Equations, tables, and charts for compressible flow", gamma = 1.4.


def area_ratio(mach):
    return ((1 + 0.2 * mach**2) / 1.2) ** 3 / mach


def prandtl_meyer(mach):
    """Radians."""
    root = math.sqrt(mach**2 - 1)
    return math.sqrt(6) * math.atan(root / math.sqrt(6)) - math.atan(root)


def test_the_area_ratio_at_mach_2_and_its_slope_are_those_of_the_table():
    assert area_ratio(2.0) == pytest.approx(1.6875, rel=1e-15)
    assert verdict_on(area_ratio, 2.0, 1.40625) == CONFIRMED


def test_at_the_throat_the_slope_of_the_area_ratio_is_zero_and_its_curvature_five_thirds():
    slope, curvature = (gradcheck.estimate(area_ratio, at=1.0, order=order) for order in (1, 2))

    assert abs(slope.value) <= slope.bound <= 1e-11
    assert abs(curvature.value - 5 / 3) <= curvature.bound


def test_the_slope_of_the_prandtl_meyer_angle_is_confirmed_per_radian_and_diagnosed_per_degree():
    assert math.degrees(prandtl_meyer(2.0)) == pytest.approx(26.3797608134165, rel=1e-14)
    assert verdict_on(prandtl_meyer, 2.0, 0.48112522432468814) == CONFIRMED

    report = report_on(prandtl_meyer, 2.0, gradient=np.array(math.degrees(0.48112522432468814)))
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["degrees-for-radians"]


# --- yield surfaces ---
# R. von Mises, Nachr. Ges. Wiss. Göttingen (1913) 582; H. Tresca, C. R. Acad. Sci. 59 (1864) 754.


def von_mises(s):
    xx, yy, zz, xy, yz, zx = s
    normal = (xx - yy) ** 2 + (yy - zz) ** 2 + (zz - xx) ** 2
    return np.sqrt(normal / 2 + 3 * (xy**2 + yz**2 + zx**2))


def test_the_gradient_of_the_von_mises_stress_is_confirmed():
    stress = [100.0, -50.0, 20.0, 30.0, 0.0, -10.0]
    gradient = [0.81521338575958629, -0.77976932550916949, -0.035444060250416795]
    gradient += [0.63799308450750231, 0.0, -0.21266436150250077]

    assert von_mises(stress) == pytest.approx(141.06735979665884, rel=1e-15)
    assert report_on(von_mises, stress, gradient=np.array(gradient)).verdict == CONFIRMED


def tresca(second):
    """Of the stresses 3, `second`, 1 on the diagonal."""
    return float(np.ptp(np.linalg.eigvalsh(np.diag([3.0, second, 1.0]))))


@pytest.mark.parametrize(("slope", "verdict"), [(-1.0, UNDECIDED), (0.0, UNDECIDED), (-1.1, REFUTED), (0.1, REFUTED)])
def test_on_an_edge_of_the_tresca_surface_only_slopes_between_the_two_are_possible(slope, verdict):
    """At diag(3, 1, 1): -1 below, 0 above."""
    assert verdict_on(tresca, 1.0, slope) == verdict


def mohr_coulomb(stresses):
    """(s1 - s3)/2 + (s1 + s3)/2·sin phi for an angle of friction of 30 degrees; principal stresses on the diagonal."""
    lowest, _, highest = np.linalg.eigvalsh(np.diag(stresses))
    return float((highest - lowest) / 2 + (highest + lowest) / 2 * 0.5)


@pytest.mark.parametrize(("second", "below", "above"), [(1.0, -0.25, 0.0), (3.0, 0.0, 0.75)])
def test_on_an_edge_of_the_mohr_coulomb_surface_both_slopes_are_measured_and_those_outside_refuted(
    second, below, above
):
    """C. A. Coulomb (1776), O. Mohr (1900); at diag(3, 1, 1) and diag(3, 3, 1)."""

    def surface(s):
        return mohr_coulomb([3.0, float(s), 1.0])

    inside = report_on(surface, second, gradient=np.array((below + above) / 2))

    evidence = inside.findings[0].evidence
    assert (inside.findings[0].code, inside.verdict) == ("kink", UNDECIDED)
    assert (evidence["left_slope"], evidence["right_slope"]) == pytest.approx((below, above), abs=1e-9)
    assert verdict_on(surface, second, below) == verdict_on(surface, second, above) == UNDECIDED
    assert verdict_on(surface, second, below - 0.05) == verdict_on(surface, second, above + 0.05) == REFUTED


# --- interpolation ---
# Monotone: F. N. Fritsch, R. E. Carlson, SIAM J. Numer. Anal. 17 (1980) 238-246; H. Akima, J. ACM 17 (1970) 589-602.

KNOTS = np.arange(6.0), np.array([0, 0.2, 0.1, 1, 1.2, 1.1])
#: Interpolator of scipy, its slope at 2.3, and the jumps of its second derivative at the knots 1 to 4.
INTERPOLATORS = {
    "cubic spline": (CubicSpline(*KNOTS), 0.9256666666666666, None),
    "monotone cubic": (PchipInterpolator(*KNOTS), 1.026, (-0.1, 4.145455, 3.981818, 0.445455)),
    "Akima": (Akima1DInterpolator(*KNOTS), 1.0286923076923074, (-1.546154, 2.215385, 3.327692, 0.456923)),
    # the variant that weighs flat pieces in; jumps from its own second derivative
    "modified Akima": (
        Akima1DInterpolator(*KNOTS, method="makima"),
        1.0301125,
        (-1.038063, 2.960244, 3.659167, 0.361667),
    ),
}


@pytest.mark.parametrize("name", INTERPOLATORS)
def test_the_slope_of_an_interpolator_is_confirmed_between_its_knots(name):
    curve, slope, _ = INTERPOLATORS[name]

    assert verdict_on(lambda x: float(curve(x)), 2.3, slope) == CONFIRMED


@pytest.mark.parametrize("name", INTERPOLATORS)
def test_an_interpolator_with_a_continuous_slope_has_no_kink(name):
    curve, _, jumps = INTERPOLATORS[name]

    kinds = {str(found.kind) for found in interval_of(lambda x: float(curve(x)), 0.0, 5.0).irregularities}

    assert kinds <= ({"curvature-break"} if jumps else set())


@pytest.mark.parametrize("name", ["monotone cubic", "Akima", "modified Akima"])
def test_the_breaks_of_curvature_of_an_interpolator_are_found_at_its_knots_with_their_sizes(name):
    curve, _, jumps = INTERPOLATORS[name]

    found = interval_of(lambda x: float(curve(x)), 0.0, 5.0).of_kind("curvature-break")

    assert len(found) >= 2
    for middle, one in zip(places(found, 0.0, 5.0).mean(axis=1), found, strict=True):
        knot = round(middle)
        assert middle == pytest.approx(knot, abs=5e-6)
        assert one.size / 25 == pytest.approx(jumps[knot - 1], rel=0.15)


@pytest.mark.parametrize("name", ["monotone cubic", "Akima", "modified Akima"])
def test_at_a_knot_the_slope_of_an_interpolator_is_not_refuted(name):
    curve = INTERPOLATORS[name][0]

    for knot in (1.0, 2.0, 3.0, 4.0):
        report = report_on(lambda x: float(curve(x)), knot, gradient=lambda x: float(curve(x, 1)))

        assert report.verdict != REFUTED
