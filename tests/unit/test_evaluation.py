"""The only code that calls the user's functions: what is counted, remembered, refused and recorded."""

import threading
import time
import warnings

import numpy as np
import pytest

import gradcheck
from gradcheck import ModelFailure, UsageError
from gradcheck.evaluation.budget import evaluations_of, seconds_of
from gradcheck.evaluation.pipeline import open_session
from gradcheck.evaluation.protocol import Request, Status
from gradcheck.problem.subject import subject_of_problem, subjects_of_function
from tests.hearing import session_of


class Counted:
    """A model that counts its calls and keeps what it was called with."""

    def __init__(self, function=lambda x: float(np.sum(x**2))):
        self.function = function
        self.seen = []

    def __call__(self, x):
        self.seen.append(np.array(x))
        return self.function(x)

    @property
    def calls(self):
        return len(self.seen)


def ask(session, *offsets, function=None, **options):
    """The reply to one request along the first variable."""
    request = Request(
        base=session.subject.start,
        directions=np.array([0]),
        offsets=np.array([offsets]),
        function=function or next(iter(session.subject.targets)),
        **options,
    )
    return session.gate([request])[0]


def statuses(session, *offsets, **options):
    return ask(session, *offsets, **options).status[0].tolist()


# --- values ----------------------------------------------------------------------------------------------------------


def test_a_request_gets_the_values_at_base_plus_offset():
    assert ask(session_of(lambda x: 10 * x[0] + x[1], [1.0, 2.0]), 0.0, 0.5).values.tolist() == [[[12.0], [17.0]]]


def test_along_a_row_all_variables_move():
    session = session_of(lambda x: 10 * x[0] + x[1], [1.0, 2.0])
    request = Request(
        base=session.subject.start, directions=np.array([[1.0, -2.0]]), offsets=np.array([[0.5]]), function="model"
    )

    assert session.gate([request])[0].values.item() == 16.0


def test_values_of_a_vector_model_come_flat():
    session = session_of(lambda x: np.array([[x[0], 2.0], [3.0, 4.0]]), [1.0])

    assert ask(session, 0.0).values.tolist() == [[[1.0, 2.0, 3.0, 4.0]]]
    assert session.shape_of("model") == (2, 2)


def test_a_model_that_gives_out_its_own_buffer_may_fill_it_again():
    buffer = np.zeros(1)

    def model(x):
        buffer[0] = x[0]
        return buffer

    assert ask(session_of(model, [1.0]), 0.0, 1.0, 2.0).values.ravel().tolist() == [1.0, 2.0, 3.0]


@pytest.mark.parametrize("kind", [float, np.float32, np.float64, np.array, lambda v: [v], lambda v: np.array([v])])
def test_a_model_may_return_numbers_in_any_usual_form(kind):
    assert ask(session_of(lambda x: kind(0.5 * x[0]), [1.0]), 0.0).values.item() == 0.5


def test_the_precision_of_what_came_back_is_known():
    session = session_of(lambda x: np.float32(x[0]), [1.0])
    session.start_values()

    assert session.ledger.output_kinds == {"model": "float32"}


# --- counting --------------------------------------------------------------------------------------------------------


def test_every_call_is_counted_once():
    model = Counted()
    session = session_of(model, [1.0, 2.0])
    reply = ask(session, 0.0, 0.1, 0.2)

    assert model.calls == session.ledger.evaluations == reply.spent == 3


def test_calls_in_complex_numbers_are_counted_apart_and_together():
    session = session_of(lambda x: x[0] ** 2, [1.0])
    session.start_values()
    ask(session, 1e-20j, arithmetic="complex")

    assert (session.ledger.calls["model"], session.ledger.calls["complex"]) == (1, 1)
    assert session.ledger.evaluations == 2


def test_a_call_that_fails_is_counted_too():
    session = session_of(lambda x: 1 / 0 if x[0] > 1 else 1.0, [1.0])
    ask(session, 0.0, 0.5)

    assert session.ledger.evaluations == 2
    assert session.ledger.failed == 1


def test_a_claim_is_no_evaluation_of_the_model():
    model = Counted()
    session = session_of(model, [1.0, 2.0])
    session.start_values()
    session.ledger.calls["claim"] += 5

    assert session.ledger.evaluations == model.calls


def test_a_report_counts_every_call_of_the_model():
    model = Counted()
    report = gradcheck.check(model, at=[1.0, 2.0], gradient=lambda x: 2 * x)

    assert report.evaluations == model.calls


# --- memory ----------------------------------------------------------------------------------------------------------


def test_no_point_is_evaluated_twice():
    model = Counted()
    session = session_of(model, [1.0])
    first, second = ask(session, 0.0, 0.5), ask(session, 0.5, 0.0)

    assert model.calls == 2
    assert (first.spent, second.spent) == (2, 0)
    assert second.values.tolist() == first.values[:, ::-1].tolist()


def test_a_point_that_stands_twice_in_one_request_is_evaluated_once():
    model = Counted()
    reply = ask(session_of(model, [1.0]), 0.5, 0.5)

    assert model.calls == reply.spent == 1
    assert reply.values[0, 0] == reply.values[0, 1]


def test_a_failure_is_remembered_too():
    model = Counted(lambda x: float("nan"))
    session = session_of(model, [1.0])

    assert statuses(session, 0.5) == statuses(session, 0.5) == [Status.NONFINITE]
    assert model.calls == 1


def test_a_fresh_request_is_always_made():
    model = Counted()
    session = session_of(model, [1.0])
    ask(session, 0.0)
    reply = ask(session, 0.0, 0.0, fresh=True)

    assert model.calls == 3
    assert reply.spent == 2


def test_what_came_back_fresh_does_not_replace_what_is_remembered():
    values = iter([1.0, 2.0, 3.0])
    session = session_of(lambda x: next(values), [1.0])

    assert [ask(session, 0.0, fresh=fresh).values.item() for fresh in (False, True, False)] == [1.0, 2.0, 1.0]


def test_real_and_complex_values_at_one_point_are_told_apart():
    session = session_of(lambda x: x[0], [1.0])
    ask(session, 0.0)

    assert ask(session, 0.0 + 0.0j, arithmetic="complex").spent == 1


def test_points_with_many_entries_are_told_apart():
    model = Counted()
    session = session_of(model, np.ones(1000))
    ask(session, 0.0, 1e-15, 2e-15)

    assert model.calls == 3


def test_all_outputs_of_one_run_come_from_one_call_a_point():
    model = Counted(lambda x: {"cost": x[0], "stress": 2 * x[0]})
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("span", 1.0)],
        model=model,
        objective=gradcheck.Output("cost"),
        constraints={"stress": gradcheck.Output("stress")},
    )
    session = open_session(subject_of_problem(problem))
    both = [ask(session, 0.0, 0.5, function=name).values.ravel().tolist() for name in ("objective", "stress")]

    assert both == [[1.0, 1.5], [2.0, 3.0]]
    assert model.calls == 2


# --- budget and time -------------------------------------------------------------------------------------------------


def test_beyond_the_budget_points_are_refused_and_the_model_is_not_called():
    model = Counted()
    session = session_of(model, [1.0], budget=2)

    assert statuses(session, 0.0, 0.1, 0.2, 0.3) == [Status.OK, Status.OK, Status.REFUSED, Status.REFUSED]
    assert model.calls == 2
    assert session.ledger.refused == 2


def test_what_was_refused_has_no_value():
    assert np.isnan(ask(session_of(Counted(), [1.0], budget=1), 0.0, 0.1).values[0, 1]).all()


def test_what_is_remembered_is_told_even_when_the_budget_is_spent():
    session = session_of(Counted(), [1.0], budget=1)
    ask(session, 0.0)

    assert statuses(session, 0.0, 0.1) == [Status.OK, Status.REFUSED]


def test_a_refusal_is_not_remembered_as_an_answer():
    session = session_of(Counted(), [1.0], budget=1)
    ask(session, 0.0, 0.1)

    assert session.ledger.refused == 1
    assert statuses(session, 0.1) == [Status.REFUSED]
    assert session.ledger.refused == 2


def test_when_the_time_is_over_points_are_refused():
    def slow(x):
        time.sleep(0.02)
        return x[0]

    session = open_session(subjects_of_function(slow, [1.0], claims={})[0], time_limit=0.01)

    assert statuses(session, 0.0, 0.1)[1] == Status.REFUSED


@pytest.mark.parametrize(
    ("text", "seconds"),
    [(None, None), (3, 3.0), (0.5, 0.5), ("90", 90.0), ("90s", 90.0), ("90 s", 90.0), ("10min", 600.0), ("2h", 7200.0)],
)
def test_time_limits_are_seconds_or_texts(text, seconds):
    assert seconds_of(text) == seconds


@pytest.mark.parametrize(
    "limit", [0, -1, "soon", "10 fortnights", "", "1.2.3s", float("nan"), float("inf"), "-5min", [1]]
)
def test_a_time_limit_that_makes_no_sense_is_refused_with_examples(limit):
    with pytest.raises(UsageError, match=r'give seconds > 0, or text such as "90s", "10min", "2h"'):
        seconds_of(limit)


@pytest.mark.parametrize("budget", [None, 1, 250, np.int64(7), 40.0])
def test_a_budget_is_a_number_of_evaluations(budget):
    assert evaluations_of(budget) == budget


@pytest.mark.parametrize("budget", [0, -3, 2.5, True])
def test_a_budget_that_is_no_count_is_refused(budget):
    with pytest.raises(UsageError, match="a whole number of evaluations, at least 1"):
        evaluations_of(budget)


@pytest.mark.parametrize(
    "budget",
    [
        "many",
        float("inf"),
        [10],
    ],
)
def test_a_budget_that_is_no_number_is_refused(budget):
    with pytest.raises(UsageError, match="a whole number of evaluations, at least 1"):
        evaluations_of(budget)


# --- failures --------------------------------------------------------------------------------------------------------


def test_an_exception_is_a_status_and_its_words_are_kept():
    def model(x):
        if x[0] > 1:
            raise ArithmeticError("the mesh collapsed")
        return x[0]

    session = session_of(model, [1.0])

    assert statuses(session, 0.0, 0.5) == [Status.OK, Status.CRASH]
    assert "ArithmeticError: the mesh collapsed" in session.ledger.failures[0].message
    assert session.ledger.failures[0].point.tolist() == [1.5]


def test_the_words_of_a_failure_tell_the_users_own_line():
    session = session_of(lambda x: np.linalg.inv(np.zeros((2, 2))) if x[0] > 1 else 1.0, [1.0])
    ask(session, 0.0, 0.5)

    assert "test_evaluation.py" in session.ledger.failures[0].message


def test_a_model_that_exits_is_a_crash():
    def model(x):
        if x[0] > 1:
            raise SystemExit(3)
        return x[0]

    assert statuses(session_of(model, [1.0]), 0.0, 0.5) == [Status.OK, Status.CRASH]


def test_an_interruption_by_the_user_is_no_crash():
    def model(x):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        session_of(model, [1.0]).start_values()


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_a_value_that_is_not_finite_is_a_status(bad):
    session = session_of(lambda x: np.array([x[0], bad if x[0] > 1 else 0.0]), [1.0])

    assert statuses(session, 0.0, 0.5) == [Status.OK, Status.NONFINITE]


def test_failures_beyond_a_number_are_counted_but_not_kept():
    session = session_of(lambda x: float("nan"), [1.0])
    ask(session, *np.arange(300.0))

    assert session.ledger.failed == 300
    assert len(session.ledger.failures) < 300


@pytest.mark.parametrize(
    ("later", "words"),
    [(None, "returned None"), ("text", "text"), (1j, "complex"), ([1.0, [2.0]], "unequal shape")],
)
def test_a_point_where_no_number_comes_back_is_a_crash_among_good_ones(later, words):
    session = session_of(lambda x: later if x[0] > 1 else 1.0, [1.0])

    assert statuses(session, 0.0, 0.5) == [Status.OK, Status.CRASH]
    assert words in session.ledger.failures[0].message


# --- a model that is wrong from the start ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("returned", "words"),
    [
        (None, "returned None; does it lack a return statement"),
        ("12.5", "'12.5'.*a number or an array is needed"),
        (1 + 2j, "returned complex numbers"),
        (np.array([1j]), "returned complex numbers"),
        ([1.0, [2.0, 3.0]], "parts of unequal shape"),
        ([], "empty array; there is nothing to differentiate"),
        (np.empty((0, 3)), "empty array; there is nothing to differentiate"),
        ({"cost": 1.0}, r"returned dict with keys \['cost'\].*output=lambda"),
        (object(), "a number or an array is needed"),
        (np.array(["a"]), "a number or an array is needed"),
    ],
    ids=["None", "text", "complex", "complex array", "ragged", "empty", "empty matrix", "dict", "object", "text array"],
)
def test_what_is_no_number_at_the_start_point_is_one_clear_error(returned, words):
    with pytest.raises(UsageError, match=words):
        session_of(lambda x: returned, [1.0]).start_values()


def test_an_array_of_objects_that_are_numbers_is_taken():
    session = session_of(lambda x: np.array([x[0], 2], dtype=object), [1.0])

    assert session.start_values()["model"].tolist() == [1.0, 2.0]


def test_a_shape_that_changes_is_one_clear_error_with_both_shapes():
    session = session_of(lambda x: np.ones(2 if x[0] > 1 else 3), [1.0])
    session.start_values()

    with pytest.raises(UsageError, match=r"shape \(3,\) at first and shape \(2,\).*the same shape everywhere"):
        ask(session, 0.5)


def test_a_model_that_fails_at_its_start_point_says_where_and_its_own_last_words():
    def model(x):
        raise ValueError("negative thickness")

    with pytest.raises(
        ModelFailure, match=r"model could not be evaluated at its start point x = \[1.\].*negative"
    ) as told:
        session_of(model, [1.0]).start_values()

    assert told.value.reason == "crash"
    assert "ValueError: negative thickness" in told.value.last_words


def test_a_nan_at_the_start_point_says_which_output():
    with pytest.raises(ModelFailure, match="output 1 is nan") as told:
        session_of(lambda x: np.array([1.0, np.nan]), [1.0]).start_values()

    assert told.value.reason == "non-finite"


# --- the model's surroundings ----------------------------------------------------------------------------------------


def test_a_model_that_writes_into_its_input_harms_nobody_and_is_known():
    def model(x):
        x *= 2.0
        return float(x[0])

    session = session_of(model, [1.0])

    assert ask(session, 0.0, 0.5, fresh=True).values.ravel().tolist() == [2.0, 3.0]
    assert ask(session, 0.0, fresh=True).values.item() == 2.0
    assert session.subject.start.tolist() == [1.0]
    assert session.ledger.mutated == {"model"}


def test_a_model_that_leaves_its_input_alone_is_not_called_a_writer():
    session = session_of(lambda x: float(x[0]), [1.0])
    ask(session, 0.0, 0.5)

    assert session.ledger.mutated == set()


def test_writing_into_one_array_of_a_nesting_is_seen():
    def model(p):
        p["b"][0] = 0.0
        return float(p["a"][0])

    session = session_of(model, {"a": np.ones(1), "b": np.ones(1)})
    session.start_values()

    assert session.ledger.mutated == {"model"}


def test_warnings_of_the_model_are_silenced_and_the_filters_restored():
    def model(x):
        warnings.warn("deprecated", DeprecationWarning, stacklevel=1)
        return float(np.log(x[0] - 5.0)) if x[0] > 1 else 1.0

    before = list(warnings.filters)
    with warnings.catch_warnings(record=True) as heard:
        warnings.simplefilter("always")
        assert statuses(session_of(model, [1.0]), 0.0, 0.5) == [Status.OK, Status.NONFINITE]

    assert heard == []
    assert list(warnings.filters) == before


def test_floating_point_settings_are_silenced_for_the_model_and_restored():
    seen = []

    def model(x):
        seen.append(np.geterr()["divide"])
        return float(np.float64(1.0) / (x[0] - 1.5))

    with np.errstate(all="raise"):
        before = np.geterr()
        assert statuses(session_of(model, [1.0]), 0.0, 0.5) == [Status.OK, Status.NONFINITE]
        assert np.geterr() == before
    assert set(seen) == {"ignore"}


def test_settings_are_restored_when_the_caller_made_a_mistake():
    with np.errstate(all="raise"):
        before = np.geterr()
        with pytest.raises(UsageError):
            session_of(lambda x: None, [1.0]).start_values()
        assert np.geterr() == before


def test_the_model_runs_in_the_callers_own_thread():
    threads = set()

    def model(x):
        threads.add(threading.get_ident())
        return x[0]

    ask(session_of(model, [1.0]), 0.0, 0.5)

    assert threads == {threading.get_ident()}
