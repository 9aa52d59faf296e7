"""A model that takes many points at once: k points in one call, and the same answers as one by one."""

import time
import warnings

import numpy as np
import pytest

import gradcheck
from gradcheck import ModelFailure, UsageError
from gradcheck.evaluation import moves
from gradcheck.evaluation.pipeline import open_session
from gradcheck.evaluation.protocol import Request, Status
from gradcheck.problem.subject import subjects_of_function


def waves(x):
    """One number a point; each point by itself, whatever stands beside it."""
    return np.sin(x[..., 0]) * np.exp(0.3 * x[..., 1]) + x[..., 2] ** 3


def waves_gradient(x):
    return [np.cos(x[0]) * np.exp(0.3 * x[1]), 0.3 * np.sin(x[0]) * np.exp(0.3 * x[1]), 3 * x[2] ** 2]


def two_outputs(x):
    return np.stack([x[..., 0] * x[..., 1], np.cos(x[..., 2])], axis=-1)


AT = [0.7, -1.3, 2.1]


class Recorded:
    """A model that keeps the shapes it was called with."""

    def __init__(self, function=waves):
        self.function = function
        self.shapes = []

    def __call__(self, x):
        self.shapes.append(x.shape)
        return self.function(x)

    @property
    def points(self):
        return sum(shape[0] for shape in self.shapes)


def batched_session(model, at=AT, **limits):
    return open_session(subjects_of_function(model, at, claims={}, batched=True)[0], **limits)


def ask(session, offsets, **options):
    """Values along the first variable."""
    name = next(iter(session.subject.targets))
    request = Request(
        base=session.subject.start, directions=np.array([0]), offsets=np.array([offsets]), function=name, **options
    )
    return session.gate([request])[0]


#: Evaluations of a batched model that find out whether its rows depend on one another.
COMPANY = 2

# --- what the model receives -----------------------------------------------------------------------------------------


def test_the_model_receives_the_points_of_a_request_as_rows_of_one_array():
    model = Recorded()
    session = batched_session(model)
    session.start_values()
    ask(session, [0.1, 0.2, 0.3])

    # The start point alone and beside a companion, and then what was asked for.
    assert model.shapes == [(1, 3), (2, 3), (3, 3)]


def test_where_x_is_one_number_the_model_receives_k_numbers():
    model = Recorded(np.exp)
    answer = gradcheck.estimate(model, at=0.5, batched=True)

    assert all(len(shape) == 1 for shape in model.shapes)
    assert abs(answer.value - np.exp(0.5)) <= answer.bound


def test_a_batch_takes_no_more_memory_than_it_may(monkeypatch):
    monkeypatch.setattr(moves, "BATCH_BYTES", 5 * 3 * 8)
    model = Recorded()
    gradcheck.estimate(model, at=AT, batched=True)

    assert max(shape[0] for shape in model.shapes) == 5


def test_the_model_may_keep_what_it_received_and_nobody_writes_into_it():
    kept = []

    def model(x):
        kept.append((x, x.copy()))
        return waves(x)

    gradcheck.estimate(model, at=AT, batched=True)

    assert all(np.array_equal(later, before) for later, before in kept)


def test_a_model_that_writes_into_its_batch_is_known_and_harms_nobody():
    def model(x):
        value = waves(x)
        x[:] = 0.0
        return value

    session = batched_session(model)
    right = waves(np.array([[0.8, *AT[1:]], [0.9, *AT[1:]]]))

    assert ask(session, [0.8 - 0.7, 0.9 - 0.7]).values.ravel() == pytest.approx(right, rel=1e-15)
    assert session.ledger.mutated == {"model"}
    assert session.subject.start.tolist() == AT


def test_a_model_that_gives_out_its_own_buffer_may_fill_it_again():
    buffer = np.zeros(3)

    def model(x):
        buffer[: len(x)] = x[:, 0]
        return buffer[: len(x)]

    session = batched_session(model, [1.0])

    assert ask(session, [0.0, 1.0]).values.ravel().tolist() == [1.0, 2.0]
    assert ask(session, [2.0, 0.0, 1.0]).values.ravel().tolist() == [3.0, 1.0, 2.0]


# --- the same answers ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("model", [waves, two_outputs])
def test_an_estimate_is_the_same_to_the_last_bit(model):
    one, many = (gradcheck.estimate(model, at=AT, batched=batched) for batched in (False, True))

    for field in ("value", "bound", "step"):
        assert np.array_equal(getattr(one, field), getattr(many, field))
    assert one.evaluations + COMPANY == many.evaluations


def test_second_derivatives_are_the_same():
    one, many = (gradcheck.estimate(waves, at=AT, order=2, batched=batched) for batched in (False, True))

    assert np.array_equal(one.value, many.value)
    assert np.array_equal(one.bound, many.bound)


def test_a_derivative_along_a_direction_is_the_same():
    one, many = (gradcheck.estimate(waves, at=AT, direction=[1.0, -2.0, 0.5], batched=b) for b in (False, True))

    assert np.array_equal(one.value, many.value)


def test_a_scan_is_the_same():
    one, many = (gradcheck.scan(waves, at=AT, along=1, batched=batched) for batched in (False, True))

    assert np.array_equal(one.values, many.values)
    assert np.array_equal(one.errors, many.errors)
    assert one.best_step == many.best_step


@pytest.mark.parametrize("witnesses", ["differences", "complex step"])
def test_a_check_is_the_same(witnesses):
    one, many = (
        gradcheck.check(waves, at=AT, gradient=waves_gradient, witnesses=witnesses, batched=batched)
        for batched in (False, True)
    )

    assert many.verdict == "confirmed"
    assert np.array_equal(one.entries.witness, many.entries.witness)
    assert one.evaluations + COMPANY == many.evaluations


def test_a_wrong_claim_is_refuted():
    with pytest.raises(gradcheck.DerivativeMismatch, match=r"x\[1\]"):
        gradcheck.check(waves, at=AT, gradient=lambda x: [*waves_gradient(x)[:1], 0.5, 3 * x[2] ** 2], batched=True)


def test_a_jacobian_of_rows_is_checked():
    def jacobian(x):
        return [[x[1], x[0], 0.0], [0.0, 0.0, -np.sin(x[2])]]

    assert gradcheck.check(two_outputs, at=AT, jacobian=jacobian, batched=True).verdict == "confirmed"


def test_a_claim_takes_one_point():
    seen = []

    def gradient(x):
        seen.append(x.shape)
        return waves_gradient(x)

    gradcheck.check(waves, at=AT, gradient=gradient, batched=True)

    assert set(seen) == {(3,)}


def test_output_picks_from_the_whole_batch():
    answer = gradcheck.estimate(two_outputs, at=AT, output=lambda rows: rows[:, 0], batched=True)

    assert answer.value == pytest.approx([AT[1], AT[0], 0.0])


def test_a_description_may_say_that_a_model_is_batched():
    @gradcheck.model(at=AT, gradient=waves_gradient, batched=True)
    def model(x):
        assert x.ndim == 2
        return waves(x)

    assert gradcheck.check(model).verdict == "confirmed"
    assert round(gradcheck.scan(model).order) == 2
    assert gradcheck.audit(model).claims[0].verdict == "confirmed"


@pytest.mark.parametrize("at", [AT, 0.5], ids=["an array", "a number"])
def test_a_claim_of_an_automatic_source_differentiates_the_batched_model(at):
    anp = pytest.importorskip("autograd.numpy")

    def model(x):
        return anp.sin(x) if x.ndim == 1 else anp.sum(anp.sin(x) ** 2, axis=1)

    assert gradcheck.check(model, at=at, gradient="autograd", batched=True).verdict == "confirmed"


@pytest.mark.parametrize(("at", "shape"), [(AT, "(1, 3)"), (0.5, "(1,)")], ids=["an array", "a number"])
def test_a_model_that_takes_one_point_is_told_what_it_was_given(at, shape):
    def of_one_point(x):
        a, b, c = x
        return a * b * c

    def of_a_number(x):
        raise TypeError("one number is needed")

    with pytest.raises(ModelFailure) as told:
        gradcheck.estimate(of_a_number if at == 0.5 else of_one_point, at=at, batched=True)
    assert f"With batched=True it is given x of shape {shape}" in str(told.value)


# --- counting and limits ---------------------------------------------------------------------------------------------


def test_every_point_counts_as_one_evaluation():
    model = Recorded()
    answer = gradcheck.estimate(model, at=AT, batched=True)

    assert answer.evaluations == model.points > len(model.shapes)


def test_no_point_is_evaluated_twice():
    model = Recorded()
    session = batched_session(model)
    ask(session, [0.1, 0.2])
    reply = ask(session, [0.2, 0.3, 0.2])

    assert model.shapes == [(2, 3), (1, 3)]
    assert reply.spent == 1


def test_the_budget_admits_as_many_points_as_are_left():
    model = Recorded()
    session = batched_session(model, budget=4)
    reply = ask(session, [0.1, 0.2, 0.3, 0.4, 0.5, 0.6])

    assert model.shapes == [(4, 3)]
    assert reply.status.ravel().tolist() == [Status.OK] * 4 + [Status.REFUSED] * 2
    assert session.ledger.refused == 2


def test_when_the_time_is_over_no_batch_is_begun():
    def slow(x):
        time.sleep(0.02)
        return waves(x)

    session = batched_session(slow, time_limit=0.01)
    session.start_values()

    assert set(ask(session, [0.1, 0.2]).status.ravel().tolist()) == {Status.REFUSED}
    assert session.ledger.refused == 2 + COMPANY


# --- rows that depend on one another ----------------------------------------------------------------------------------


def test_a_model_that_subtracts_the_mean_of_its_batch_is_told():
    def centred(x):
        return np.sum((x - x.mean(axis=0)) ** 2 + x, axis=1)

    with pytest.raises(gradcheck.UsageError, match=r"batched=True: centred gives .* so its rows depend on one another"):
        gradcheck.check(centred, at=AT, gradient=np.ones(3), batched=True)


def test_sums_in_another_order_are_no_dependence():
    def summed(x):
        return waves(x) + 1e-13 * len(x)

    assert gradcheck.check(summed, at=AT, gradient=waves_gradient, batched=True).verdict == "confirmed"


def test_a_model_that_never_answers_alike_is_not_taken_for_one():
    noise = np.random.default_rng(1)

    def shaken(x):
        return waves(x) + 1e-3 * noise.normal(size=len(x))

    report = gradcheck.check(shaken, at=AT, gradient=waves_gradient, batched=True, on_undecided="pass")
    assert report.verdict == "undecided"


# --- failures --------------------------------------------------------------------------------------------------------


def test_a_point_where_the_model_raises_does_not_spoil_the_others():
    def model(x):
        if (x[:, 0] > 1.0).any():
            raise ArithmeticError("the mesh collapsed")
        return waves(x)

    session = batched_session(model)
    reply = ask(session, [0.1, 0.5, 0.2])

    assert reply.status.ravel().tolist() == [Status.OK, Status.CRASH, Status.OK]
    assert np.isfinite(reply.values[0, :, 0]).tolist() == [True, False, True]
    assert [failure.point.tolist() for failure in session.ledger.failures] == [[1.2, *AT[1:]]]
    assert "the mesh collapsed" in session.ledger.failures[0].message
    assert session.ledger.evaluations == 3


def test_a_point_without_a_finite_value_is_a_failure_of_its_own():
    def model(x):
        return np.where(x[:, 0] > 1.0, np.nan, waves(x))

    session = batched_session(model)
    reply = ask(session, [0.1, 0.5, 0.2])

    assert reply.status.ravel().tolist() == [Status.OK, Status.NONFINITE, Status.OK]
    assert session.ledger.failed == 1
    assert session.ledger.failures[0].point[0] == 1.2


def test_a_model_that_raises_at_the_start_point_says_so_in_its_own_words():
    with pytest.raises(ModelFailure, match=r"start point.*IndexError"):
        gradcheck.estimate(lambda x: x[:, 7], at=AT, batched=True)


@pytest.mark.parametrize(
    ("model", "given", "returned"),
    [
        (lambda x: float(np.sum(x**2)), r"\(1, 3\)", r"\(\)"),
        (lambda x: x[0], r"\(1, 3\)", r"\(3,\)"),
        (lambda x: np.array([np.sum(x**2)]), r"\([0-9]+, 3\)", r"\(1,\)"),
        (lambda x: waves(x)[:2], r"\([0-9]+, 3\)", r"\(2,\)"),
    ],
    ids=["one number", "one point", "one number in an array", "too few"],
)
def test_a_wrong_first_dimension_is_one_error_that_names_both_shapes(model, given, returned):
    with pytest.raises(UsageError, match=rf"received x of shape {given}.*returned shape {returned}"):
        gradcheck.estimate(model, at=AT, batched=True)


def test_where_x_is_one_number_the_error_names_the_shape_of_k_numbers():
    with pytest.raises(UsageError, match=r"received x of shape \(1,\).*returned shape \(\)"):
        gradcheck.estimate(lambda x: float(x[0]), at=0.5, batched=True)


def test_rows_that_change_their_length_are_one_error_with_both_shapes():
    with pytest.raises(UsageError, match=r"shape \(1,\) at first and shape \(2,\)"):
        gradcheck.estimate(lambda x: np.ones((len(x), 1 if len(x) == 1 else 2)), at=AT, batched=True)


@pytest.mark.parametrize(
    ("at", "held"),
    [
        ({"a": 1.0, "b": 2.0}, "several parts"),
        (gradcheck.args(1.0, 2.0), "several parts"),
        (np.ones((2, 3)), r"shape \(2, 3\)"),
    ],
    ids=["a nesting", "arguments", "a matrix"],
)
def test_batches_are_for_one_flat_array_only(at, held):
    with pytest.raises(UsageError, match=rf"batched=True needs a model of one array.*{held}"):
        gradcheck.estimate(lambda *x: 1.0, at=at, batched=True)


def test_batched_is_true_or_false():
    with pytest.raises(UsageError, match="batched is 'yes'; give True"):
        gradcheck.estimate(waves, at=AT, batched="yes")


def test_warnings_of_a_batch_are_silenced():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        gradcheck.estimate(lambda x: np.log(x[:, 0] - 0.65), at=AT, batched=True)
