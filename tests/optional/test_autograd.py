"""Derivatives through autograd, and the witness that speaks from them."""

import dataclasses
import sys
import warnings

import numpy as np
import pytest

pytest.importorskip("autograd")

import autograd.numpy as anp
from autograd.extend import defjvp, defvjp, primitive

import gradcheck
from gradcheck.evaluation.arithmetic import with_autograd
from gradcheck.problem.layout import args, layout_of
from tests.hearing import automatic_on, session_of


def hear(function, at, directions=None, **options):
    return automatic_on(session_of(function, at, **options), "autograd", directions)


@primitive
def square_with_a_wrong_reverse_rule(x):
    return x**2


defvjp(square_with_a_wrong_reverse_rule, lambda answer, x: lambda cotangent: 3 * x * cotangent)
defjvp(square_with_a_wrong_reverse_rule, lambda tangent, answer, x: 2 * x * tangent)


@primitive
def square_that_ignores_its_cotangent(x):
    return x**2


defvjp(square_that_ignores_its_cotangent, lambda answer, x: lambda cotangent: 2 * x)


class TestArithmetic:
    def test_jvp_and_vjp_give_rows_of_flat_vectors(self):
        layout, start = layout_of([[0.3, 0.4], [0.5, 0.6]])

        def model(x):
            return anp.dot(anp.sin(x), anp.ones((2, 3)))

        jacobian = with_autograd.jvp(model, layout, start, np.eye(4)).T
        assert jacobian.shape == (6, 4)
        assert np.allclose(with_autograd.vjp(model, layout, start, np.eye(6)), jacobian, rtol=1e-15)

    def test_every_leaf_reaches_the_model_with_its_shape(self):
        layout, start = layout_of(args({"a": np.ones((2, 2)), "b": 0.3}, "fast"))
        seen = []

        def model(parameters, mode):
            seen.append((anp.shape(parameters["a"]), anp.shape(parameters["b"]), mode))
            return anp.sum(parameters["a"]) * parameters["b"]

        with_autograd.vjp(model, layout, start, np.eye(1))
        assert seen == [((2, 2), (), "fast")]

    def test_a_list_of_numbers_is_an_output(self):
        layout, start = layout_of([0.3, 0.4])

        jacobian = with_autograd.vjp(lambda x: [x[0] * x[1], 5.0, x[1]], layout, start, np.eye(3))
        assert jacobian.tolist() == [[0.4, 0.3], [0.0, 0.0], [0.0, 1.0]]

    @pytest.mark.parametrize("sweep", [with_autograd.jvp, with_autograd.vjp])
    @pytest.mark.parametrize(
        "model",
        [lambda x: np.array([x[0], 2 * x[0]]), lambda x: np.array(x) * 2, lambda x: np.ones(2)],
        ids=["np.array of parts", "np.array of all", "constant"],
    )
    def test_a_result_that_left_autograd_is_an_error_and_no_zero_derivative(self, sweep, model):
        layout, start = layout_of([0.3, 0.4])

        with pytest.raises(with_autograd.CutGraph, match=r"import autograd\.numpy as np"):
            sweep(model, layout, start, np.eye(2))

    def test_a_cast_to_float_raises_the_words_of_autograd(self):
        layout, start = layout_of(0.3)

        with pytest.raises(TypeError, match="ArrayBox"):
            with_autograd.vjp(lambda x: float(x) * 2, layout, start, np.eye(1))

    def test_without_autograd_the_error_says_how_to_install_it(self, monkeypatch):
        monkeypatch.setitem(sys.modules, "autograd", None)
        monkeypatch.delitem(sys.modules, "gradcheck.evaluation.arithmetic.with_autograd")

        with pytest.raises(ImportError, match=r"pip install 'gradcheck\[autograd\]'"):
            __import__("gradcheck.evaluation.arithmetic.with_autograd")

    def test_warning_filters_floating_point_settings_and_random_state_stay_as_they_were(self):
        filters, errors, state = list(warnings.filters), np.geterr(), np.random.get_state()[1].copy()  # noqa: NPY002

        hear(lambda x: anp.log(x), [0.3, 0.4])

        assert list(warnings.filters) == filters
        assert np.geterr() == errors
        assert np.array_equal(np.random.get_state()[1], state)  # noqa: NPY002


class TestWitness:
    def test_a_gradient_is_right_within_a_bound_of_some_roundings(self):
        testimony = hear(lambda x: anp.sum(anp.sin(x)), [0.3, 0.4])

        assert np.all(np.abs(testimony.value[:, 0] - np.cos([0.3, 0.4])) <= testimony.bound[:, 0])
        assert testimony.bound.max() < 1e-13

    def test_rows_give_derivatives_along_directions(self):
        directions = np.array([[1.0, 2.0, 3.0], [0.0, 1.0, -1.0]])

        testimony = hear(lambda x: anp.sin(x), [0.3, 0.4, 0.5], directions)

        assert testimony.value == pytest.approx(directions * np.cos([0.3, 0.4, 0.5]), rel=1e-14, abs=1e-300)

    def test_a_result_that_left_autograd_makes_the_witness_unavailable(self):
        testimony = hear(lambda x: np.array([getattr(x[0], "_value", x[0]), 1.0]), [0.3, 0.4])

        assert testimony.works is False
        assert np.isinf(testimony.bound).all()

    def test_an_operation_without_a_forward_rule_leaves_reverse_mode_alone(self):
        testimony = hear(lambda x: x.astype(np.float64)[:2] ** 2, [0.3, 0.4, 0.5], np.eye(3)[:2])

        assert testimony.reason == "forward mode raises, so reverse mode speaks alone"
        assert testimony.value == pytest.approx(np.diag([0.6, 0.8]), rel=1e-15)

    def test_a_wrong_reverse_rule_is_contradicted_with_both_numbers(self):
        testimony = hear(lambda x: anp.sum(square_with_a_wrong_reverse_rule(x)), [0.3, 0.4])

        assert testimony.works is False
        forward, reverse = map(float, testimony.reason.rpartition(": ")[2].split(" vs "))
        assert reverse / forward == pytest.approx(1.5, rel=1e-4)

    def test_a_rule_that_ignores_its_cotangent_is_contradicted(self):
        testimony = hear(lambda x: anp.sum(square_that_ignores_its_cotangent(x)), [0.3, 0.4])

        assert testimony.works is False
        assert "not linear in its cotangents" in testimony.reason

    def test_a_branch_that_is_not_taken_and_spoils_the_derivative_is_told(self):
        testimony = hear(lambda x: anp.sum(anp.where(x > 0, anp.sqrt(x), 0.0)), [0.0, 0.4], bounds=[(0, 1), (0, 1)])

        assert np.isinf(testimony.bound[0, 0])
        assert testimony.reasons[0, 0] == "the derivative is not finite"

    @pytest.mark.parametrize("model", [anp.abs, lambda x: anp.maximum(x, 0.0)], ids=["abs", "maximum"])
    def test_at_a_kink_the_bound_covers_the_slopes_of_both_sides(self, model):
        testimony = hear(lambda x: anp.sum(model(x)), [0.0, 0.4])

        assert testimony.value[0, 0] + testimony.bound[0, 0] >= 1
        assert testimony.value[0, 0] - testimony.bound[0, 0] <= 0
        assert "jumps" in testimony.reasons[0, 0]

    def test_single_precision_inside_gets_a_bound_of_single_precision(self):
        testimony = hear(lambda x: anp.sum(anp.sin(x.astype(np.float32))), [0.3, 0.4])

        assert np.all(np.abs(testimony.value[:, 0] - np.cos([0.3, 0.4])) <= testimony.bound[:, 0])
        assert np.all((testimony.bound > 1e-8) & (testimony.bound < 1e-4))


class TestNestings:
    def test_dataclasses_and_nested_outputs_are_differentiated(self):
        @dataclasses.dataclass(frozen=True)
        class Spring:
            stiffness: float
            rest: object

        def model(spring):
            return {"energy": spring.stiffness * anp.sum(spring.rest**2), "rest": [anp.sin(spring.rest)]}

        report = gradcheck.check(model, at=Spring(0.5, np.array([1.0, 2.0])), jacobian="autograd")

        assert report.verdict == "confirmed"
        assert report.entries.name[-1] == 'model["rest"][0][1] by spring.rest[1]'
