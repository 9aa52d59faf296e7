"""The measurements measure what they say; their figures are not asserted here."""

import importlib
import math
from types import SimpleNamespace
from typing import Any

import mpmath
import numpy as np
import pytest
from click.testing import CliRunner
from scipy import optimize

import gradcheck
from benchmarks import cost, estimator, scan, second_derivatives, solver_steps
from benchmarks.__main__ import BENCHMARKS, main
from benchmarks.corpus import CASES, Case, exactly
from benchmarks.figures import Figure, side_by_side
from benchmarks.hessian_corpus import HESSIAN_CASES, exact_hessian
from benchmarks.reference import derivative, slope

FEW = CASES[:6]


def case(formula: Any, *points: float) -> Case:
    return Case(name=f"probe at {points}", group="probe", formula=formula, sample=exactly(*points), kept_aside=False)


def central(function: Any, at: float) -> Any:
    """A plain central difference with a bound that is far too small."""
    step = 1e-5
    value = (function(at + step) - function(at - step)) / ((at + step) - (at - step))
    return SimpleNamespace(value=value, bound=1e-30, evaluations=7)


def figure(samples: Any, name: str) -> float:
    return next(figure.value for figure in estimator.figures(samples) if figure.name == name)


def test_every_third_function_is_kept_aside_and_names_differ() -> None:
    assert [case.kept_aside for case in CASES[:6]] == [False, False, True, False, False, True]
    assert sum(case.kept_aside for case in CASES) == len(CASES) // 3
    assert len({case.name for case in CASES}) == len(CASES) >= 45


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_a_function_in_doubles_and_in_digits_is_the_same_up_to_rounding(case: Case) -> None:
    for x in case.points(3):
        with mpmath.workdps(60):
            exact = case.exact(mpmath.mp, mpmath.mpf(x))
            # terms that cancel, as in (1 - cos x) / x², leave few digits: a wrong formula would leave none
            allowed = 1e-7 * (abs(exact) + abs(x * slope(case, x))) + 1e-12 * (abs(exact) < 1e-3)

            assert abs(case.f(x) - exact) <= allowed


def test_points_depend_on_the_seed_and_on_nothing_else() -> None:
    first = CASES[0]

    assert first.points(4, seed=1) == first.points(4, seed=1)
    assert first.points(4, seed=1) != first.points(4, seed=2)


def test_the_reference_raises_its_digits_until_a_tiny_slope_shows() -> None:
    softplus = case(lambda m, x: m.log(1 + m.exp(x)), -300.0)

    with mpmath.workdps(50):
        assert abs(slope(softplus, -300.0) * (1 + mpmath.exp(300)) - 1) < 1e-24


@pytest.mark.parametrize(
    ("name", "closed_form"),
    [
        ("sin 1e5x", lambda x: 1e5 * mpmath.cos(1e5 * x)),
        ("expanded (x-1)^7", lambda x: 7 * (x - 1) ** 6),
        ("saturation", lambda x: mpmath.exp(-x)),
        ("rounded kink", lambda x: x / mpmath.sqrt(x * x + 1e-8)),
        ("gamma", lambda x: mpmath.gamma(x) * mpmath.digamma(x)),
        ("Bessel J0", lambda x: -mpmath.besselj(1, x)),
    ],
)
def test_the_reference_equals_closed_forms(name: str, closed_form: Any) -> None:
    known = next(case for case in CASES if case.name == name)

    for x in known.points(5):
        with mpmath.workdps(60):
            assert abs(slope(known, x) - closed_form(mpmath.mpf(x))) <= 1e-24 * abs(slope(known, x))


def test_an_exact_zero_is_a_reference_of_zero() -> None:
    assert slope(case(lambda m, x: m.cos(x), 0.0), 0.0) == 0
    assert derivative(case(lambda m, x: m.sin(x) + x, 0.0), 0.0, 2) == 0


@pytest.mark.parametrize(
    ("name", "closed_form"),
    [
        ("sin 1e5x", lambda x: -1e10 * mpmath.sin(1e5 * x)),
        ("expanded (x-1)^7", lambda x: 42 * (x - 1) ** 5),
        ("saturation", lambda x: -mpmath.exp(-x)),
        ("rounded kink", lambda x: mpmath.mpf(1e-8) / mpmath.sqrt(x * x + 1e-8) ** 3),
        ("gamma", lambda x: mpmath.gamma(x) * (mpmath.digamma(x) ** 2 + mpmath.polygamma(1, x))),
        ("line", lambda x: mpmath.mpf(0)),
    ],
)
def test_the_second_reference_equals_closed_forms(name: str, closed_form: Any) -> None:
    known = next(case for case in CASES if case.name == name)

    for x in known.points(5):
        with mpmath.workdps(60):
            found = derivative(known, x, 2)
            assert abs(found - closed_form(mpmath.mpf(x))) <= 1e-24 * abs(found)


@pytest.mark.parametrize(
    ("name", "closed_form"),
    [
        ("saddle", lambda x: [[0, 1], [1, 0]]),
        ("Rosenbrock, 5", optimize.rosen_hess),
        ("strong diagonal", lambda x: [[2e6, 1], [1, 2e6]]),
        ("product of eight", lambda x: np.prod(x) / np.outer(x, x) * (1 - np.eye(8))),
        ("bell in six dimensions", lambda x: (4 * np.outer(x, x) - 2 * np.eye(6)) * np.exp(-x @ x)),
        ("norm", lambda x: (np.eye(4) - np.outer(x, x) / (x @ x)) / np.sqrt(x @ x)),
        ("all zero", lambda x: [[1, -1, 0], [-1, 1, 1], [0, 1, 0]]),
    ],
)
def test_exact_hessians_equal_closed_forms(name: str, closed_form: Any) -> None:
    known = next(case for case in HESSIAN_CASES if case.name == name)

    for x in known.points(3):
        exact = exact_hessian(known, x)
        right = np.asarray(closed_form(x), dtype=float)
        found = np.array([[float(exact[min(i, j), max(i, j)]) for j in range(x.size)] for i in range(x.size)])
        np.testing.assert_allclose(found, right, rtol=1e-12, atol=1e-14 * np.abs(right).max())


def test_the_hessians_were_chosen_by_a_rule_and_their_names_differ() -> None:
    assert len({case.name for case in HESSIAN_CASES}) == len(HESSIAN_CASES) >= 25
    assert sum(case.kept_aside for case in HESSIAN_CASES) == len(HESSIAN_CASES) // 3
    assert {case.size for case in HESSIAN_CASES} >= {2, 3, 10}


def test_an_entry_of_a_hessian_outside_its_bound_is_listed() -> None:
    def close(function: Any, at: Any) -> Any:
        function(at)
        return SimpleNamespace(value=np.ones((2, 2)), bound=np.full((2, 2), 0.5), evaluations=1)

    saddle = next(case for case in HESSIAN_CASES if case.name == "saddle")
    told = second_derivatives.hessian_report(second_derivatives.measure_hessians(close, [saddle], points=1))

    assert "33.33 !" in told
    assert "0, 0" in told


def test_evaluations_are_counted_in_the_function() -> None:
    samples = estimator.measure(central, FEW, points=2)

    assert figure(samples, "median evaluations") == 2
    assert figure(samples, "miscounted evaluations") == len(samples)


def test_a_bound_that_does_not_hold_is_listed_with_its_point() -> None:
    samples = estimator.measure(central, FEW[:1], points=1)

    assert figure(samples, "bounds held, %") == 0
    assert repr(samples[0].x) in estimator.misses(samples)


def test_an_exception_of_the_estimator_counts_against_the_bounds_and_is_shown() -> None:
    def broken(function: Any, at: float) -> Any:
        raise RuntimeError("no idea")

    samples = estimator.measure(broken, FEW, points=1)

    assert figure(samples, "exceptions") == len(samples)
    assert figure(samples, "bounds held, %") == 0
    assert "RuntimeError: no idea" in estimator.misses(samples)


def test_an_exact_answer_has_no_error_and_holds_any_bound() -> None:
    doubled = case(lambda m, x: 2 * x, 1.0)

    (sample,) = estimator.measure(
        lambda function, at: SimpleNamespace(value=2.0, bound=0.0, evaluations=0), [doubled], points=1
    )

    assert sample.held
    assert (sample.relative, sample.miss) == (0.0, 0.0)
    assert math.isnan(sample.tightness)


@pytest.mark.parametrize(
    ("value", "bound", "held"), [(math.nan, math.inf, True), (math.nan, 1.0, False), (2.0, math.nan, False)]
)
def test_only_an_infinite_bound_excuses_a_nan(value: float, bound: float, held: bool) -> None:
    doubled = case(lambda m, x: 2 * x, 1.0)

    (sample,) = estimator.measure(
        lambda function, at: SimpleNamespace(value=value, bound=bound, evaluations=0), [doubled], points=1
    )

    assert sample.held is held


def test_at_a_zero_derivative_the_error_is_relative_to_the_function() -> None:
    offset = case(lambda m, x: 1000 + x * x * 0, 0.0)

    def close(function: Any, at: float) -> Any:
        function(at)
        return SimpleNamespace(value=1e-9, bound=1e-8, evaluations=1)

    (sample,) = estimator.measure(close, [offset], points=1)

    assert sample.relative == pytest.approx(1e-12)


def test_a_figure_that_misses_its_goal_is_marked() -> None:
    table = side_by_side({"all": [Figure(name="size", value=4.0, goal=3.0)], "part": [Figure(name="size", value=2.0)]})

    assert table.splitlines()[-1].split() == ["size", "≤", "3", "4", "!", "2"]


def test_what_was_not_measured_never_meets_a_goal() -> None:
    assert not Figure(name="size", value=math.nan, goal=3.0).met
    assert not Figure(name="size", value=math.nan, goal=3.0, at_least=True).met


@pytest.mark.parametrize("name", BENCHMARKS)
def test_every_benchmark_states_its_question(name: str) -> None:
    assert importlib.import_module(f"benchmarks.{name}").QUESTION.endswith("?")


def test_the_command_prints_the_figures_beside_their_goals(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(estimator, "CASES", FEW)
    monkeypatch.setitem(vars(gradcheck), "estimate", central)

    result = CliRunner().invoke(main, ["--only", "estimator", "--points", "2"])

    assert result.exit_code == 0
    assert "median relative error" in result.output
    assert "≥ 99.80" in result.output


def test_a_step_that_is_only_luckily_right_is_not_counted_as_good() -> None:
    """Fresh differences around the step judge it, not the scan's own quotients."""

    def lucky(function: Any, at: float) -> Any:
        steps = 10.0 ** np.arange(-12, 0)
        return SimpleNamespace(steps=steps, best_step=1e-12, order=2.0, best_error=0.0, floor=0.0, bound=1e-30)

    (sample,) = scan.measure(lucky, [case(lambda m, x: m.exp(x), 1.375)], points=1)

    assert sample.ratio > 1e4
    assert sample.told > 1e4


def test_a_scan_is_measured_against_the_best_of_its_own_steps() -> None:
    (sample,) = scan.measure(gradcheck.scan, [case(lambda m, x: m.exp(x), 1.375)], points=1)

    assert 1 <= sample.ratio < 3
    assert sample.order == pytest.approx(2, abs=0.1)


def test_noise_is_independent_and_repeatable_with_a_standard_deviation_of_one() -> None:
    drawn = solver_steps.uniform(np.linspace(1.0, 2.0, 20_000))

    assert np.std(drawn) == pytest.approx(1, abs=0.02)
    assert abs(np.mean(drawn)) < 0.02
    assert abs(np.corrcoef(drawn[1:], drawn[:-1])[0, 1]) < 0.03
    assert np.array_equal(drawn, solver_steps.uniform(np.linspace(1.0, 2.0, 20_000)))


def test_an_error_told_too_small_and_a_step_too_short_are_seen() -> None:
    advice = SimpleNamespace(
        **{name: np.array([1e-12]) for name in ("forward", "forward_error", "central", "central_error")}
    )

    samples = solver_steps.measure(lambda function, x: advice, [case(lambda m, x: m.exp(x), 1.375)], points=1)

    assert all(sample.over.max() > 3 for sample in samples)
    assert all(sample.ratio > 10 for sample in samples if not sample.noise)


def test_steps_without_advice_are_counted() -> None:
    samples = solver_steps.measure(lambda function, x: None, FEW[:1], points=1)

    assert next(f.value for f in solver_steps.figures(samples) if f.name == "without advice, %") == 100


def test_the_cost_of_our_own_stands_beside_that_of_ten_lines(monkeypatch: pytest.MonkeyPatch) -> None:
    scenes = (cost.Scene(model="1 µs", n=3, verb="check"), cost.Scene(model="vectorised", n=3, verb="estimate"))
    monkeypatch.setattr(cost, "SCENES", scenes)

    table = cost.run(1, 0)

    assert [line.split("  ")[0] for line in table.splitlines()[2:]] == [
        "check, n = 3, 1 µs",
        "estimate, n = 3, vectorised",
    ]


def test_a_watched_model_counts_points_and_not_calls() -> None:
    model = cost.Watched(cost.chain)
    model(np.ones((5, 3)))
    model(np.ones(3))

    assert model.evaluations == 6


@pytest.mark.parametrize("lines", [cost.by_hand, cost.by_hand_at_once])
def test_the_ten_lines_tell_right_from_wrong(lines: Any) -> None:
    x = np.array([0.3, 1.2, 0.7])

    assert lines(cost.Watched(cost.chain), x, cost.chain_gradient)
    assert not lines(cost.Watched(cost.chain), x, cost.double)
