"""Weights of finite-difference formulas against published tables.

B. Fornberg, "Generation of finite difference formulas on arbitrarily spaced grids", Math. Comp. 51 (1988) 699-706,
Tables 1 (centred) and 3 (one-sided); M. Abramowitz, I. A. Stegun, "Handbook of Mathematical Functions" (1964), Table
25.2. Rows typed from memory, then found equal to the exact rational solution of the moment equations; leading error
terms likewise.
"""

from fractions import Fraction

import numpy as np
import pytest

from gradcheck.witnesses.weights import derivative_weights, leading_error

#: derivative, order of accuracy, weights, factor of the leading error term. Fornberg (1988), Table 1.
CENTRED = [
    (1, 2, "-1/2 0 1/2", "1/6"),
    (1, 4, "1/12 -2/3 0 2/3 -1/12", "-1/30"),
    (1, 6, "-1/60 3/20 -3/4 0 3/4 -3/20 1/60", "1/140"),
    (1, 8, "1/280 -4/105 1/5 -4/5 0 4/5 -1/5 4/105 -1/280", "-1/630"),
    (2, 2, "1 -2 1", "1/12"),
    (2, 4, "-1/12 4/3 -5/2 4/3 -1/12", "-1/90"),
    (2, 6, "1/90 -3/20 3/2 -49/18 3/2 -3/20 1/90", "1/560"),
    (2, 8, "-1/560 8/315 -1/5 8/5 -205/72 8/5 -1/5 8/315 -1/560", "-1/3150"),
    (3, 2, "-1/2 1 0 -1 1/2", "1/4"),
    (3, 4, "1/8 -1 13/8 0 -13/8 1 -1/8", "-7/120"),
    (3, 6, "-7/240 3/10 -169/120 61/30 0 -61/30 169/120 -3/10 7/240", "41/3024"),
    (4, 2, "1 -4 6 -4 1", "1/6"),
    (4, 4, "-1/6 2 -13/2 28/3 -13/2 2 -1/6", "-7/240"),
    (4, 6, "7/240 -2/5 169/60 -122/15 91/8 -122/15 169/60 -2/5 7/240", "41/7560"),
]

#: The same on nodes 0, 1, 2, ... Fornberg (1988), Table 3.
FORWARD = [
    (1, 1, "-1 1", "1/2"),
    (1, 2, "-3/2 2 -1/2", "-1/3"),
    (1, 3, "-11/6 3 -3/2 1/3", "1/4"),
    (1, 4, "-25/12 4 -3 4/3 -1/4", "-1/5"),
    (1, 5, "-137/60 5 -5 10/3 -5/4 1/5", "1/6"),
    (1, 6, "-49/20 6 -15/2 20/3 -15/4 6/5 -1/6", "-1/7"),
    (2, 1, "1 -2 1", "1"),
    (2, 2, "2 -5 4 -1", "-11/12"),
    (2, 3, "35/12 -26/3 19/2 -14/3 11/12", "5/6"),
    (2, 4, "15/4 -77/6 107/6 -13 61/12 -5/6", "-137/180"),
    (3, 1, "-1 3 -3 1", "3/2"),
    (3, 2, "-5/2 9 -12 7 -3/2", "-7/4"),
    (4, 1, "1 -4 6 -4 1", "2"),
    (4, 2, "3 -14 26 -24 11 -2", "-17/6"),
]

#: Abramowitz & Stegun (1964), Table 25.2, five points: 12 times the weights of the first derivative at node j.
FIVE_POINTS = [
    (-2, "-25 48 -36 16 -3"),
    (-1, "-3 -10 18 -6 1"),
    (0, "1 -8 0 8 -1"),
    (1, "-1 6 -18 10 3"),
    (2, "3 -16 36 -48 25"),
]

#: nodes, derivative at 0, weights, order of accuracy, factor of the leading error term: from the moment equations,
#: solved by hand.
UNEVEN = [
    ((0, 1, 3), 1, "-4/3 3/2 -1/6", 2, "-1/2"),
    ((-1, 0, 2), 1, "-2/3 1/2 1/6", 2, "1/3"),
    ((-1, 0, 2), 2, "2/3 -1 1/3", 1, "1/3"),
]

#: derivative, one-sided or not, orders of accuracy with Σ|w|: sums of the rows above.
AMPLIFICATION = [
    (1, "centred", {2: "1", 4: "3/2", 6: "11/6", 8: "25/12"}),
    (2, "centred", {2: "4", 4: "16/3", 6: "272/45", 8: "2048/315"}),
    (1, "forward", {1: "2", 2: "4", 3: "20/3", 4: "32/3", 5: "256/15", 6: "416/15"}),
]


def numbers(text: str) -> np.ndarray:
    return np.array([float(Fraction(each)) for each in text.split()])


def centred_nodes(weights: str) -> np.ndarray:
    reach = len(weights.split()) // 2
    return np.arange(-reach, reach + 1)


def assert_weights(found: np.ndarray, expected: np.ndarray) -> None:
    """Equal to a few units in the last place, and zeros exactly zero."""
    np.testing.assert_allclose(found, expected, rtol=1e-15, atol=0)


@pytest.mark.parametrize(("derivative", "order", "weights", "error"), CENTRED)
def test_centred_weights_are_those_of_fornbergs_table_1(derivative, order, weights, error):
    nodes = centred_nodes(weights)

    assert_weights(derivative_weights(nodes, order=derivative), numbers(weights))
    assert leading_error(nodes, order=derivative) == (order, pytest.approx(float(Fraction(error)), rel=1e-14))


@pytest.mark.parametrize(("derivative", "order", "weights", "error"), FORWARD)
def test_forward_weights_are_those_of_fornbergs_table_3(derivative, order, weights, error):
    nodes = np.arange(len(weights.split()))

    assert_weights(derivative_weights(nodes, order=derivative), numbers(weights))
    assert leading_error(nodes, order=derivative) == (order, pytest.approx(float(Fraction(error)), rel=1e-14))


@pytest.mark.parametrize(("derivative", "order", "weights", "error"), FORWARD)
def test_backward_weights_are_the_forward_ones_reversed_with_the_sign_of_the_order(derivative, order, weights, error):
    nodes = -np.arange(len(weights.split()))[::-1]

    assert_weights(derivative_weights(nodes, order=derivative), (-1) ** derivative * numbers(weights)[::-1])


@pytest.mark.parametrize(("place", "weights"), FIVE_POINTS)
def test_five_point_weights_at_every_node_are_those_of_abramowitz_and_stegun(place, weights):
    assert_weights(12 * derivative_weights(range(-2, 3), at=place), numbers(weights))


@pytest.mark.parametrize(("place", "factor"), [(-2, "1/5"), (-1, "-1/20"), (0, "1/30"), (1, "-1/20"), (2, "1/5")])
def test_five_point_errors_are_those_of_abramowitz_and_stegun(place, factor):
    """Abramowitz & Stegun, section 25.3 (from memory), give the remainder: the negative of the formula's error."""
    power, found = leading_error(range(-2, 3), at=place)

    assert (power, -found) == (4, pytest.approx(float(Fraction(factor)), rel=1e-14))


@pytest.mark.parametrize(("nodes", "derivative", "weights", "order", "error"), UNEVEN)
def test_weights_on_uneven_nodes_solve_the_moment_equations(nodes, derivative, weights, order, error):
    assert_weights(derivative_weights(nodes, order=derivative), numbers(weights))
    assert leading_error(nodes, order=derivative) == (order, pytest.approx(float(Fraction(error)), rel=1e-14))


@pytest.mark.parametrize(("derivative", "kind", "sums"), AMPLIFICATION, ids=lambda value: str(value)[:7])
def test_the_noise_amplification_is_the_sum_of_the_published_weights(derivative, kind, sums):
    table = {"centred": CENTRED, "forward": FORWARD}[kind]
    rows = {order: weights for m, order, weights, _ in table if m == derivative}
    for order, total in sums.items():
        nodes = centred_nodes(rows[order]) if kind == "centred" else np.arange(len(rows[order].split()))

        found = np.abs(derivative_weights(nodes, order=derivative)).sum()

        assert found == pytest.approx(float(Fraction(total)), rel=1e-15)


def test_centred_formulas_have_even_orders_only():
    orders = {leading_error(np.arange(-k, k + 1), order=m)[0] for k in range(1, 7) for m in range(1, 2 * k + 1)}

    assert orders == {2, 4, 6, 8, 10, 12}


def test_the_errors_of_one_sided_first_derivatives_alternate_in_sign_and_fall_as_one_over_the_number_of_nodes():
    factors = [leading_error(np.arange(k + 1))[1] for k in range(1, 9)]

    assert factors == pytest.approx([(-1) ** (k + 1) / (k + 1) for k in range(1, 9)], rel=1e-14)
