"""Kinks that everybody flies through: U.S. Standard Atmosphere, 1976 (NOAA, NASA, USAF), Tables 3 and 4.

Table values typed from memory and recomputed with 40 digits from the constants; layers as in ISO 2533:1975.
"""

import numpy as np
import pytest

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, interval_of, places, report_on, verdict_on
from tests.outside.atmosphere import (
    BASES,
    GAS_CONSTANT,
    K_PER_M,
    LAPSE_RATES,
    MOLAR_MASS,
    TOP,
    density,
    geopotential,
    gravity,
    layer,
    pressure,
    pressure_slope,
    temperature,
)

KINKS = BASES[1:]
#: U.S. Standard Atmosphere (1976): pressure in Pa at the bases of the layers, as printed.
PUBLISHED_PRESSURES = {0.0: 101325.0, 11e3: 22632.06, 20e3: 5474.889, 32e3: 868.0187, 47e3: 110.9063}
#: Inside the layers, with 40 digits: H in m, T in K, p in Pa, dp/dH in Pa/m.
INSIDE = [
    (5000.0, 255.65, 54019.9121037621, -7.21882564771834),
    (15000.0, 216.65, 12044.5708624232, -1.89928926788947),
    (25000.0, 221.65, 2511.02335325259, -0.387027204171403),
    (40000.0, 251.05, 277.521554012951, -0.0377654765714716),
]
#: At the bases: dp/dH in Pa/m (40 digits).
SLOPES_AT_BASES = {0.0: -12.0131379720862, 11e3: -3.56881425714308, 20e3: -0.863326507185881}
SLOPES_AT_BASES |= {32e3: -0.12969294275989, 47e3: -0.0139993117094367}
#: d²p/dH² below and above the bases, Pa/m² (40 digits).
CURVATURES = {
    11e3: (4.55687993413662e-4, 5.62760657486729e-4),
    20e3: (1.36136587057512e-4, 1.40121477466863e-4),
    32e3: (1.99449735499285e-5, 2.0965954511957e-5),
    47e3: (1.91191311616559e-6, 1.76708373214039e-6),
}
#: Geometric altitudes of the bases, m.
GEOMETRIC_KINKS = (11019.067832, 20063.1236817, 32161.903223, 47350.0922221)
SPANS = [(0.0, TOP), (-1000.0, TOP), (0.0, 50000.0), (2000.0, 49000.0)]


def half_digit(printed: float) -> float:
    """Half a unit of the last place of seven significant digits."""
    return 0.5 * 10.0 ** (np.floor(np.log10(printed)) - 6)


# --- the model ---


@pytest.mark.parametrize("height", PUBLISHED_PRESSURES)
def test_pressures_at_the_bases_are_those_of_the_table(height):
    printed = PUBLISHED_PRESSURES[height]

    assert abs(pressure(height) - printed) <= half_digit(printed)


@pytest.mark.parametrize(("height", "kelvin", "pascal", "slope"), INSIDE)
def test_values_inside_the_layers_are_those_computed_with_forty_digits(height, kelvin, pascal, slope):
    assert temperature(height) == pytest.approx(kelvin, rel=1e-14)
    assert pressure(height) == pytest.approx(pascal, rel=1e-14)
    assert pressure_slope(height) == pytest.approx(slope, rel=1e-14)


# --- kinks ---


@pytest.mark.parametrize(("lower", "upper"), SPANS)
def test_the_kinks_of_the_temperature_are_found_at_the_bases_of_the_layers(lower, upper):
    found = interval_of(temperature, lower, upper).of_kind("kink")

    middles = places(found, lower, upper).mean(axis=1)
    assert middles.tolist() == pytest.approx(KINKS, abs=1e-6 * (upper - lower))


def test_an_audit_of_the_temperature_tells_its_kinks_with_places_and_slopes():
    report = gradcheck.audit(temperature, at=15000.0, bounds=(0.0, TOP))

    kinks = sorted((f for f in report.findings if f.code == "kink"), key=lambda f: f.where.lower)
    told = [(f.where.lower + f.where.upper) / 2 for f in kinks]
    # a report tells three of more places of one kind, and their number
    assert len(told) >= 3
    assert {f.evidence["places"] for f in kinks} == {len(KINKS)}
    for finding, place in zip(kinks, told, strict=True):
        nearest = int(np.argmin(np.abs(np.array(KINKS) - place)))
        assert place == pytest.approx(KINKS[nearest], abs=1e-6 * TOP)
        assert finding.evidence["left_slope"] == pytest.approx(LAPSE_RATES[nearest], rel=0.05, abs=1e-5)
        assert finding.evidence["right_slope"] == pytest.approx(LAPSE_RATES[nearest + 1], rel=0.05, abs=1e-5)


@pytest.mark.parametrize("height", KINKS)
def test_the_mean_slope_at_a_kink_is_not_confirmed_although_every_central_difference_gives_it(height):
    """The trap: (T(H + h) - T(H - h))/2h is the mean of both slopes for every step, and looks converged."""
    i = BASES.index(height)
    mean = (LAPSE_RATES[i - 1] + LAPSE_RATES[i]) / 2

    report = report_on(temperature, height, gradient=np.array(mean))

    assert report.verdict == UNDECIDED
    assert [finding.code for finding in report.findings] == ["kink"]


def test_the_two_slopes_at_eleven_kilometres_are_measured():
    report = report_on(temperature, 11000.0, gradient=np.array(-0.0065 / 2))

    evidence = report.findings[0].evidence
    assert evidence["left_slope"] == pytest.approx(-0.0065, rel=1e-6)
    assert evidence["right_slope"] == pytest.approx(0, abs=1e-9)


@pytest.mark.parametrize("slope", [-0.0065, 0.0])
def test_a_one_sided_slope_at_a_kink_is_left_undecided(slope):
    assert verdict_on(temperature, 11000.0, slope) == UNDECIDED


@pytest.mark.parametrize("slope", [-0.0066, 0.001])
def test_a_slope_outside_the_two_at_a_kink_is_refuted(slope):
    assert verdict_on(temperature, 11000.0, slope) == REFUTED


def temperature_slope(height):
    return LAPSE_RATES[layer(height)]


def density_slope(height):
    """d rho/dH = -rho·(k + L)/T, right in every layer."""
    return -density(height) * (K_PER_M + LAPSE_RATES[layer(height)]) / temperature(height)


@pytest.mark.parametrize("distance", [0.01, 0.1, 1.0, 10.0, 100.0, 1000.0])
@pytest.mark.parametrize(("function", "slope"), [(temperature, temperature_slope), (density, density_slope)])
def test_the_right_slope_at_any_distance_from_a_kink_is_never_refuted(function, slope, distance):
    heights = [kink + side * distance for kink in KINKS for side in (-1, 1)]

    assert all(report_on(function, height, gradient=slope).verdict != REFUTED for height in heights)


@pytest.mark.parametrize("height", [10900.0, 20100.0, 31900.0, 32100.0, 46900.0])
def test_a_hundred_metres_from_a_kink_the_slope_of_the_own_side_is_confirmed(height):
    assert report_on(temperature, height, gradient=temperature_slope).verdict == CONFIRMED


@pytest.mark.parametrize("height", [31999.0, 32001.0])
def test_no_kink_is_told_at_a_point_a_metre_away_from_it(height):
    assert report_on(temperature, height, gradient=temperature_slope).findings == ()


def test_the_kinks_of_the_density_are_found_too():
    found = interval_of(density, 0.0, TOP).of_kind("kink")

    assert places(found, 0.0, TOP).mean(axis=1).tolist() == pytest.approx(KINKS, abs=1e-6 * TOP)


def test_the_two_slopes_of_the_density_at_eleven_kilometres_are_measured():
    """From -4.6467243494329e-5 to -5.73856166465336e-5 kg/m⁴ (40 digits)."""
    evidence = report_on(density, 11000.0, gradient=density_slope).findings[0].evidence

    assert evidence["left_slope"] == pytest.approx(-4.6467243494329e-5, rel=1e-3)
    assert evidence["right_slope"] == pytest.approx(-5.73856166465336e-5, rel=1e-3)


def test_the_slopes_told_at_a_kink_are_right_to_the_digits_that_are_printed():
    kinks = interval_of(temperature, 0.0, TOP).of_kind("kink")

    assert kinks[0].left / TOP == pytest.approx(-0.0065, rel=1e-4)


def test_in_geometric_altitude_the_kinks_do_not_sit_at_round_numbers():
    found = interval_of(lambda altitude: temperature(geopotential(altitude)), 0.0, TOP).of_kind("kink")

    assert places(found, 0.0, TOP).mean(axis=1).tolist() == pytest.approx(GEOMETRIC_KINKS, abs=1e-6 * TOP)


def sound_speed(height):
    """m/s; gamma = 1.4."""
    return float(np.sqrt(1.4 * GAS_CONSTANT / MOLAR_MASS * temperature(height)))


def test_the_speed_of_sound_has_the_same_kinks_with_the_published_slopes_at_eleven_kilometres():
    report = report_on(sound_speed, 11000.0, gradient=np.array(-0.002))

    evidence = report.findings[0].evidence
    assert [finding.code for finding in report.findings] == ["kink"]
    assert evidence["left_slope"] == pytest.approx(-0.00442638445142, rel=1e-6)
    assert evidence["right_slope"] == pytest.approx(0, abs=1e-9)


# --- what is no kink ---


@pytest.mark.parametrize(("lower", "upper"), SPANS)
def test_the_pressure_has_no_kink_only_breaks_of_curvature_at_the_bases(lower, upper):
    """p'' jumps by 23.5 % at 11 km, 2.9 % at 20 km, 5.1 % at 32 km and -7.6 % at 47 km."""
    report = interval_of(pressure, lower, upper)

    assert {str(found.kind) for found in report.irregularities} == {"curvature-break"}
    for middle in places(report.irregularities, lower, upper).mean(axis=1):
        assert np.abs(np.array(KINKS) - middle).min() <= 1e-6 * (upper - lower)


@pytest.mark.parametrize("height", CURVATURES)
def test_the_break_of_curvature_of_the_pressure_is_measured_on_both_sides(height):
    (found,) = interval_of(pressure, height - 3000.0, height + 3000.0).irregularities

    assert str(found.kind) == "curvature-break"
    assert [found.left / 6000**2, found.right / 6000**2] == pytest.approx(CURVATURES[height], rel=1e-3)


@pytest.mark.parametrize("height", SLOPES_AT_BASES)
def test_at_the_bases_the_slope_of_the_pressure_is_estimated_within_its_bound_to_seven_digits(height):
    slope = SLOPES_AT_BASES[height]

    answer = gradcheck.estimate(pressure, at=height)

    assert pressure_slope(height) == pytest.approx(slope, rel=1e-14)
    assert abs(answer.value - slope) <= answer.bound <= 1e-7 * abs(slope)


@pytest.mark.parametrize(
    "height", [-500.0, 3000.0, 10000.0, 12000.0, 19000.0, 28000.0, 39000.0, 46000.0, 48000.0, 50500.0]
)
def test_the_hydrostatic_law_is_confirmed_in_every_layer(height):
    assert report_on(pressure, height, gradient=pressure_slope).verdict == CONFIRMED


@pytest.mark.parametrize(("height", "kelvin", "pascal", "slope"), INSIDE)
def test_the_hydrostatic_law_is_confirmed_inside_the_layers(height, kelvin, pascal, slope):
    assert report_on(pressure, height, gradient=pressure_slope).verdict == CONFIRMED
    assert verdict_on(pressure, height, slope) == CONFIRMED


@pytest.mark.parametrize("height", KINKS)
def test_the_hydrostatic_law_is_not_refuted_where_the_curvature_breaks(height):
    assert report_on(pressure, height, gradient=pressure_slope).verdict != REFUTED


@pytest.mark.parametrize("height", [5000.0, 15000.0, 25000.0, 40000.0])
def test_forgetting_that_the_temperature_varies_is_refuted_wherever_it_does(height):
    """d rho/dH = -rho·(k + L)/T; without L it is right in the isothermal layer only: a claim right in one region."""
    slope = -density(height) * K_PER_M / temperature(height)

    assert verdict_on(density, height, slope) == (CONFIRMED if height == 15000 else REFUTED)


@pytest.mark.parametrize(
    ("altitude", "slope"), [(5000.0, -7.21054820379836), (30000.0, -0.178849991491567)], ids=["5 km", "30 km"]
)
def test_pressure_falls_with_the_local_weight_of_air_in_geometric_altitude(altitude, slope):
    """dp/dZ = -rho·g(Z); values with 40 digits."""

    def by_altitude(z):
        return pressure(geopotential(z))

    def weight(z):
        return -density(geopotential(z)) * gravity(z)

    assert weight(altitude) == pytest.approx(slope, rel=1e-13)
    assert report_on(by_altitude, altitude, gradient=weight).verdict == CONFIRMED
