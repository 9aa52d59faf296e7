"""What the witness of automatic differentiation asks for, and what it makes of the answers; no AD library is needed."""

import numpy as np
import pytest

from gradcheck.evaluation.conduct import conduct_one
from gradcheck.evaluation.protocol import Reply, Status
from gradcheck.problem.domain import domain_of
from gradcheck.witnesses.automatic import automatic


class SweepGate:
    """Answers sweeps from a Jacobian ``(m, n)`` written by hand.

    `failing` modes get the status they are given; `spoil` changes what a mode answers.
    """

    def __init__(self, jacobian, value=None, failing=None, spoil=None):
        self.jacobian = jacobian
        self.value = value or (lambda x: np.ones(len(np.atleast_2d(jacobian(x)))))
        self.failing = failing or {}
        self.spoil = spoil or {}
        self.asked = []

    def __call__(self, requests):
        return [self.answer(request) for request in requests]

    def answer(self, request):
        if request.source == "model":
            values = np.reshape(self.value(request.base), (1, 1, -1))
            return Reply(values=values, status=np.zeros((1, 1), dtype=np.int8), spent=1)
        self.asked.append(request)
        status = self.failing.get(request.arithmetic, Status.OK)
        matrix = np.atleast_2d(self.jacobian(request.base))
        rows = product(request.directions, matrix.T if request.arithmetic == "jvp" else matrix)
        if status != Status.OK:
            rows = np.full_like(rows, np.nan)
        elif request.arithmetic in self.spoil:
            rows = self.spoil[request.arithmetic](rows)
        elif not np.isfinite(rows).all():
            status = Status.NONFINITE
        return Reply(values=rows[:, None, :], status=np.full((len(rows), 1), status, dtype=np.int8), spent=1)

    def rows_asked(self, mode):
        return [len(request.directions) for request in self.asked if request.arithmetic == mode]


def product(rows, matrix):
    """Rows times matrix, in which 0 times infinity is 0, as in an AD library that never meets the entry."""
    with np.errstate(invalid="ignore"):
        terms = rows[:, :, None] * matrix
    return np.where(rows[:, :, None] != 0, terms, 0.0).sum(axis=1)


def hear(gate, at, outputs=1, directions=None, **options):
    at = np.asarray(at, dtype=float)
    rows = np.arange(at.size) if directions is None else np.asarray(directions)
    return conduct_one(automatic(at, rows, outputs, "jax", **options), gate)


def gradient(x):
    return np.cos(x)


def test_a_gradient_takes_reverse_mode_with_one_sweep_for_all_variables():
    gate = SweepGate(gradient)

    testimony = hear(gate, [0.3, 0.4, 0.5])

    assert gate.asked[0].arithmetic == "vjp"
    assert set(gate.rows_asked("vjp")) == {1}
    assert testimony.value[:, 0] == pytest.approx(np.cos([0.3, 0.4, 0.5]))


def test_few_directions_of_many_outputs_take_forward_mode():
    gate = SweepGate(lambda x: np.outer(np.arange(1.0, 6), x))

    testimony = hear(gate, [0.3, 0.4], outputs=5, directions=[[1.0, 2.0]])

    assert gate.asked[0].arithmetic == "jvp"
    assert testimony.value[0] == pytest.approx(np.arange(1.0, 6) * 1.1)


def test_a_model_of_a_million_variables_is_never_asked_for_more_than_one_row():
    gate = SweepGate(gradient)

    hear(gate, np.linspace(0.1, 1.0, 10**6))

    assert max(len(request.directions) for request in gate.asked) == 1


def test_a_large_jacobian_is_swept_once_and_its_noise_measured_on_mixtures():
    gate = SweepGate(lambda x: np.outer(np.arange(1.0, 31), x))

    hear(gate, np.linspace(0.1, 1.0, 20), outputs=30)

    assert sorted(gate.rows_asked("jvp") + gate.rows_asked("vjp"))[-2:] == [1, 20]


@pytest.mark.parametrize("failing", ["jvp", "vjp"])
def test_one_mode_that_raises_leaves_the_other_alone(failing):
    testimony = hear(SweepGate(gradient, failing={failing: Status.CRASH}), [0.3, 0.4])

    names = {"jvp": "forward", "vjp": "reverse"}
    assert testimony.works is True
    assert testimony.reason.startswith(f"{names[failing]} mode raises")
    assert testimony.value[:, 0] == pytest.approx(np.cos([0.3, 0.4]))


def test_two_modes_that_raise_cannot_speak():
    testimony = hear(SweepGate(gradient, failing={"jvp": Status.CRASH, "vjp": Status.CRASH}), [0.3, 0.4])

    assert testimony.works is False
    assert testimony.reason == "the model raises inside jax, in forward and in reverse mode"


@pytest.mark.parametrize("mode", ["jvp", "vjp"])
def test_a_mode_that_is_off_by_a_factor_is_contradicted(mode):
    testimony = hear(SweepGate(gradient, spoil={mode: lambda rows: 1.001 * rows}), [0.3, 0.4])

    assert testimony.works is False
    assert testimony.reason.startswith("forward and reverse modes disagree: ")


def test_an_entry_a_million_times_smaller_than_the_others_is_compared_as_well():
    def one_wrong(rows):
        return rows * np.where(np.arange(rows.shape[1]) == 1, 1.01, 1.0)

    matrix = np.diag([1e3, 1e-3, 1.0])
    gate = SweepGate(lambda x: matrix, spoil={"vjp": one_wrong})

    assert hear(gate, [0.3, 0.4, 0.5], outputs=3).works is False


def test_a_mode_that_is_not_linear_in_its_rows_is_contradicted_even_if_it_is_alone():
    gate = SweepGate(gradient, failing={"jvp": Status.CRASH}, spoil={"vjp": lambda rows: np.cos([[0.3, 0.4]])})

    testimony = hear(gate, [0.3, 0.4])

    assert testimony.works is False
    assert "not linear in its cotangents" in testimony.reason


def test_rounding_that_all_sweeps_share_is_measured_and_covered():
    def through_a_large_number(x):
        return 2 * ((1e8 + x) - 1e8)

    testimony = hear(SweepGate(through_a_large_number), [0.3, 0.7])

    error = np.abs(testimony.value[:, 0] - [0.6, 1.4])
    assert error.max() > 1e-9
    assert np.all(error <= testimony.bound[:, 0])
    assert testimony.bound.max() < 1e-5


def test_a_steep_derivative_is_no_noise():
    testimony = hear(SweepGate(lambda x: 1e5 * np.cos(1e5 * x)), [1.3])

    assert testimony.bound[0, 0] < 1e-8 * 1e5


def test_single_precision_shows_in_the_digits_of_the_answer():
    testimony = hear(
        SweepGate(gradient, spoil=dict.fromkeys(["jvp", "vjp"], lambda rows: rows.astype(np.float32))), [0.3]
    )

    assert "single precision" in testimony.reason
    assert abs(testimony.value[0, 0] - np.cos(0.3)) <= testimony.bound[0, 0]


def test_an_entry_that_is_not_finite_has_no_bound_and_spoils_no_other():
    gate = SweepGate(lambda x: np.array([[np.inf, 1.0], [1.0, 2.0]]))

    # three directions for two outputs: gradients are summed along directions
    testimony = hear(gate, [0.3, 0.4], outputs=2, directions=[[1.0, 0.0], [0.0, 1.0], [0.0, 2.0]])

    assert np.isinf(testimony.bound).tolist() == [[True, False], [False, False], [False, False]]
    assert testimony.value[1:].tolist() == [[1.0, 2.0], [2.0, 4.0]]


def test_a_derivative_of_zero_has_a_bound_from_the_size_of_f():
    testimony = hear(SweepGate(lambda x: 0 * x, value=lambda x: np.array([5.0])), [0.5])

    assert testimony.value[0, 0] == 0
    assert testimony.bound[0, 0] == 64 * 2.0**-53 * 5.0 / 0.5


def test_a_remainder_of_cancelled_terms_is_not_believed():
    testimony = hear(SweepGate(lambda x: 1 - np.tanh(x) ** 2), [18.5])

    error = abs(testimony.value[0, 0] - 4 * np.exp(-37.0))
    assert error > 1e-17
    assert error <= testimony.bound[0, 0]


def test_a_derivative_too_large_to_be_squared_has_no_bound():
    testimony = hear(SweepGate(lambda x: 1e200 * np.cos(1e6 * x)), [0.3])

    assert np.isinf(testimony.bound[0, 0])


def test_no_point_leaves_the_bounds_and_a_fixed_variable_stays():
    at = np.array([0.3, 0.4, 0.5])
    domain = domain_of(at, bounds=[(0.3, 1.0), (0.0, 0.4), (0.5, 0.5)])
    gate = SweepGate(gradient)

    hear(gate, at, domain=domain)

    points = np.array([request.base for request in gate.asked])
    assert np.all((points >= domain.lower) & (points <= domain.upper))
    assert len(np.unique(points[:, 0])) > 1


def test_a_refused_sweep_is_told_as_a_spent_budget():
    gate = SweepGate(gradient, failing={"vjp": Status.REFUSED})

    testimony = hear(gate, [0.3, 0.4])

    assert testimony.reason == "budget or time spent"
    assert len(gate.asked) == 1


def test_the_same_seed_gives_the_same_answer():
    first, second = (hear(SweepGate(gradient), [0.3, 0.4], seed=5) for _ in range(2))

    assert np.array_equal(first.bound, second.bound)
