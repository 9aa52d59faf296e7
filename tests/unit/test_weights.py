"""Weights of difference formulas: what holds for all nodes, and what is refused."""

import numpy as np
import pytest

import gradcheck
from gradcheck.witnesses.weights import derivative_weights, leading_error

SCATTERED = np.array([0.3, -1.1, 2.0, 0.9, -0.2, 1.4])


@pytest.mark.parametrize("order", range(6))
@pytest.mark.parametrize("at", [0.0, 0.3, 5.0])
def test_polynomials_below_the_number_of_nodes_are_differentiated_exactly(order, at):
    polynomial = np.polynomial.Polynomial([0.7, -1.3, 0.4, 2.1, -0.6, 0.2])
    weights = derivative_weights(SCATTERED, at=at, order=order)

    truth = polynomial.deriv(order)(at) if order else polynomial(at)

    assert weights @ polynomial(SCATTERED) == pytest.approx(truth, rel=1e-11, abs=1e-11)


def test_weights_stand_in_the_order_of_the_nodes():
    permutation = np.array([3, 0, 5, 1, 4, 2])

    moved = derivative_weights(SCATTERED[permutation], at=0.1, order=2)

    np.testing.assert_allclose(moved, derivative_weights(SCATTERED, at=0.1, order=2)[permutation], rtol=1e-13)


def test_order_zero_interpolates_and_picks_the_node_itself_where_there_is_one():
    weights = derivative_weights(SCATTERED, at=0.9, order=0)

    assert weights.tolist() == [0, 0, 0, 1, 0, 0]


@pytest.mark.parametrize("order", [1, 2, 3])
@pytest.mark.parametrize("at", [0.0, 0.37, -1.1])
def test_the_leading_error_is_what_the_formula_makes_of_the_first_power_it_gets_wrong(order, at):
    power, factor = leading_error(SCATTERED, at=at, order=order)
    degree = order + power

    found = derivative_weights(SCATTERED, at=at, order=order) @ (SCATTERED - at) ** degree

    assert found == pytest.approx(factor * np.prod(np.arange(1.0, degree + 1)), rel=1e-9)


def test_a_symmetric_formula_gains_one_order():
    assert [leading_error(nodes)[0] for nodes in ([-0.3, 0.0, 0.3], [-0.3, 0.0, 0.31])] == [2, 2]
    assert [leading_error(nodes, order=2)[0] for nodes in ([-0.3, 0.0, 0.3], [-0.3, 0.0, 0.31])] == [2, 1]


def test_a_formula_that_is_exact_for_every_function_has_no_error():
    assert leading_error([0.0, 1.0, 2.0], at=1.0, order=0) == (3, 0.0)


def test_weights_cannot_be_written_to():
    with pytest.raises(ValueError, match="read-only"):
        derivative_weights([0, 1])[0] = 1.0


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (([0, 1, 1],), r"node 1\.0 stands more than once"),
        (([0, 1], 0.0, 2), "2 nodes cannot give a derivative of order 2; give 3 nodes or more"),
        (([], 0.0, 0), "0 nodes cannot"),
        (([0, 1], 0.0, -1), r"order is -1"),
        (([0, 1], 0.0, 1.0), r"order is 1\.0"),
        (([0, 1], 0.0, True), "order is True"),
        (([0, np.nan],), "must be finite"),
        (([0, 1], np.inf), "must be finite"),
        (([[0, 1]],), r"shape \(1, 2\)"),
        (([1.0, 1.0 + 2**-52], 1e9), "more than once"),
    ],
)
def test_what_has_no_weights_is_told_with_the_value_and_the_mend(arguments, words):
    with pytest.raises(gradcheck.UsageError, match=words):
        derivative_weights(*arguments)
