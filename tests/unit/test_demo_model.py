"""The demonstration's model: its formulas, its hand-written derivatives, and every fault where it is listed."""

import itertools
import math
import pickle

import mpmath
import numpy as np
import pytest

from gradcheck.demo import branch as data
from gradcheck.demo.heating import (
    REYNOLDS_SWITCH,
    friction_factor,
    friction_slopes,
    pressure_loss,
    reynolds,
    shell_conductance,
    shell_slopes,
    transfer_units,
)
from gradcheck.demo.pump_curve import pump_curve
from gradcheck.demo.scenario import (
    CAUTION,
    DEFAULT_PUMP_TABLE,
    PLANTED,
    VARIABLES,
    branch_problem,
    planted_in,
    problem,
)
from gradcheck.errors import UsageError

NAMES = [variable.name for variable in VARIABLES]
START = np.array([variable.value for variable in VARIABLES])
LOWER = np.array([variable.lower for variable in VARIABLES])
UPPER = np.array([variable.upper for variable in VARIABLES])
OTHER_TABLE = ((0.0, 90.0), (1.2, 84.0), (1.7, 66.0), (5.5, 5.0))
TABLES = pytest.mark.parametrize("table", [DEFAULT_PUMP_TABLE, OTHER_TABLE], ids=["default table", "another table"])
OUTPUTS = ("objective", "pressure", "temperature", "velocity")


def functions(**options):
    described = branch_problem(**options)
    return {"objective": described.objective, **described.constraints}


def value(function, x):
    return np.atleast_1d(function.function(np.array(x, dtype=float)))


def claim(function, x):
    source = function.gradient if function.gradient is not None else function.jacobian
    return np.atleast_2d(source(np.array(x, dtype=float)))


def along(name, at):
    x = START.copy()
    x[NAMES.index(name)] = at
    return x


def planted(kind, **options):
    return [item for item in planted_in(**options) if item.kind == kind]


# --- the same model once more, with 40 digits and written from the formulas' textbook forms --------------------------


def many_digit_outputs(x, table, near):
    """All seven outputs as a list of mpf; `near` is a guess of the farthest temperature."""
    diameters, (insulation, speed, supply, pumps) = x[:4], x[4:]
    flows = [load / (mpmath.mpf(data.HEAT_CAPACITY) * (supply - data.RETURN)) for load in data.CARRIED]
    velocities = [q / data.DENSITY / (mpmath.pi * d**2 / 4) for q, d in zip(flows, diameters, strict=True)]
    lost_heads = [
        data.PIPES * data.FITTINGS * length / d * many_digit_friction(v, d) * data.DENSITY * v**2 / 2 / 1000
        for length, d, v in zip(data.LENGTHS, diameters, velocities, strict=True)
    ]
    pump_flow = flows[0] / data.DENSITY * 3600 / int(mpmath.nint(pumps)) / speed
    head = speed**2 * many_digit_table(pump_flow, table)
    areas = [mpmath.pi / 4 * ((d + 2 * insulation) ** 2 - d**2) for d in diameters]
    invested = data.PUMP_PRICE * int(mpmath.nint(pumps)) + sum(
        length * (data.TRENCH_PRICE + data.DIAMETER_PRICE * d + data.PIPES * data.INSULATION_PRICE * area)
        for length, d, area in zip(data.LENGTHS, diameters, areas, strict=True)
    )
    shells = [
        2 * mpmath.pi * data.CONDUCTIVITY / mpmath.log((d + 2 * insulation) / d) / 1000 for d in diameters
    ]  # kW/(m K)
    lost = sum(
        length * shell * ((supply - data.GROUND) + (data.RETURN - data.GROUND))
        for length, shell in zip(data.LENGTHS, shells, strict=True)
    )
    power = flows[0] / data.DENSITY * head / data.PUMP_EFFICIENCY
    cost = data.ANNUITY * invested + data.HEAT_PRICE * data.HOT_HOURS * lost
    cost += data.POWER_PRICE * data.PUMP_HOURS * power
    farthest = mpmath.findroot(
        lambda t: many_digit_plant(t, shells) - supply, (near, near * (1 + mpmath.mpf(10) ** -8))
    )
    return [cost, head - sum(lost_heads), farthest, *velocities]


def many_digit_friction(velocity, diameter):
    number = data.DENSITY * velocity * diameter / data.VISCOSITY
    if number < 2300:
        return 64 / number
    return (-2 * mpmath.log10(data.ROUGHNESS / diameter / 3.7 + 5.74 / number ** mpmath.mpf(0.9))) ** -2


def many_digit_table(flow, table):
    for (left, high), (right, low) in itertools.pairwise(table):
        if left <= flow < right:
            return high + (mpmath.mpf(low) - high) / (mpmath.mpf(right) - left) * (flow - left)
    raise AssertionError("the flow lies outside the table")


def many_digit_plant(farthest, shells):
    """The supply temperature that the plant must give for `farthest` to arrive at building 4."""
    temperature, flow = farthest, mpmath.mpf(0)
    for load, shell, length in reversed(list(zip(data.NIGHT_LOADS, shells, data.LENGTHS, strict=True))):
        flow += load / data.HEAT_CAPACITY / (temperature - data.RETURN)
        temperature = data.GROUND + (temperature - data.GROUND) * mpmath.exp(
            shell * length / (flow * data.HEAT_CAPACITY)
        )
    return temperature


def many_digit_values_and_slopes(x, table, near):
    """Values (7,) and central differences (7, 8) at a step of 1e-14·x; truncation about 1e-28."""
    with mpmath.workdps(40):
        point = [mpmath.mpf(float(entry)) for entry in x]
        values = many_digit_outputs(point, table, near)
        slopes = np.zeros((7, 8))
        for i in range(8):
            step = point[i] * mpmath.mpf(10) ** -14
            ends = [many_digit_outputs([*point[:i], point[i] + s, *point[i + 1 :]], table, near) for s in (step, -step)]
            slopes[:, i] = [float((up - down) / (2 * step)) for up, down in zip(*ends, strict=True)]
        return np.array([float(entry) for entry in values]), slopes


def start_and_twenty_points():
    rng = np.random.default_rng(20)
    points = [START]
    for _ in range(20):
        x = LOWER + (UPPER - LOWER) * rng.uniform(0.02, 0.98, 8)
        x[7] = rng.integers(1, 5)
        points.append(x)
    return points


@pytest.fixture(scope="module")
def truth():
    """(point, values (7,), slopes (7, 8)) at the start and 20 random points."""
    temperature = functions(inner_tolerance=1e-15)["temperature"]
    return [
        (x, *many_digit_values_and_slopes(x, DEFAULT_PUMP_TABLE, float(value(temperature, x)[0])))
        for x in start_and_twenty_points()
    ]


def wrong_entries(truth, rel_tol, **options):
    """Names of the entries that are off by more than `rel_tol` at one of the points, and how often each is."""
    described = functions(**options)
    count = {}
    for x, _, slopes in truth:
        claims = np.vstack([claim(described[name], x) for name in OUTPUTS])
        off = np.abs(claims - slopes) > rel_tol * np.abs(slopes)
        for row, column in zip(*np.nonzero(off), strict=True):
            key = (OUTPUTS[min(row, 3)], NAMES[column])
            count[key] = count.get(key, 0) + 1
    return count


# --- published formulas -----------------------------------------------------------------------------------------------


def test_turbulent_friction_is_the_published_formula():
    # Swamee & Jain 1976, smooth pipe at Re = 2300: the printed formula and its slope, evaluated with 50 digits.
    value_there, slope_there = friction_factor(2300.0, 0.0), friction_slopes(2300.0, 0.0)[0]

    assert value_there == pytest.approx(0.048660178813528691, rel=1e-14)
    assert slope_there == pytest.approx(-7.2965829968183e-6, rel=1e-13)


def test_turbulent_friction_keeps_its_authors_promise_of_one_percent_against_colebrook():
    # Colebrook's implicit equation at Re = 1e5, roughness 1e-4 and Re = 1e6, roughness 1e-3, solved with 50 digits.
    assert friction_factor(1e5, 1e-4) == pytest.approx(0.018513866077471643, rel=0.01)
    assert friction_factor(1e6, 1e-3) == pytest.approx(0.019943465840476866, rel=0.01)


def test_laminar_friction_is_64_over_the_reynolds_number_up_to_the_switch():
    # Hagen-Poiseuille; 64/2300 = 0.0278260869565...
    assert friction_factor(math.nextafter(REYNOLDS_SWITCH, 0.0), 0.01) == pytest.approx(0.027826086956521739, rel=1e-14)


@pytest.mark.parametrize("number", [300.0, 2400.0, 3e4, 1e6])
@pytest.mark.parametrize("roughness", [1e-5, 4e-4, 1e-2])
def test_friction_slopes_are_those_of_the_formula(number, roughness):
    def law(re, rough):
        return 64 / re if re < 2300 else 0.25 / mpmath.log10(rough / 3.7 + 5.74 / re ** mpmath.mpf(0.9)) ** 2

    by_reynolds, by_roughness = friction_slopes(number, roughness)

    with mpmath.workdps(40):
        assert by_reynolds == pytest.approx(float(mpmath.diff(law, (number, roughness), (1, 0))), rel=1e-12)
        assert by_roughness == pytest.approx(float(mpmath.diff(law, (number, roughness), (0, 1))), rel=1e-12)


def test_pressure_loss_and_reynolds_number_are_those_of_the_velocity_form():
    density, viscosity, velocity, diameter = 1000.0, 1e-3, 0.8, 0.05
    flow = density * velocity * math.pi * diameter**2 / 4

    assert pressure_loss(0.02, flow, diameter, 30.0, density) == pytest.approx(0.02 * 30 / 0.05 * 1000 * 0.8**2 / 2)
    assert reynolds(flow, diameter, viscosity) == pytest.approx(density * velocity * diameter / viscosity)


def test_a_thin_shell_conducts_like_a_flat_wall():
    inner, thickness = 1.0, 1e-5
    flat = 0.04 * math.pi * inner / thickness

    assert shell_conductance(inner, inner + 2 * thickness, 0.04) == pytest.approx(flat, rel=2e-5)


def test_shell_slopes_are_those_of_the_logarithm():
    with mpmath.workdps(40):
        expected = [
            float(mpmath.diff(lambda a, b: 2 * mpmath.pi * mpmath.mpf(0.035) / mpmath.log(b / a), (0.05, 0.11), order))
            for order in ((1, 0), (0, 1))
        ]

    assert shell_slopes(0.05, 0.11, 0.035) == pytest.approx(expected, rel=1e-12)


def test_heat_lost_along_a_pipe_is_what_the_fluid_gives_up():
    """For a short pipe the exponential drop equals conductance·length·excess over flow·heat capacity."""
    exponent = transfer_units(0.2, 0.1, 0.5, 4.0)
    lost = 0.2e-3 * 0.1 * 50.0  # kW at 50 K above ground

    assert 50.0 * -math.expm1(-exponent) == pytest.approx(lost / (0.5 * 4.0), rel=1e-5)


# --- the model and the claims -----------------------------------------------------------------------------------------


def test_the_model_agrees_with_the_same_formulas_in_many_digits(truth):
    described = functions(inner_tolerance=1e-15)
    for x, values, _ in truth:
        found = np.concatenate([value(described[name], x) for name in OUTPUTS])

        np.testing.assert_allclose(found, values, rtol=2e-13)


def test_mended_claims_are_right_in_every_entry(truth):
    assert wrong_entries(truth, 1e-11, mended=True, inner_tolerance=1e-15) == {}


def test_exactly_one_entry_is_wrong_and_it_is_wrong_everywhere(truth):
    assert wrong_entries(truth, 1e-11, inner_tolerance=1e-15) == {("objective", "insulation"): len(truth)}


def test_the_wrong_entry_is_far_off_at_the_start(truth):
    _, _, slopes = truth[0]
    column = NAMES.index("insulation")
    claimed = claim(problem.objective, START)[0, column]

    assert abs(claimed - slopes[0, column]) > 0.1 * abs(slopes[0, column])


def test_the_inner_tolerance_costs_the_mended_claims_less_than_the_accuracy_they_are_judged_by(truth):
    assert wrong_entries(truth, 1e-8, mended=True) == {}


@pytest.mark.parametrize("name", OUTPUTS)
def test_the_model_and_its_claims_are_finite_at_every_corner_of_the_bounds(name):
    function = functions()[name]
    for corner in itertools.product(*zip(LOWER, UPPER, strict=True)):
        assert np.isfinite(value(function, corner)).all()
        assert np.isfinite(claim(function, corner)).all()


def test_every_variable_matters_to_some_output_or_steps():
    described = functions(mended=True)
    slopes = np.vstack([claim(described[name], START) for name in OUTPUTS])

    assert [NAMES[i] for i in np.flatnonzero(~slopes.any(axis=0))] == ["pumps"]
    assert value(described["pressure"], along("pumps", 3)) != value(described["pressure"], START)


def test_the_start_meets_every_limit():
    described = functions()

    assert value(described["pressure"], START) > described["pressure"].lower
    assert value(described["temperature"], START) > described["temperature"].lower
    assert (value(described["velocity"], START) < described["velocity"].upper).all()


def test_the_model_leaves_its_input_alone_and_repeats_itself():
    for function in functions().values():
        x = START.copy()
        first = value(function, x)

        assert np.array_equal(x, START)
        assert np.array_equal(first, value(function, x))


def test_functions_and_claims_travel_between_processes():
    described = functions()
    for function in described.values():
        model, derivative = pickle.loads(pickle.dumps((function.function, function.gradient or function.jacobian)))

        assert np.array_equal(np.atleast_1d(model(START)), value(function, START))
        assert np.array_equal(np.atleast_2d(derivative(START)), claim(function, START))


@pytest.mark.parametrize("name", ["objective", "pressure", "temperature"])
def test_complex_numbers_are_refused_loudly_rather_than_cut(name):
    with pytest.raises(TypeError):
        functions()[name].function(START + 1e-20j)


# --- what is planted, and where ---------------------------------------------------------------------------------------


def test_the_list_names_everything_that_is_planted():
    listed = {(item.kind.value, item.function, item.variable) for item in PLANTED if item.certain}

    assert listed == {
        ("claim-refuted", "objective", "insulation"),
        ("kink", "objective", "pump_speed"),
        ("kink", "objective", "supply_temperature"),
        ("kink", "pressure", "pump_speed"),
        ("kink", "pressure", "supply_temperature"),
        ("jump", "pressure", "diameter_4"),
        ("noise", "temperature", ""),
        ("integer-variable", "", "pumps"),
    }


def test_a_mended_problem_lists_no_mistake():
    assert planted("claim-refuted", mended=True) == []


def test_an_inner_tolerance_at_rounding_lists_no_noise():
    assert planted("noise", inner_tolerance=1e-15) == []


def parting(function, name, centre):
    """Right minus left slope over the mean slope, at steps of 1e-6 of the variable; about 1e-6 where it is smooth."""
    step = 1e-6 * centre
    left, middle, right = (value(function, along(name, centre + side))[0] for side in (-step, 0.0, step))
    return abs((right - middle) - (middle - left)) / abs(right - left)


@TABLES
def test_slopes_part_at_the_planted_kinks_and_not_beside_them(table):
    described = functions(pump_table=table)
    kinks = planted("kink", pump_table=table)
    assert kinks
    for item in kinks:
        for place in item.places:
            assert parting(described[item.function], item.variable, place) > 0.01
            assert parting(described[item.function], item.variable, place * 1.0001) < 1e-4
            assert parting(described[item.function], item.variable, place * 0.9999) < 1e-4


def test_the_pressure_jumps_at_the_planted_place_and_is_continuous_beside_it():
    (item,) = planted("jump")
    (place,) = item.places
    pressure = functions()["pressure"]

    def rise(centre):
        ends = (value(pressure, along(item.variable, centre * (1 + side)))[0] for side in (-1e-12, 1e-12))
        return -float(np.subtract(*ends))

    assert rise(place) > 1.0  # kPa: the laminar law asks for less
    assert abs(rise(place * 1.0001)) < 1e-6
    assert abs(rise(place * 0.9999)) < 1e-6


@TABLES
@pytest.mark.parametrize("output", ["objective", "pressure", "velocity"])
@pytest.mark.parametrize("name", NAMES[:7])
def test_a_walk_across_the_bounds_breaks_only_at_planted_places(output, name, table):
    """Fourth differences of 1500 values: a smooth piece leaves nothing in them, a kink or jump does."""
    described = functions(pump_table=table)[output]
    places = [
        place
        for kind in ("kink", "jump")
        for item in planted(kind, pump_table=table)
        if (item.function, item.variable) == (output, name)
        for place in item.places
    ]
    i = NAMES.index(name)
    ends = np.linspace(LOWER[i], UPPER[i], 1500)
    values = np.array([value(described, along(name, end)) for end in ends])
    rough = (np.abs(np.diff(values, 4, axis=0)) > 1e-8 * np.abs(values).max()).any(axis=1)
    windows = [(ends[j], ends[j + 4]) for j in np.flatnonzero(rough)]

    assert all(any(low < place < high for place in places) for low, high in windows)
    assert all(any(low < place < high for low, high in windows) for place in places)


def test_the_start_lies_well_away_from_every_planted_place():
    for item in PLANTED:
        for place in item.places:
            assert abs(place / START[NAMES.index(item.variable)] - 1) > 0.05


def test_the_number_of_pumps_acts_in_steps_half_way_between_whole_numbers():
    described = functions()
    staircases = planted("staircase")
    assert {item.function for item in staircases} == {"objective", "pressure"}
    for item in staircases:
        function = described[item.function]
        assert value(function, along("pumps", 1.6)) == value(function, along("pumps", 2.4))
        for place in item.places:
            before, after = (value(function, along("pumps", place + side))[0] for side in (-1e-9, 1e-9))
            assert abs(after - before) > 0.5


# --- the inner iteration ----------------------------------------------------------------------------------------------


def temperature_noise(name, spacing, **options):
    """RMS, relative, of what the inner tolerance adds to the temperature at 60 points around the start."""
    noisy, exact = functions(**options)["temperature"], functions(inner_tolerance=1e-15)["temperature"]
    places = START[NAMES.index(name)] * (1 + spacing * np.arange(-30, 30))
    off = [value(noisy, along(name, place))[0] / value(exact, along(name, place))[0] - 1 for place in places]
    return float(np.sqrt(np.mean(np.square(off))))


@pytest.mark.parametrize("name", [*NAMES[:5], "supply_temperature"])
@pytest.mark.parametrize("spacing", [1e-4, 1e-7, 6e-9])
def test_the_temperature_is_as_noisy_at_tiny_steps_as_at_wide_ones(name, spacing):
    noise = temperature_noise(name, spacing)

    assert 5e-11 < noise < 3e-10


def test_neighbouring_errors_of_the_temperature_look_unrelated():
    """Difference tables (Hamming; Moré & Wild 2011) give one level for orders 4, 5 and 6 where errors are unrelated."""
    temperature = functions()["temperature"]
    places = START[4] * (1 + 1e-7 * np.arange(200))
    values = np.array([value(temperature, along("insulation", place))[0] for place in places])
    levels = [
        math.sqrt(math.factorial(k) ** 2 / math.factorial(2 * k) * np.mean(np.diff(values, k) ** 2)) for k in (4, 5, 6)
    ]

    assert max(levels) < 1.5 * min(levels)
    assert 100 * np.spacing(values[0]) < min(levels) < 1e-5 * values[0]


@pytest.mark.parametrize("tolerance", [1e-12, 1e-10, 1e-8])
def test_the_noise_follows_the_inner_tolerance(tolerance):
    assert temperature_noise("insulation", 1e-4, inner_tolerance=tolerance) == pytest.approx(1.3 * tolerance, rel=0.5)


@pytest.mark.parametrize("name", ["objective", "pressure", "velocity"])
def test_the_other_outputs_do_not_feel_the_inner_tolerance(name):
    coarse, fine = functions(inner_tolerance=1e-2)[name], functions(inner_tolerance=1e-15)[name]

    assert np.array_equal(value(coarse, START), value(fine, START))


# --- options and words ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ([(0.0, 90.0)], "at least two"),
        ([(0.0, 90.0), (0.0, 80.0)], "sort the pairs"),
        ([(0.0, math.nan), (1.0, 80.0)], "nan.*finite"),
        ("flat", "pairs of numbers"),
    ],
)
def test_a_pump_table_that_is_none_is_refused_with_the_reason(table, words):
    with pytest.raises(UsageError, match=words):
        branch_problem(pump_table=table)


@pytest.mark.parametrize("tolerance", [0.0, -1e-6, 0.5, math.nan])
def test_an_inner_tolerance_out_of_range_is_refused_with_its_value(tolerance):
    with pytest.raises(UsageError, match=str(tolerance)):
        branch_problem(inner_tolerance=tolerance)


def test_the_slope_of_the_pump_curve_is_its_pieces_and_at_a_knot_that_of_the_right_one():
    curve = pump_curve([(0.0, 80.0), (1.0, 70.0), (2.0, 40.0)])

    assert [curve.slope(flow) for flow in (-1.0, 0.5, 1.0, 1.5, 2.5)] == [0.0, -10.0, -30.0, -30.0, 0.0]


def test_a_knot_on_a_straight_line_is_no_kink():
    assert pump_curve([(0.0, 80.0), (1.0, 70.0), (2.0, 60.0), (3.0, 60.0)]).kinks() == (0.0, 2.0)


def test_the_caution_says_what_the_demonstration_is_not_for():
    assert "no design tool" in CAUTION
    assert "A verified derivative is not a verified model" in CAUTION
    assert "local codes and licensed practice decide" in CAUTION
