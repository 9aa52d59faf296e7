"""Several inquiries against one gate, round by round."""

import numpy as np
import pytest

from gradcheck.evaluation.conduct import addressed, conduct, conduct_one, counted
from gradcheck.evaluation.protocol import Reply, Request, Status
from tests.gates import gate_of


def request(*offsets, base=(1.0,), **options):
    rows = np.array([offsets], dtype=float)
    return Request(base=np.array(base), directions=np.array([0]), offsets=rows, **options)


def asking(*rounds, **options):
    """An inquiry that asks for one value a round and returns the list of values."""
    values = []
    for offset in rounds:
        reply = yield request(offset, **options)
        values.append(float(reply.values[0, 0, 0]))
    return values


class Listening:
    """A gate that keeps every request it is handed, round by round."""

    def __init__(self):
        self.rounds = []

    def __call__(self, requests):
        self.rounds.append(list(requests))
        return [
            Reply(values=r.offsets[..., None] + 0.0, status=np.zeros(r.offsets.shape, np.int8), spent=r.offsets.size)
            for r in requests
        ]


def test_an_inquiry_receives_the_values_it_asked_for():
    assert conduct_one(asking(0.0, 2.0), gate_of(lambda x: 10 * x[0])) == [10.0, 30.0]


def test_an_inquiry_that_asks_nothing_still_has_a_result():
    assert conduct({"idle": asking()}, gate_of(lambda x: x[0])) == {"idle": []}


def test_no_inquiries_give_no_results_and_ask_no_gate():
    gate = Listening()

    assert conduct({}, gate) == {}
    assert gate.rounds == []


def test_results_come_in_the_order_of_the_inquiries():
    results = conduct({"z": asking(1.0), "a": asking(2.0, 3.0)}, gate_of(lambda x: x[0]))

    assert list(results) == ["z", "a"]


def test_all_waiting_inquiries_share_a_round():
    gate = Listening()
    conduct({"a": asking(1.0, 2.0), "b": asking(3.0), "c": asking()}, gate)

    assert [len(each) for each in gate.rounds] == [2, 1]


def test_within_a_round_worth_goes_first_and_then_the_name():
    gate = Listening()
    conduct({"c": asking(3.0), "b": asking(2.0), "a": asking(1.0, worth=0.5), "d": asking(4.0, worth=9.0)}, gate)

    assert [r.offsets[0, 0] for r in gate.rounds[0]] == [4.0, 2.0, 3.0, 1.0]


def test_the_order_in_which_inquiries_are_given_changes_nothing_about_a_round():
    first, second = Listening(), Listening()
    conduct({"a": asking(1.0), "b": asking(2.0)}, first)
    conduct({"b": asking(2.0), "a": asking(1.0)}, second)

    assert [r.offsets[0, 0] for r in first.rounds[0]] == [r.offsets[0, 0] for r in second.rounds[0]]


def test_a_refused_inquiry_sees_it_and_returns_what_it_has():
    def patient():
        reply = yield request(0.0, 1.0)
        return reply.status[0].tolist()

    assert conduct_one(patient(), gate_of(lambda x: x[0], limit=1)) == [Status.OK, Status.REFUSED]


def test_an_inquiry_made_of_others_has_their_results():
    def whole():
        first = yield from asking(1.0)
        second = yield from asking(2.0)
        return first + second

    assert conduct_one(whole(), gate_of(lambda x: x[0])) == [2.0, 3.0]


def test_an_addressed_inquiry_tells_the_gate_what_it_does_not_know_itself():
    gate = Listening()
    conduct_one(addressed(asking(1.0, 2.0), function="stress", worth=3.0), gate)

    assert {(r.function, r.worth) for each in gate.rounds for r in each} == {("stress", 3.0)}


def test_an_addressed_inquiry_that_asks_nothing_keeps_its_result():
    assert conduct_one(addressed(asking(), function="stress"), Listening()) == []


def test_a_counted_inquiry_tells_how_many_values_it_asked_for():
    assert conduct_one(counted(asking(1.0, 2.0, 3.0)), gate_of(lambda x: x[0])) == ([2.0, 3.0, 4.0], 3)


def test_an_error_of_the_gate_reaches_the_caller():
    def broken(requests):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        conduct_one(asking(1.0), broken)
