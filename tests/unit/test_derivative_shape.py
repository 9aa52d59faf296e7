"""The shapes that a claimed derivative may have."""

import numpy as np
import pytest
from scipy import sparse

from gradcheck import DerivativeShapeError, UsageError
from gradcheck.problem.derivative_shape import claim_matrix
from gradcheck.problem.layout import layout_of


def matrix(kind, claim, at, output_shape):
    return claim_matrix(kind, claim, layout_of(at)[0], output_shape)


VECTOR = [1.0, 2.0, 3.0]


@pytest.mark.parametrize(
    ("at", "output_shape", "claim"),
    [
        (VECTOR, (), [1.0, 2.0, 3.0]),
        (VECTOR, (1,), [1.0, 2.0, 3.0]),
        (VECTOR, (1,), [[1.0, 2.0, 3.0]]),
        (0.3, (), 5.0),
        (0.3, (1,), [5.0]),
        (np.ones((2, 2)), (), [[1.0, 2.0], [3.0, 4.0]]),
    ],
    ids=["vector", "size-1 output", "size-1 output, its axis leads", "number", "number, size-1 output", "matrix"],
)
def test_a_gradient_has_the_shape_of_the_input(at, output_shape, claim):
    found = matrix("gradient", claim, at, output_shape)

    assert found.shape == (1, np.size(claim))
    assert found.ravel().tolist() == np.ravel(claim).tolist()


@pytest.mark.parametrize(
    ("at", "output_shape", "claim_shape"),
    [
        (VECTOR, (2,), (2, 3)),
        (VECTOR, (1,), (1, 3)),
        (VECTOR, (), (1, 3)),
        (VECTOR, (), (3,)),
        (0.3, (2,), (2,)),
        (0.3, (2,), (2, 1)),
        (VECTOR, (2, 2), (2, 2, 3)),
        (VECTOR, (2, 2), (4, 3)),
        (np.ones((2, 2)), (3,), (3, 2, 2)),
    ],
)
def test_a_jacobian_has_the_shape_of_the_output_and_then_of_the_input(at, output_shape, claim_shape):
    claim = np.arange(np.prod(claim_shape), dtype=float).reshape(claim_shape)
    found = matrix("jacobian", claim, at, output_shape)

    assert found.shape == (np.prod(output_shape, dtype=int), np.size(at))
    assert found.ravel().tolist() == claim.ravel().tolist()


def test_a_gradient_of_a_nesting_has_the_structure_of_the_nesting():
    found = matrix("gradient", {"a": [1.0, 2.0], "b": 3.0}, {"a": np.ones(2), "b": 0.5}, ())

    assert found.tolist() == [[1.0, 2.0, 3.0]]


def test_a_sparse_jacobian_is_a_claim_like_any_other():
    assert matrix("jacobian", sparse.csr_array(np.eye(3)), VECTOR, (3,)).tolist() == np.eye(3).tolist()


def test_whole_numbers_in_a_claim_are_numbers():
    assert matrix("gradient", [1, 2, 3], VECTOR, ()).dtype == float


def test_a_wrong_shape_is_refused_with_both_shapes():
    with pytest.raises(
        DerivativeShapeError, match=r"shape \(2,\), but x has shape \(3,\).*shape \(3,\) is expected"
    ) as told:
        matrix("gradient", [1.0, 2.0], VECTOR, ())

    assert (told.value.name, told.value.expected, told.value.found) == ("gradient", (3,), (2,))


def test_a_jacobian_whose_transpose_would_fit_is_told_so():
    with pytest.raises(DerivativeShapeError, match=r"its transpose would fit: return `claim.T`"):
        matrix("jacobian", np.ones((3, 2)), VECTOR, (2,))


def test_a_gradient_in_a_column_is_told_to_be_reshaped():
    with pytest.raises(DerivativeShapeError, match=r"shape \(3, 1\).*right number of entries: reshape it to \(3,\)"):
        matrix("gradient", np.ones((3, 1)), VECTOR, ())


def test_no_transpose_is_suggested_where_none_fits():
    with pytest.raises(DerivativeShapeError) as told:
        matrix("jacobian", np.ones((4, 3)), VECTOR, (2,))

    assert "transpose" not in str(told.value)


def test_a_gradient_of_several_outputs_is_refused_with_the_mend():
    with pytest.raises(DerivativeShapeError, match=r"2 outputs.*shape \(2, 3\) with jacobian=.*output=\.\.\."):
        matrix("gradient", np.ones(3), VECTOR, (2,))


def test_a_claim_of_none_asks_for_the_return_statement():
    with pytest.raises(UsageError, match="returned None; does the function lack a return statement"):
        matrix("gradient", None, VECTOR, ())


@pytest.mark.parametrize("claim", ["steep", ["a", "b", "c"], [[1.0, 2.0], [3.0]], object()])
def test_a_claim_that_is_no_array_of_numbers_is_refused(claim):
    with pytest.raises(UsageError, match="an array of real numbers is needed"):
        matrix("gradient", claim, VECTOR, ())


def test_a_complex_claim_is_refused():
    with pytest.raises(UsageError, match="derivatives of a real model are real"):
        matrix("gradient", np.ones(3) * 1j, VECTOR, ())


@pytest.mark.parametrize("claim", [None, "steep", 3.0])
def test_a_claim_on_a_nesting_that_is_no_nesting_is_refused(claim):
    with pytest.raises(UsageError, match="structure of the input"):
        matrix("gradient", claim, {"a": np.ones(2), "b": 0.5}, ())


def test_text_in_a_claim_on_a_nesting_is_refused():
    with pytest.raises(UsageError):
        matrix("gradient", {"a": ["x", "y"], "b": 3.0}, {"a": np.ones(2), "b": 0.5}, ())


def test_complex_numbers_in_a_claim_on_a_nesting_are_refused():
    with pytest.raises(UsageError, match="real"):
        matrix("gradient", {"a": np.ones(2) * 1j, "b": 3.0}, {"a": np.ones(2), "b": 0.5}, ())
