"""Functions and derivatives of the same library of fluids, sea water, atoms or stars. Each test needs its library and
is skipped without it.

Figures are outputs of CoolProp 8.0, gsw 3.6, ase 3.29, astropy 8.0, chemicals 1.5, thermo 0.6 and fluids 1.3; a
Richardson tableau of central differences agrees with those that are right.
"""

import numpy as np
import pytest

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, interval_of, places, report_on, verdict_on, verdicts
from tests.outside.atmosphere import density, geopotential, gravity

# --- equations of state: CoolProp ---


@pytest.fixture(scope="module")
def coolprop():
    return pytest.importorskip("CoolProp.CoolProp")


@pytest.mark.parametrize(
    ("claim", "function", "variable", "value"),
    [
        ("d(Hmass)/d(T)|P", "Hmass", 0, 9119.501177318201),
        ("d(Dmass)/d(P)|T", "Dmass", 1, 7.921751197927876e-06),
        ("d(Dmass)/d(T)|P", "Dmass", 0, -4.735578377604229),
        ("d(Smass)/d(T)|P", "Smass", 0, 14.030001811258773),
        ("d(d(Hmass)/d(T)|P)/d(T)|P", "d(Hmass)/d(T)|P", 0, 208.0876695795344),
    ],
)
def test_derivatives_of_water_close_to_its_critical_point_are_confirmed(coolprop, claim, function, variable, value):
    """650 K, 30 MPa."""

    def along(x, name=function):
        state = [650.0, 30e6]
        state[variable] = float(x)
        return coolprop.PropsSI(name, "T", state[0], "P", state[1], "Water")

    report = report_on(along, [650.0, 30e6][variable], gradient=lambda x: along(x, claim))

    assert report.verdict == CONFIRMED
    assert report.entries.witness[0] == pytest.approx(value, rel=1e-10)


@pytest.mark.parametrize(
    ("fluid", "t", "slope"), [("Water", 373.15, 3619.336772628659), ("R134a", 300.0, 20657.289818649857)]
)
def test_the_slope_of_a_saturation_line_is_confirmed(coolprop, fluid, t, slope):
    assert verdict_on(lambda t: coolprop.PropsSI("P", "T", float(t), "Q", 0, fluid), t, slope) == CONFIRMED


def test_the_noise_of_an_iterated_inverse_is_measured(coolprop):
    """T(h, p): a standard deviation of about 3.4e-11 K, where the unit in the last place of T is 5.7e-14."""
    answer = gradcheck.estimate(lambda h: coolprop.PropsSI("T", "P", 1e5, "Hmass", float(h), "Water"), at=1.1e5)

    assert 1e-12 <= answer.noise[0] <= 1e-10
    heat_capacity = coolprop.PropsSI("Cpmass", "P", 1e5, "Hmass", 1.1e5, "Water")
    assert abs(answer.value - 1 / heat_capacity) <= answer.bound


@pytest.mark.parametrize(("unit", "pascal", "shown"), [("bar", 1e5, "1e-5"), ("kPa", 1e3, "1e-3")])
def test_a_slope_per_pascal_of_a_function_of_another_unit_is_named(coolprop, unit, pascal, shown):
    """Water at 650 K and 30 MPa; the library takes and differentiates by Pa."""

    def density(p, name="Dmass"):
        return coolprop.PropsSI(name, "T", 650.0, "P", float(p) * pascal, "Water")

    at = 30e6 / pascal
    report = report_on(density, at, gradient=lambda p: density(p, "d(Dmass)/d(P)|T"))

    assert report.verdict == REFUTED
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["unit-factor"]
    assert f"{shown} times" in report.diagnoses[0].text
    right = report_on(density, at, gradient=lambda p: pascal * density(p, "d(Dmass)/d(P)|T"))
    assert right.verdict == CONFIRMED
    assert right.entries.digits[0] >= 8


def test_a_heat_capacity_per_kelvin_is_no_slope_by_degrees_fahrenheit(coolprop):
    """Nine fifths too large."""

    def enthalpy(t, name="Hmass"):
        return coolprop.PropsSI(name, "T", (float(t) - 32) / 1.8 + 273.15, "P", 30e6, "Water")

    report = report_on(enthalpy, 710.0, gradient=lambda t: enthalpy(t, "Cpmass"))

    assert report.verdict == REFUTED
    assert report.entries.claim[0] / report.entries.witness[0] == pytest.approx(1.8, rel=1e-9)
    assert "1.8 times" in report.diagnoses[0].text


# --- sea water ---

#: TEOS-10 (2010): logarithmic slopes of the density of sea water by salinity and temperature.
LOGARITHMIC = {"thermal expansion": (1, "alpha", -1.0), "haline contraction": (0, "beta", 1.0)}


@pytest.mark.parametrize("name", LOGARITHMIC)
def test_expansion_and_contraction_of_sea_water_are_confirmed(name):
    gsw = pytest.importorskip("gsw")
    place, function, sign = LOGARITHMIC[name]

    def state(x):
        point = [35.0, 12.0, 800.0]
        point[place] = float(x)
        return point

    report = report_on(
        lambda x: np.log(float(gsw.rho(*state(x)))),
        [35.0, 12.0][place],
        gradient=lambda x: sign * float(getattr(gsw, function)(*state(x))),
    )

    assert report.verdict == CONFIRMED


PER_PASCAL = {
    "compressibility": (
        lambda gsw, p: np.log(float(gsw.rho(35.0, 12.0, p))),
        lambda gsw, p: float(gsw.kappa(35.0, 12.0, p)),
    ),
    "lapse rate": (
        lambda gsw, p: float(gsw.t_from_CT(35.0, 12.0, p)),
        lambda gsw, p: float(gsw.adiabatic_lapse_rate_from_CT(35.0, 12.0, p)),
    ),
    "specific volume": (
        lambda gsw, p: float(gsw.specvol(35.0, 12.0, p)),
        lambda gsw, p: float(gsw.specvol_first_derivatives(35.0, 12.0, p)[2]),
    ),
}


@pytest.mark.parametrize("name", PER_PASCAL)
def test_slopes_per_pascal_beside_a_pressure_in_decibar_are_named(name):
    gsw = pytest.importorskip("gsw")
    function, slope = PER_PASCAL[name]

    report = report_on(lambda p: function(gsw, p), 800.0, gradient=lambda p: slope(gsw, p))

    assert [diagnosis.code for diagnosis in report.diagnoses] == ["unit-factor"]
    assert "1e-4 times" in report.diagnoses[0].text
    right = report_on(lambda p: function(gsw, p), 800.0, gradient=lambda p: 1e4 * slope(gsw, p))
    assert right.verdict == CONFIRMED


def test_the_compression_of_sea_water_per_pascal_is_told_from_one_per_decibar():
    """gsw: the pressure is given in dbar, and the derivative by it in kg/m³ per Pa."""
    gsw = pytest.importorskip("gsw")
    point = np.array([35.0, 12.0, 800.0])

    report = report_on(lambda x: float(gsw.rho(*x)), point, gradient=lambda x: np.array(gsw.rho_first_derivatives(*x)))

    assert verdicts(report).tolist() == [CONFIRMED, CONFIRMED, REFUTED]
    assert report.entries.witness.tolist() == pytest.approx(
        [0.762847848013094, -0.20686233597545545, 4.3852993686485974e-3], rel=1e-11
    )
    (diagnosis,) = report.diagnoses
    assert diagnosis.code == "unit-factor"
    assert "1e-4 times" in diagnosis.text


# --- atoms ---


def energy_and_slopes(atoms):
    """By all positions, flat."""

    def energy(x):
        atoms.set_positions(np.reshape(x, (-1, 3)))
        return float(atoms.get_potential_energy())

    def slopes(x):
        atoms.set_positions(np.reshape(x, (-1, 3)))
        return -atoms.get_forces().ravel()

    return energy, slopes


def test_the_force_between_two_atoms_is_confirmed():
    """Lennard-Jones potential at r = 1.3: the slope of the energy is 4·(6r⁻⁷ - 12r⁻¹³)."""
    ase = pytest.importorskip("ase")
    potentials = pytest.importorskip("ase.calculators.lj")
    pair = ase.Atoms("Ar2", positions=[[0, 0, 0], [0, 0, 1.3]], calculator=potentials.LennardJones(rc=3.0))
    energy, slopes = energy_and_slopes(pair)

    report = report_on(lambda r: energy([0, 0, 0, 0, 0, r]), 1.3, gradient=lambda r: slopes([0, 0, 0, 0, 0, r])[-1])

    assert report.verdict == CONFIRMED
    assert report.entries.claim[0] == pytest.approx(4 * (6 * 1.3**-7 - 12 * 1.3**-13), rel=1e-14)


def test_the_force_of_a_morse_potential_is_confirmed():
    """P. M. Morse, Phys. Rev. 34 (1929) 57-64: the slope of (1 - e)² with e = exp(-6·(r - 1)) is 12·e·(1 - e)."""
    ase = pytest.importorskip("ase")
    potentials = pytest.importorskip("ase.calculators.morse")
    morse = potentials.MorsePotential(epsilon=1.0, r0=1.0, rho0=6.0)
    energy, slopes = energy_and_slopes(ase.Atoms("Ar2", positions=[[0, 0, 0], [0, 0, 1.3]], calculator=morse))

    report = report_on(lambda r: energy([0, 0, 0, 0, 0, r]), 1.3, gradient=lambda r: slopes([0, 0, 0, 0, 0, r])[-1])

    e = np.exp(-6 * 0.3)
    assert report.verdict == CONFIRMED
    assert report.entries.claim[0] == pytest.approx(12 * e * (1 - e), rel=1e-13)


def test_the_forces_on_a_shaken_crystal_are_confirmed_and_one_of_the_wrong_sign_refuted():
    build, emt = pytest.importorskip("ase.build"), pytest.importorskip("ase.calculators.emt")
    atoms = build.bulk("Cu", cubic=True)
    atoms.rattle(0.05, seed=3)
    atoms.calc = emt.EMT()
    energy, slopes = energy_and_slopes(atoms)
    at = atoms.get_positions().ravel().copy()
    wrong = slopes(at)
    place = int(np.abs(wrong).argmax())
    wrong[place] *= -1

    assert report_on(energy, at, gradient=slopes).verdict == CONFIRMED
    assert np.flatnonzero(verdicts(report_on(energy, at, gradient=wrong)) == REFUTED).tolist() == [place]


# --- shapes of spectral lines ---

LINES = [
    *("Gaussian1D", "Lorentz1D", "Voigt1D", "Moffat1D", "Sine1D", "Cosine1D", "Tangent1D", "ArcTangent1D"),
    *("LogParabola1D", "Schechter1D", "PowerLaw1D", "BrokenPowerLaw1D", "SmoothlyBrokenPowerLaw1D"),
    *("ExponentialCutoffPowerLaw1D", "Exponential1D", "Logarithmic1D", "KingProjectedAnalytic1D", "Plummer1D"),
]
IMAGES = ["Gaussian2D", "Lorentz2D", "Moffat2D", "Planar2D"]


def shape_and_slopes(name):
    """Values at four places as a function of the parameters, their Jacobian, and parameters that are not special."""
    model = getattr(pytest.importorskip("astropy.modeling.models"), name)()
    places = np.array([0.31, 0.7, 1.13, 1.9])

    def slopes(p):
        return np.array([np.broadcast_to(column, places.shape) for column in model.fit_deriv(places, *p)]).T

    usual = np.array(model.parameters)
    return lambda p: model.evaluate(places, *p), slopes, usual * 1.07 + 0.13 * (1 + np.arange(usual.size) % 3)


@pytest.mark.parametrize("name", LINES)
def test_the_slopes_of_a_line_shape_by_its_parameters_are_confirmed(name):
    shape, slopes, at = shape_and_slopes(name)

    assert report_on(shape, at, jacobian=slopes).verdict == CONFIRMED


@pytest.mark.parametrize("name", IMAGES)
def test_the_slopes_of_an_image_by_its_parameters_are_confirmed(name):
    model = getattr(pytest.importorskip("astropy.modeling.models"), name)()
    x, y = np.array([0.31, 0.7, 1.13, 1.9]), np.array([0.2, 0.9, 0.4, 1.3])
    at = np.array(model.parameters) * 1.07 + 0.13 * (1 + np.arange(len(model.parameters)) % 3)

    def slopes(p):
        return np.array([np.broadcast_to(column, x.shape) for column in model.fit_deriv(x, y, *p)]).T

    assert report_on(lambda p: model.evaluate(x, y, *p), at, jacobian=slopes).verdict == CONFIRMED


def test_the_slopes_of_the_drude_profile_by_its_centre_are_a_real_fault():
    """a·(w/c)²/((x/c - c/x)² + (w/c)²): at a, c, w = 1.2, 1.33, 1.46 the slopes by c were computed with 40 digits."""
    shape, slopes, at = shape_and_slopes("Drude1D")
    truth = [-0.2425629693962682, -1.1872419636366804, -0.9731780440161066, 0.7360940494794164]

    report = report_on(shape, at, jacobian=slopes)

    assert at.tolist() == pytest.approx([1.2, 1.33, 1.46])
    assert report.entries.witness.reshape(4, 3)[:, 1].tolist() == pytest.approx(truth, rel=1e-12)
    right = np.abs(slopes(at)[:, 1] / truth - 1) < 1e-6
    assert not right.any()  # a release that mends it ends this test
    assert verdicts(report).tolist() == [[CONFIRMED, REFUTED, CONFIRMED]] * 4


# --- vapour pressure and cubic equations ---


@pytest.mark.parametrize(
    ("name", "first", "second", "constants", "t"),
    [
        ("Antoine", "dAntoine_dT", "d2Antoine_dT2", (8.95894, 510.595, -15.95), 100.0),
        ("Wagner", "dWagner_dT", "d2Wagner_dT2", (190.53, 4596420.0, -6.00435, 1.1885, -0.834082, -1.22833), 100.0),
        ("Yaws_Psat", "dYaws_Psat_dT", "d2Yaws_Psat_dT2", (28.588, -2469, -7.351, 2.8025e-10, 2.7361e-6), 400.0),
    ],
)
def test_both_derivatives_of_a_vapour_pressure_are_confirmed(name, first, second, constants, t):
    formulas = pytest.importorskip("chemicals.vapor_pressure")
    value, slope, curvature = (getattr(formulas, each) for each in (name, first, second))

    assert report_on(lambda t: value(t, *constants), t, gradient=lambda t: slope(t, *constants)).verdict == CONFIRMED
    assert (
        report_on(lambda t: slope(t, *constants), t, gradient=lambda t: curvature(t, *constants)).verdict == CONFIRMED
    )


@pytest.mark.parametrize(("name", "omega"), [("PR", 0.2975), ("SRK", 0.2975), ("VDW", None), ("RK", None)])
def test_expansion_and_fugacity_of_a_cubic_equation_of_state_are_confirmed(name, omega):
    """Hexane at 400 K and 1 MPa, liquid."""
    equation = getattr(pytest.importorskip("thermo"), name)
    constants = {"Tc": 507.6, "Pc": 3025000.0} | ({} if omega is None else {"omega": omega})

    def state(t=400.0, p=1e6):
        return equation(T=float(t), P=float(p), **constants)

    assert report_on(lambda t: state(t).V_l, 400.0, gradient=lambda t: state(t).dV_dT_l).verdict == CONFIRMED
    by_pressure = report_on(lambda p: state(p=p).fugacity_l, 1e6, gradient=lambda p: state(p=p).dfugacity_dP_l)
    assert by_pressure.verdict == CONFIRMED


#: Equations of the DIPPR handbook with constants of common substances (from memory), at a temperature in K.
DIPPR = {
    "EQ100": (300.0, (276370.0, -2090.1, 8.125, -0.014116, 9.3701e-6)),
    "EQ101": (300.0, (73.649, -7258.2, -7.3037, 4.1653e-6, 2.0)),
    "EQ102": (300.0, (1.7096e-8, 1.1146, 1.0, 1.0)),
    "EQ104": (300.0, (0.02222, -26.38, -16750000.0, -3.894e19, 3.133e21)),
    "EQ105": (300.0, (0.70824, 0.26411, 507.6, 0.27537)),
    "EQ106": (300.0, (647.096, 0.17766, 2.567, -3.3377, 1.9699)),
    "EQ107": (300.0, (33363.0, 26790.0, 2610.5, 8896.0, 1169.0)),
    "EQ114": (20.0, (33.19, 66.653, 6765.9, -123.63, 478.27)),
    "EQ115": (300.0, (7.0, -2200.0, -1.2, 1e-3, 1e-6)),
    "EQ116": (300.0, (647.096, 17.863, 58.606, -95.396, 213.89, -141.26)),
}


@pytest.mark.parametrize("name", DIPPR)
def test_the_slope_of_an_equation_for_a_pure_substance_is_confirmed(name):
    equation = getattr(pytest.importorskip("chemicals.dippr"), name)
    t, constants = DIPPR[name]

    report = report_on(lambda t: equation(t, *constants), t, gradient=lambda t: equation(t, *constants, order=1))

    assert report.verdict == CONFIRMED


INTERACTION = (300 * np.array([[0, -0.3, 0.2], [0.4, 0, 0.5], [0.1, 0.6, 0]])).tolist()
#: Models of the excess Gibbs energy of a mixture of three, all with temperature as 300 K / T.
MIXTURES = {
    "NRTL": {"tau_bs": INTERACTION, "alpha_cs": (0.3 * (1 - np.eye(3))).tolist()},
    "Wilson": {"lambda_bs": INTERACTION},
    "UNIQUAC": {"tau_bs": INTERACTION, "rs": [2.1, 3.2, 1.4], "qs": [1.9, 2.4, 1.4]},
}


@pytest.mark.parametrize("name", MIXTURES)
def test_the_derivatives_of_an_excess_energy_by_temperature_and_composition_are_confirmed(name):
    model = getattr(pytest.importorskip("thermo"), name)

    def mixture(t=300.0, x=(0.2, 0.3, 0.5)):
        return model(T=float(t), xs=list(x), **MIXTURES[name])

    def by_composition(x):
        return np.array(mixture(x=x).dGE_dxs())

    assert report_on(lambda t: mixture(t).GE(), 300.0, gradient=lambda t: mixture(t).dGE_dT()).verdict == CONFIRMED
    slope = report_on(lambda t: mixture(t).dGE_dT(), 300.0, gradient=lambda t: mixture(t).d2GE_dT2())
    assert slope.verdict == CONFIRMED
    at = [0.2, 0.3, 0.5]
    assert report_on(lambda x: mixture(x=x).GE(), at, gradient=by_composition).verdict == CONFIRMED
    second = report_on(by_composition, at, jacobian=lambda x: np.array(mixture(x=x).d2GE_dxixjs()))
    assert second.verdict == CONFIRMED


# --- pipes and air ---


def test_the_friction_factor_of_a_library_jumps_where_it_changes_its_formula():
    """fluids changes at Re = 2040, not at the customary 2300: from 0.031372549 to 0.049135463."""
    friction = pytest.importorskip("fluids.friction").friction_factor

    (jump,) = interval_of(lambda reynolds: friction(Re=float(reynolds), eD=0.0), 500.0, 1e4).irregularities

    assert places((jump,), 500.0, 1e4).mean() == pytest.approx(2040, abs=1e-6)
    assert (jump.left, jump.right) == pytest.approx((0.03137254901963921, 0.049135463060371906), rel=1e-9)


@pytest.mark.parametrize("altitude", [5000.0, 30000.0])
def test_the_pressure_of_the_standard_atmosphere_of_a_library_obeys_the_hydrostatic_law(altitude):
    atmosphere = pytest.importorskip("fluids").ATMOSPHERE_1976

    weight = -density(geopotential(altitude)) * gravity(altitude)
    assert verdict_on(lambda z: atmosphere(float(z)).P, altitude, weight) == CONFIRMED
