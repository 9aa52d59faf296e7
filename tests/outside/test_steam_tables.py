"""Water and steam: values of the industrial formulation, its identities by differentiation, its seams and its units.

IAPWS R7-97(2012), "Revised Release on the IAPWS Industrial Formulation 1997 for the Thermodynamic Properties of Water
and Steam", Tables 5 (region 1), 15 (region 2) and 35 (saturation), typed from memory and met by the package ``iapws``
1.5 to all printed digits. T in K, p in MPa, v in m³/kg, h in kJ/kg, s and cp in kJ/(kg K), w in m/s.
"""

import numpy as np
import pytest
from scipy.optimize import brentq

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, interval_of, places, report_on, verdict_on

regions = pytest.importorskip("iapws.iapws97")

LIQUID, VAPOUR, DENSE = regions._Region1, regions._Region2, regions._Region3
#: Region, T, p; v, h, s, cp, w as printed.
TABLE = [
    (LIQUID, 300.0, 3.0, (0.100215168e-2, 0.115331273e3, 0.392294792, 0.417301218e1, 0.150773921e4)),
    (LIQUID, 300.0, 80.0, (0.971180894e-3, 0.184142828e3, 0.368563852, 0.401008987e1, 0.163469054e4)),
    (LIQUID, 500.0, 3.0, (0.120241800e-2, 0.975542239e3, 0.258041912e1, 0.465580682e1, 0.124071337e4)),
    (VAPOUR, 300.0, 0.0035, (0.394913866e2, 0.254991145e4, 0.852238967e1, 0.191300162e1, 0.427920172e3)),
    (VAPOUR, 700.0, 0.0035, (0.923015898e2, 0.333568375e4, 0.101749996e2, 0.208141274e1, 0.644289068e3)),
    (VAPOUR, 700.0, 30.0, (0.542946619e-2, 0.263149474e4, 0.517540298e1, 0.103505092e2, 0.480386523e3)),
]
POINTS = [row[:3] for row in TABLE]
POINT_NAMES = [f"{region.__name__[1:]} {t:g} K {p:g} MPa" for region, t, p in POINTS]
#: T; ps in MPa, and dps/dT in MPa/K.
SATURATION = [
    (300.0, 0.353658941e-2, 2.07883881342e-4),
    (500.0, 0.263889776e1, 4.900885976296e-2),
    (600.0, 0.123443146e2, 1.6031550500703e-1),
]
#: MPa·m³/kg in kJ/kg.
KILOJOULES = 1e3


def at_every_point(test):
    return pytest.mark.parametrize(("region", "t", "p"), POINTS, ids=POINT_NAMES)(test)


def property_of(region, name):
    """A property as a function of (T, p)."""
    return lambda x: float(region(x[0], x[1])[name])


def gibbs(region):
    def function(x):
        state = region(x[0], x[1])
        return float(state["h"]) - x[0] * float(state["s"])

    return function


def state_of(region, t, p):
    return {name: float(value) for name, value in region(t, p).items()}


def slopes(function, t, p):
    """By T and by p."""
    return gradcheck.estimate(function, at=[t, p]).value


# --- values ---


@pytest.mark.parametrize(("region", "t", "p", "printed"), TABLE, ids=POINT_NAMES)
def test_the_package_gives_the_printed_values(region, t, p, printed):
    state = state_of(region, t, p)

    # nine significant digits, half a unit of the last one
    assert [state[name] for name in ("v", "h", "s", "cp", "w")] == pytest.approx(list(printed), rel=5e-9)


@pytest.mark.parametrize(("t", "p", "slope"), SATURATION)
def test_pressures_of_saturation_are_the_printed_ones_and_their_slope_is_confirmed(t, p, slope):
    def saturation(t):
        return float(regions._PSat_T(float(t)))

    assert saturation(t) == pytest.approx(p, rel=5e-9)
    assert verdict_on(saturation, t, slope) == CONFIRMED


# --- identities ---


@at_every_point
def test_derivatives_of_enthalpy_and_entropy_give_the_heat_capacity(region, t, p):
    cp = state_of(region, t, p)["cp"]

    assert slopes(property_of(region, "h"), t, p)[0] == pytest.approx(cp, rel=1e-9)
    assert t * slopes(property_of(region, "s"), t, p)[0] == pytest.approx(cp, rel=1e-9)


@at_every_point
def test_derivatives_of_the_gibbs_energy_give_volume_and_entropy(region, t, p):
    state = state_of(region, t, p)

    by_t, by_p = slopes(gibbs(region), t, p)

    assert by_p / KILOJOULES == pytest.approx(state["v"], rel=1e-9)
    assert -by_t == pytest.approx(state["s"], rel=1e-9)


@at_every_point
def test_derivatives_of_the_volume_give_expansion_compressibility_speed_of_sound_and_the_fall_of_enthalpy(region, t, p):
    state = state_of(region, t, p)

    by_t, by_p = slopes(property_of(region, "v"), t, p)

    v = state["v"]
    assert by_t / v == pytest.approx(state["alfav"], rel=1e-9)
    assert -by_p / v == pytest.approx(state["kt"], rel=1e-9)
    # Pa and J from here on
    sound = -(v**2) / (by_p / 1e6 + t * by_t**2 / (1e3 * state["cp"]))
    assert sound == pytest.approx(state["w"] ** 2, rel=1e-9)
    assert slopes(property_of(region, "h"), t, p)[1] == pytest.approx(KILOJOULES * (v - t * by_t), rel=1e-9)


@at_every_point
def test_the_heat_capacity_and_the_volume_of_the_package_are_confirmed_as_derivatives(region, t, p):
    state = state_of(region, t, p)

    assert report_on(lambda t: float(region(t, p)["h"]), t, gradient=np.array(state["cp"])).verdict == CONFIRMED
    by_both = np.array([-state["s"], KILOJOULES * state["v"]])
    assert report_on(gibbs(region), [t, p], gradient=by_both).verdict == CONFIRMED


def test_single_derivatives_are_those_of_a_richardson_tableau():
    liquid = slopes(property_of(LIQUID, "v"), 300.0, 3.0)
    steam = slopes(property_of(VAPOUR, "v"), 700.0, 30.0)

    assert slopes(property_of(LIQUID, "h"), 300.0, 3.0)[0] == pytest.approx(4.17301218407, rel=1e-11)
    assert liquid.tolist() == pytest.approx([2.7795131154e-7, -4.4734259415e-7], rel=2e-11)
    assert steam.tolist() == pytest.approx([6.842196345423e-5, -4.443536970451e-4], rel=1e-12)


@pytest.mark.parametrize(("t", "gap"), [(300.0, 8.9e-6), (500.0, -6.9e-5), (600.0, -1.35e-4)])
def test_the_clausius_clapeyron_equation_holds_as_far_as_the_standard_is_consistent_and_is_refuted_beyond(t, gap):
    """Regions and saturation line are separate fits: dps/dT = Δh/(T·Δv) holds to five or four digits only."""
    ps = float(regions._PSat_T(t))
    liquid, vapour = state_of(LIQUID, t, ps), state_of(VAPOUR, t, ps)
    clapeyron = (vapour["h"] - liquid["h"]) / (t * (vapour["v"] - liquid["v"])) / KILOJOULES

    def saturation(t):
        return float(regions._PSat_T(float(t)))

    assert clapeyron / gradcheck.estimate(saturation, at=t).value - 1 == pytest.approx(gap, rel=0.01)
    assert verdict_on(saturation, t, clapeyron) == REFUTED
    assert verdict_on(saturation, t, clapeyron, rel_tol=2e-4) == CONFIRMED


# --- units ---


@pytest.fixture(scope="module")
def throttled():
    """Water at 450 K and 5 MPa, with its two throttling coefficients, which are per kPa although p is in MPa."""
    return regions.IAPWS97(T=450, P=5)


def test_a_throttling_coefficient_per_kilopascal_is_diagnosed_as_a_conversion_by_a_thousandth(throttled):
    def enthalpy(p):
        return float(LIQUID(450.0, float(p))["h"])

    report = report_on(enthalpy, 5.0, gradient=np.array(float(throttled.deltat)))

    assert report.verdict == REFUTED
    assert report.entries.witness[0] == pytest.approx(0.526221677489, rel=1e-10)
    assert report.entries.claim[0] / report.entries.witness[0] == pytest.approx(1e-3, rel=1e-9)
    (diagnosis,) = report.diagnoses
    assert diagnosis.code == "unit-factor"
    assert "1e-3 times" in diagnosis.text


def test_the_joule_thomson_coefficient_is_right_per_kilopascal_and_refuted_per_megapascal(throttled):
    h = float(throttled.h)

    def temperature(p):
        return brentq(lambda t: float(LIQUID(t, float(p))["h"]) - h, 400.0, 500.0, xtol=1e-12, rtol=1e-15)

    assert verdict_on(temperature, 5.0, float(throttled.joule)) == REFUTED
    assert verdict_on(temperature, 5.0, 1e3 * float(throttled.joule)) == CONFIRMED
    assert 1e3 * float(throttled.joule) == pytest.approx(-0.120240397833, rel=1e-11)


# --- the seam between regions 1 and 3 ---

SEAM = 623.15
PRESSURE = 25.0


def dense_state(t, p=PRESSURE):
    """Region 3, which is given by density and temperature."""
    density = brentq(lambda rho: float(DENSE(rho, t)["P"]) - p, 100.0, 800.0, xtol=1e-300, rtol=1e-15)
    return DENSE(density, t)


def across(t):
    """Enthalpy at 25 MPa, kJ/kg, through both regions, as a program chooses them."""
    t = float(t)
    return float((LIQUID(t, PRESSURE) if t <= SEAM else dense_state(t))["h"])


def heat_capacity(t):
    t = float(t)
    return float((LIQUID(t, PRESSURE) if t <= SEAM else dense_state(t))["cp"])


@pytest.mark.parametrize(("lower", "upper"), [(600.0, 640.0), (400.0, 640.0)])
def test_the_jump_of_four_millionths_of_the_enthalpy_is_found_and_measured(lower, upper):
    """At 25 MPa from 1623.8645756 to 1623.8575735 kJ/kg."""
    (jump,) = interval_of(across, lower, upper).irregularities

    ((below, above),) = places((jump,), lower, upper)
    assert str(jump.kind) == "jump"
    assert below <= SEAM <= above <= below + 1e-10 * (upper - lower)
    assert jump.size == pytest.approx(-7.00e-3, abs=5e-6)
    assert (jump.left, jump.right) == (pytest.approx(1623.8645756, rel=1e-10), pytest.approx(1623.8575735, rel=1e-10))


@pytest.mark.parametrize("distance", [-3.0, -0.01, 0.01, 0.2, 1.0])
def test_near_the_jump_the_slope_is_estimated_within_its_bound_and_its_own_side_is_confirmed(distance):
    """A central difference over 1 K across the seam is 0.05 % off, one over 1 mK 50 %."""
    t = SEAM + distance

    answer = gradcheck.estimate(across, at=t)

    assert abs(answer.value - heat_capacity(t)) <= answer.bound <= 1e-8 * heat_capacity(t)
    assert verdict_on(across, t, heat_capacity(t)) == CONFIRMED


def test_on_the_seam_no_slope_is_given_and_none_is_confirmed():
    answer = gradcheck.estimate(across, at=SEAM)

    assert not np.isfinite(answer.bound)
    assert verdict_on(across, SEAM, heat_capacity(SEAM)) == UNDECIDED


def test_heat_capacity_and_speed_of_sound_jump_too():
    """cp by -7.2e-4 of itself and w by +2.8e-3 where the enthalpy looks smooth."""
    liquid, dense = LIQUID(SEAM, PRESSURE), dense_state(SEAM)

    assert float(dense["cp"]) / float(liquid["cp"]) - 1 == pytest.approx(-7.2e-4, rel=0.01)
    assert float(dense["w"]) / float(liquid["w"]) - 1 == pytest.approx(2.8e-3, rel=0.02)


def between_vapour_and_dense(p):
    """Enthalpy at 700 K; the regions meet at 30.47719662 MPa."""
    p = float(p)
    return float((VAPOUR(700.0, p) if p <= regions._P23_T(700.0) else dense_state(700.0, p))["h"])


def between_vapour_and_hot(t):
    """Enthalpy at 10 MPa; the regions meet at 1073.15 K."""
    t = float(t)
    return float((VAPOUR(t, 10.0) if t <= 1073.15 else regions._Region5(t, 10.0))["h"])


def between_liquid_and_dense(t):
    """Enthalpy at 50 MPa."""
    t = float(t)
    return float((LIQUID(t, 50.0) if t <= SEAM else dense_state(t, 50.0))["h"])


@pytest.mark.parametrize(
    ("enthalpy", "lower", "upper", "place", "height"),
    [
        (between_vapour_and_dense, 28.0, 33.0, 30.47719662, -0.125),
        (between_vapour_and_hot, 1000.0, 1150.0, 1073.15, -9.4e-2),
        (between_liquid_and_dense, 600.0, 640.0, SEAM, 1.19e-2),
    ],
    ids=["2/3 at 700 K", "2/5 at 10 MPa", "1/3 at 50 MPa"],
)
def test_the_other_seams_are_found_and_measured(enthalpy, lower, upper, place, height):
    (jump,) = interval_of(enthalpy, lower, upper).irregularities

    assert str(jump.kind) == "jump"
    assert places((jump,), lower, upper).mean() == pytest.approx(place, abs=1e-8 * place)
    assert jump.size == pytest.approx(height, rel=5e-3)
