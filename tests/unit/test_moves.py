"""Points on their way to the model: made as they are needed, and told apart bit by bit."""

import numpy as np
import pytest

from gradcheck.evaluation import cache, pipeline
from gradcheck.evaluation.moves import Moves, same_content
from gradcheck.evaluation.protocol import Request, Status
from tests.hearing import session_of

START = np.array([1.0, 0.0, -2.0])
MANY = np.arange(100) / 64  # sums of these are exact


def along_axes(base, *moved, kind=float):
    entries, offsets = zip(*moved, strict=True)
    which = np.arange(len(entries))
    return Moves(np.asarray(base, dtype=kind), np.array(entries), which, np.array(offsets, dtype=kind))


def along_rows(base, *moved, kind=float):
    rows, offsets = zip(*moved, strict=True)
    which = np.arange(len(rows))
    return Moves(np.asarray(base, dtype=kind), np.array(rows), which, np.array(offsets, dtype=kind))


class Counted:
    def __init__(self, function=lambda x: float(np.sum(x**2))):
        self.function = function
        self.calls = 0

    def __call__(self, x):
        self.calls += 1
        return self.function(x)


# --- points ----------------------------------------------------------------------------------------------------------


def test_along_an_axis_one_entry_moves():
    moves = along_axes(START, (0, 0.5), (2, -1.0))

    assert [moves.point(i).tolist() for i in range(2)] == [[1.5, 0.0, -2.0], [1.0, 0.0, -3.0]]


def test_along_a_row_all_entries_move():
    assert along_rows(START, ([1.0, 2.0, 0.0], 0.5)).point(0).tolist() == [1.5, 1.0, -2.0]


@pytest.mark.parametrize("kind", [float, complex])
def test_one_at_a_time_and_all_at_once_points_are_the_same_to_the_last_bit(kind):
    rng = np.random.default_rng(0)
    base, rows = rng.normal(size=7), rng.normal(size=(5, 7))
    for moves in (
        along_axes(base, *((i, 0.1 * rng.normal()) for i in range(5)), kind=kind),
        along_rows(base, *((row, rng.normal()) for row in rows), kind=kind),
    ):
        assert np.array_equal(moves.points(), [moves.point(i) for i in range(5)])


def test_a_point_is_an_array_of_its_own():
    moves = along_axes(START, (0, 0.5))
    moves.point(0)[:] = 7.0

    assert moves.point(0).tolist() == [1.5, 0.0, -2.0]


def test_some_of_the_points_are_moves_again():
    moves = along_axes(START, (0, 0.5), (1, 0.5), (2, 0.5))

    assert moves[np.array([2])].point(0).tolist() == moves.point(2).tolist()
    assert len(moves[1:]) == 2


# --- keys ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("start", [START, MANY], ids=["few entries", "many entries"])
def test_equal_points_have_one_key_however_they_were_reached(start):
    unit = np.eye(start.size)
    elsewhere = start + unit[2]
    point = start + 0.5 * unit[2]
    keys = {
        along_axes(start, (2, 0.5)).keys(start)[0],
        along_rows(start, (unit[2], 0.5)).keys(start)[0],
        along_rows(start, (-2 * unit[2], -0.25)).keys(start)[0],
        along_axes(elsewhere, (2, -0.5)).keys(start)[0],
        along_axes(point, (0, 0.0)).keys(start)[0],
    }

    assert len(keys) == 1


def test_the_start_point_has_one_key_along_all_axes():
    moves = along_axes(START, (0, 0.0), (1, 0.0), (2, 0.0))

    assert len(set(moves.keys(START))) == 1
    assert moves.keys(START)[0] == along_rows(START, ([1.0, 1.0, 1.0], 0.0)).keys(START)[0]


def test_points_that_differ_in_the_last_bit_have_different_keys():
    offsets = np.spacing(1.0) * np.arange(3)
    along = along_axes(START, *((0, offset) for offset in offsets)).keys(START)
    across = along_rows(START, *(([1.0, 0.5, 0.0], offset) for offset in offsets)).keys(START)

    assert len(set(along)) == len(set(across)) == 3


def test_the_two_zeros_are_different_points():
    moves = Moves(np.array([1.0]), np.array([0, 0]), np.arange(2), np.array([-1.0, -1.0]))
    negative = Moves(np.array([-0.0]), np.array([0]), np.arange(1), np.array([-0.0]))

    assert moves.keys(np.ones(1))[0] == moves.keys(np.ones(1))[1] != negative.keys(np.ones(1))[0]


def test_imaginary_parts_tell_complex_points_apart():
    moves = along_axes(START, (0, 1e-20j), (0, -1e-20j), (0, 0.0), kind=complex)

    assert len(set(moves.keys(START))) == 3


def test_the_same_value_in_another_entry_is_another_point():
    assert len(set(along_axes(np.ones(3), (0, 0.5), (1, 0.5)).keys(np.ones(3)))) == 2


# --- contents --------------------------------------------------------------------------------------------------------


def test_an_array_that_was_written_into_is_not_what_it_was():
    x = np.array([1.0, 2.0])
    content = bytearray(x.tobytes())

    assert same_content(content, x)
    x[1] = np.nextafter(2.0, 3.0)
    assert not same_content(content, x)


def test_a_matrix_has_the_content_of_its_rows():
    x = np.arange(6.0).reshape(2, 3)

    assert same_content(bytearray(x.tobytes()), x)


# --- many points -----------------------------------------------------------------------------------------------------


def request_on(session, entries, offsets):
    return Request(
        base=session.subject.start, directions=entries, offsets=offsets, function=next(iter(session.subject.targets))
    )


def test_a_request_of_more_points_than_are_handled_at_once_is_answered_in_order(monkeypatch):
    monkeypatch.setattr(pipeline, "POINTS_AT_ONCE", 4)
    session = session_of(lambda x: 10 * x[0] + x[1], [1.0, 2.0])
    reply = session.gate([request_on(session, np.array([0, 1]), np.arange(14.0).reshape(2, 7))])[0]

    assert reply.values[:, :, 0].tolist() == [[12.0 + 10 * i for i in range(7)], [12.0 + i for i in range(7, 14)]]
    assert reply.spent == 14


def test_several_requests_at_once_share_what_they_ask_for():
    model = Counted()
    session = session_of(model, [1.0, 2.0])
    first, second = (request_on(session, np.array([0]), np.array([o])) for o in ([0.1, 0.2], [0.2, 0.3, 0.1]))
    replies = session.gate([first, second])

    assert model.calls == 3
    assert [reply.spent for reply in replies] == [2, 1]
    assert replies[1].values[0, [2, 0]].tolist() == replies[0].values[0].tolist()


def test_a_matrix_reaches_the_model_in_its_shape_and_its_entries_move():
    shapes = []

    def model(x):
        shapes.append(x.shape)
        return x[0, 1] + 10 * x[1, 2]

    session = session_of(model, np.zeros((2, 3)))
    reply = session.gate([request_on(session, np.array([1, 5]), np.array([[1.0], [1.0]]))])[0]

    assert reply.values.ravel().tolist() == [1.0, 10.0]
    assert set(shapes) == {(2, 3)}


def test_writing_into_a_matrix_is_seen():
    def model(x):
        value = float(x.sum())
        x[1, 2] = 5.0
        return value

    session = session_of(model, np.zeros((2, 3)))
    session.gate([request_on(session, np.array([1]), np.array([[1.0]]))])

    assert session.ledger.mutated == {"model"}


def test_a_model_may_keep_what_it_received():
    kept = []

    def model(x):
        kept.append((x, x.copy()))
        return float(x.sum())

    session = session_of(model, np.ones(5))
    session.gate([request_on(session, np.arange(5), np.full((5, 2), 0.5) * [1, -1])])

    assert all(np.array_equal(later, before) for later, before in kept)


# --- what is remembered ----------------------------------------------------------------------------------------------


def test_when_the_memory_is_full_points_are_evaluated_again(monkeypatch):
    monkeypatch.setattr(cache, "_MOST_BYTES", 0)
    model = Counted()
    session = session_of(model, [1.0])
    request = request_on(session, np.array([0]), np.array([[0.5, 0.5]]))
    session.gate([request])
    session.gate([request])

    assert model.calls == 2


def test_an_interruption_leaves_the_account_right_and_no_answer_behind():
    stop = [True]

    def model(x):
        if x[0] == 1.5:
            return float("nan")
        if x[0] == 2.0 and stop[0]:
            raise KeyboardInterrupt
        return float(x[0])

    session = session_of(model, [1.0])
    request = request_on(session, np.array([0]), np.array([[0.25, 0.5, 1.0, 2.0]]))
    with pytest.raises(KeyboardInterrupt):
        session.gate([request])

    assert session.ledger.evaluations == 3
    assert [failure.point.tolist() for failure in session.ledger.failures] == [[1.5]]
    stop[0] = False
    assert session.gate([request])[0].status.tolist() == [[Status.OK, Status.NONFINITE, Status.OK, Status.OK]]


def test_failures_of_several_functions_of_one_run_are_told_in_the_order_of_the_points():
    from gradcheck import Output, Problem, Variable
    from gradcheck.evaluation.pipeline import open_session
    from gradcheck.problem.subject import subject_of_problem

    problem = Problem(
        variables=[Variable("span", 1.0)],
        model=lambda x: {"cost": np.nan if x[0] > 1.2 else 1.0, "stress": np.nan if x[0] > 1.1 else 1.0},
        objective=Output("cost"),
        constraints={"stress": Output("stress")},
    )
    session = open_session(subject_of_problem(problem))
    offsets = np.array([[0.0, 0.15, 0.25]])
    request = Request(base=session.subject.start, directions=np.array([0]), offsets=offsets, function="stress")
    session.gate([request])

    told = [(failure.function, float(failure.point[0])) for failure in session.ledger.failures]
    assert told == [("stress", 1.15), ("objective", 1.25), ("stress", 1.25)]
