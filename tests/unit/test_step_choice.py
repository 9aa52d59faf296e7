"""Steps for a user's own solver: chosen by formula, tried on the model, exported."""

import math
import warnings

import numpy as np
import pytest
from scipy import optimize

import gradcheck
from benchmarks.solver_steps import uniform
from gradcheck.counsel.solver_steps import steps_to_paste
from gradcheck.evaluation.conduct import conduct_one
from gradcheck.health import step_formulas as formulas
from gradcheck.health.step_choice import step_choice
from gradcheck.problem.domain import domain_of
from gradcheck.records.report import Steps
from gradcheck.witnesses.finite_difference import finite_difference
from gradcheck.witnesses.steps import room_along
from tests.gates import gate_of

U = 2.0**-53


def choose(function, at, bounds=None, typical=None):
    """The steps along all variables of `function`, which takes x (n,)."""
    base = np.atleast_1d(np.asarray(at, dtype=float))
    gate = gate_of(function)
    columns = np.arange(base.size)
    room = room_along(base, columns, domain_of(base, bounds=bounds, typical=typical))
    centre = np.atleast_1d(np.asarray(function(base), dtype=float))
    orders = [conduct_one(finite_difference(base, columns, room, centre, derivative=k), gate) for k in (1, 2, 3)]
    return conduct_one(step_choice(base, columns, room, centre, *orders), gate)


def noise(x):
    """A number of standard deviation 1 that depends on all bits of `x`."""
    return float(uniform(np.array([x], dtype=float))[0])


def forward_errors(function, x, step, slope):
    """True errors of forward differences at steps around `step`."""
    near = step * np.linspace(0.9, 1.1, 9)
    return np.array([abs((function(x + h) - function(x)) / ((x + h) - x) - slope) for h in near])


def central_errors(function, x, step, slope):
    near = step * np.linspace(0.9, 1.1, 9)
    return np.array([abs((function(x + h) - function(x - h)) / ((x + h) - (x - h)) - slope) for h in near])


# --- smooth functions -----------------------------------------------------------------------------------------------


def test_where_the_formulas_hold_the_steps_are_theirs():
    found = choose(lambda x: math.exp(x[0]), 1.0)

    heard = np.array(found.noise)
    assert found.forward[0] == pytest.approx(float(formulas.forward_step(heard, np.array(math.e))), rel=0.01)
    assert found.central[0] == pytest.approx(float(formulas.central_step(heard, np.array(math.e))), rel=0.01)


@pytest.mark.parametrize(
    ("function", "x", "slope"),
    [
        (math.sin, 1.0, math.cos(1.0)),
        (lambda x: math.sin(300 * x), 0.1, 300 * math.cos(30)),
        (lambda x: math.sqrt(x - 2), 2.001, 0.5 / math.sqrt(0.001)),
        (lambda x: 1e6 + math.exp(x), 1.0, math.e),
        (lambda x: x**3, 1e-3, 3e-6),
        (lambda x: float(np.float32(math.sin(x))), 1.0, math.cos(1.0)),
        (lambda x: round(math.sin(x), 6), 1.0, math.cos(1.0)),
    ],
)
def test_the_errors_told_hold_within_a_factor_of_three(function, x, slope):
    found = choose(lambda v: function(float(v[0])), x)

    assert forward_errors(function, x, found.forward[0], slope).max() <= 3 * found.forward_error[0]
    assert central_errors(function, x, found.central[0], slope).max() <= 3 * found.central_error[0]


def test_at_an_inflection_the_third_derivative_limits_the_forward_step():
    """sin at 0: the formula with f'' = 0 gives no step, that with f''' = -1 does."""
    found = choose(lambda x: math.sin(x[0]), 0.0, typical=1.0)

    assert 0 < found.forward[0] <= 1e-3
    assert forward_errors(math.sin, 0.0, found.forward[0], 1.0).max() <= 3 * found.forward_error[0]


def test_where_the_third_derivative_vanishes_the_fifth_is_met_by_trial():
    """sin at pi/2 has f''' = 0 in exact arithmetic; the step must still not leave the region of one wave."""
    found = choose(lambda x: math.sin(40 * x[0]), math.pi / 80)

    assert central_errors(lambda x: math.sin(40 * x), math.pi / 80, found.central[0], 0.0).max() <= 3 * max(
        found.central_error[0], 1e-15
    )


def test_a_step_that_leaves_the_domain_is_shortened():
    def edge(x):
        return math.log(1 - x) if x < 1 else math.nan

    found = choose(lambda x: edge(float(x[0])) + 1e-4 * noise(x[0]), 0.995)

    assert found.forward[0] < 0.005
    assert np.isfinite([found.forward_error[0], found.central_error[0]]).all()


def test_where_the_witness_is_blurred_the_step_is_of_the_variables_own_scale():
    """(e^x - 1)/x close to 0: its digits cancel, and the witness sees slopes of many scales."""
    x = 2.9167429449001744e-06
    found = choose(lambda v: (np.exp(v[0]) - 1) / v[0], x)

    errors = forward_errors(lambda x: (np.exp(x) - 1) / x, x, found.forward[0], 0.5)
    assert found.forward[0] > 1e-9 * x
    assert errors.max() <= found.forward_error[0]


# --- what cannot be chosen ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("function", "x"),
    [(lambda x: x + (x > 1), 1.0), (lambda x: math.floor(100 * x) / 100, 0.5551)],
    ids=["jump", "stairs"],
)
def test_where_differences_have_no_limit_there_is_no_step(function, x):
    found = choose(lambda v: function(float(v[0])), x)

    assert np.isnan([found.forward[0], found.forward_error[0], found.central[0], found.central_error[0]]).all()


def test_at_a_kink_the_error_told_is_at_least_half_the_change_of_the_slope():
    found = choose(lambda x: abs(x[0] - 1) + x[1] ** 2, [1.0, 2.0])

    assert found.forward_error[0] >= 0.99
    assert found.forward_error[1] < 1e-6


def test_a_constant_gets_a_step_and_an_error_of_rounding():
    found = choose(lambda x: 7.0, 2.0)

    assert 0 < found.forward[0] <= 0.2
    assert 0 < found.forward_error[0] < 1e-13


def test_a_model_that_is_zero_everywhere_gets_a_step():
    assert np.isfinite(choose(lambda x: 0.0, 2.0).forward[0])


# --- bounds ---------------------------------------------------------------------------------------------------------


def test_at_an_upper_bound_the_forward_step_goes_down_and_three_values_replace_the_central_difference():
    found = choose(lambda x: math.exp(x[0]), 1.0, bounds=[(0.0, 1.0)])

    assert (found.forward_side[0], found.central_side[0]) == (-1, -1)
    h = found.central[0]
    slope = (3 * math.e - 4 * math.exp(1 - h) + math.exp(1 - 2 * h)) / (2 * h)
    assert abs(slope - math.e) <= 3 * found.central_error[0]


@pytest.mark.parametrize("bounds", [(0.0, 1.0), (1.0, 2.0), (1 - 1e-9, 1 + 1e-9), (1 - 1e-7, 3.0)])
def test_trials_never_leave_the_bounds(bounds):
    seen = []

    def watched(x):
        seen.append(float(x[0]))
        return math.exp(x[0])

    found = choose(watched, 1.0, bounds=[bounds])

    assert bounds[0] <= min(seen)
    assert max(seen) <= bounds[1]
    assert np.isfinite([found.forward_error[0], found.central_error[0]]).all()


def test_a_variable_without_room_has_no_step():
    found = choose(lambda x: x[0] * x[1], [1.0, 2.0], bounds=[(1.0, 1.0), (0.0, 5.0)])

    assert np.isnan(found.forward[0])
    assert found.forward[1] > 0


# --- several outputs ------------------------------------------------------------------------------------------------


def test_the_step_of_several_outputs_serves_the_worst_of_them():
    found = choose(lambda x: np.array([1e6 * math.exp(x[0]), x[0], 0.0]), 3.0)
    alone = choose(lambda x: 1e6 * math.exp(x[0]), 3.0)

    assert found.forward_error[0] <= 2 * alone.forward_error[0]


def test_a_noisy_output_is_not_served_by_the_step_of_an_exact_one():
    def model(x):
        return np.array([math.exp(x[0]), math.sin(x[0]) + 1e-4 * noise(x[0])])

    found = choose(model, 1.0)
    assert 1e-3 < found.central[0] < 0.1
    assert found.central_error[0] < 0.1


# --- cost -----------------------------------------------------------------------------------------------------------


def test_a_trial_of_smooth_functions_costs_six_values_a_variable():
    base, columns = np.array([1.0, 2.0, 3.0]), np.arange(3)
    gate = gate_of(lambda x: float(np.exp(x / 3).sum()))
    room = room_along(base, columns, domain_of(base))
    centre = np.array([float(np.exp(base / 3).sum())])
    orders = [conduct_one(finite_difference(base, columns, room, centre, derivative=k), gate) for k in (1, 2, 3)]
    before = gate.evaluations
    conduct_one(step_choice(base, columns, room, centre, *orders), gate)

    assert gate.evaluations - before == 6 * 3


# --- export ---------------------------------------------------------------------------------------------------------


def steps(**fields):
    defaults = {
        "function": "cost",
        "names": ("span", "chord"),
        "forward": np.array([1.23e-8, 2.0e-8]),
        "forward_error": np.array([1e-8, 1e-8]),
        "central": np.array([3.0e-6, 4.0e-6]),
        "central_error": np.array([1e-11, 1e-11]),
        "noise": 1e-16,
    }
    return Steps(**(defaults | fields))


def pasted(all_steps, names=("span", "chord"), start=(2.0, -4.0)):
    members = {}
    exec("\n".join(steps_to_paste(all_steps, names, np.array(start))), members)
    return members


@pytest.mark.parametrize(
    ("scheme", "table", "relative"),
    [("2-point", "forward", "forward_relative"), ("3-point", "central", "central_relative")],
)
@pytest.mark.parametrize("start", [(2.0, -4.0), (-1e-3, 1e5)])
def test_scipy_takes_exactly_the_steps_that_are_exported(scheme, table, relative, start):
    found = steps()
    members = pasted([found], start=start)
    seen = []

    def model(x):
        seen.append(np.array(x) - start)
        return float(x @ x)

    options = {"finite_diff_rel_step": members[relative], "maxiter": 1}
    optimize.minimize(model, start, method="L-BFGS-B", jac=scheme, options=options)

    taken = [
        max((abs(s[i]) for s in seen[1 : 3 if scheme == "2-point" else 5] if not s[1 - i]), default=0.0)
        for i in range(2)
    ]
    assert taken == pytest.approx(getattr(found, table), rel=1e-4, abs=4 * U * max(np.abs(start)))


def test_scipy_takes_exactly_the_absolute_steps():
    found = steps()
    seen = []

    def model(x):
        seen.append(np.array(x))
        return float(x @ x)

    options = {"eps": list(pasted([found])["forward_steps"].values()), "maxiter": 1}
    optimize.minimize(model, [2.0, -4.0], method="BFGS", options=options)

    assert seen[1][0] - 2.0 == pytest.approx(1.23e-8, rel=1e-5)
    assert seen[2][1] + 4.0 == pytest.approx(2.0e-8, rel=1e-5)


def test_a_backward_step_is_exported_with_its_sign():
    members = pasted([steps(forward_side=[-1.0, 1.0])])

    assert members["forward_steps"]["span"] < 0
    assert np.array(members["forward_relative"]) * [2.0, -4.0] == pytest.approx([-1.23e-8, 2e-8], rel=1e-4)


def test_at_a_start_at_zero_only_steps_that_work_there_are_exported():
    lines = steps_to_paste([steps()], ("span", "chord"), np.array([0.0, 1.0]))
    told = "\n".join(lines)

    assert "x is 0 for 'span':" in told
    assert "finite_diff_rel_step" not in told
    assert 'options={"eps": list(forward_steps.values())}' in told


def test_the_central_gradient_to_paste_at_a_start_at_zero_takes_the_central_steps():
    lines = steps_to_paste([steps()], ("span", "chord"), np.array([0.0, 1.0]))
    comment = " ".join(line.lstrip("# ") for line in lines if line.startswith("#"))
    seen = []

    def model(x):
        seen.append(np.array(x))
        return float(x @ x)

    jac = eval(comment.partition("jac=")[2], {"f": model, "numpy": np} | pasted([steps()], start=(0.0, 1.0)))

    assert jac(np.array([0.0, 1.0])) == pytest.approx([0.0, 2.0], abs=1e-9)
    assert [s.tolist() for s in seen] == [[3e-6, 1.0], [-3e-6, 1.0], [0.0, 1.0 + 4e-6], [0.0, 1.0 - 4e-6]]


def test_no_central_gradient_is_offered_that_would_leave_the_bounds():
    told = "\n".join(steps_to_paste([steps(central_side=[1.0, 0.0])], ("span", "chord"), np.array([0.0, 1.0])))

    assert "jac=lambda" not in told


@pytest.mark.parametrize(
    ("found", "names"),
    [
        (steps(forward=[np.nan, 1e-8]), ("span", "chord")),
        (steps(), ("span", "chord", "plies")),
        (steps(names=("chord", "span")), ("span", "chord")),
    ],
    ids=["no step", "a whole-number variable", "another order"],
)
def test_arrays_by_position_are_left_out_where_they_would_not_fit_all_variables(found, names):
    members = pasted([found], names, np.ones(len(names)))

    assert "forward_relative" not in members
    assert set(members["forward_steps"]) <= {"span", "chord"}


def test_steps_of_constraints_are_exported_too():
    members = pasted([steps(), steps(function="stress")])

    assert members["other_steps"] == {"stress": {"span": (1.23e-8, 3e-6), "chord": (2e-8, 4e-6)}}


@pytest.mark.parametrize(("method", "share"), [("SLSQP", 0.1), ("trust-constr", 0.01)])
@pytest.mark.filterwarnings("ignore")
def test_what_the_export_says_of_constraints_holds_for_scipy(method, share):
    told = "\n".join(steps_to_paste([steps(), steps(function="stress")], ("span", "chord"), np.array([2.0, -4.0])))
    start = np.array([2.0, 4.0])
    seen = []

    def constraint(x):
        seen.append(float(x[0] - start[0]))
        return x[0] * x[1]

    optimize.minimize(
        lambda x: float(x @ x),
        start,
        method=method,
        jac="2-point",
        options={"finite_diff_rel_step": [0.1, 0.1], "maxiter": 1},
        constraints=optimize.NonlinearConstraint(constraint, 0, 100, jac="2-point", finite_diff_rel_step=[0.01, 0.01]),
    )

    assert '"SLSQP" takes the steps of the objective for constraints too' in told.replace("method=", "")
    assert share * 2.0 in [pytest.approx(step) for step in seen]


def test_an_audit_exports_steps_as_data_and_as_python():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        report = gradcheck.audit(lambda x: math.exp(x[0]) * x[1], at=[1.0, 2.0], bounds=[(0, 1), (0, 5)])
    members = {}
    exec(report.advice.snippet, members)
    told = report.to_dict()["steps"][0]

    assert told["forward_side"] == [-1.0, 1.0]
    assert told["central_side"] == [-1.0, 0.0]
    assert list(members["forward_steps"].values()) == pytest.approx(
        np.array(told["forward"]) * told["forward_side"], rel=0.01
    )
    assert members["norm_of_scaled_gradient"] < members["norm_of_scaled_gradient_by_forward_differences"]
    assert set(report.advice.tolerances) <= set(members)
