"""The measurement of verdicts measures what it says; its figures are not asserted here."""

from types import SimpleNamespace

import numpy as np
import pytest

import gradcheck
from benchmarks import verdicts
from gradcheck import Verdict
from tests.quality.mistake_corpus import Claim, noisy_claims, planted, right_claims

RIGHT = np.array([2.0, 3.0, 5.0])


def claim(claimed=RIGHT, share=(1.0, 1.0, 1.0), **fields):
    return Claim(
        name="probe",
        kind="gradient",
        function=lambda x: float(RIGHT @ x),
        x=np.ones(3),
        right=RIGHT,
        claimed=np.array(claimed, dtype=float),
        share=np.array(share),
        **fields,
    )


WRONG = claim([2.0, -3.0, 5.0], mistake="sign of one entry", code="sign-flipped")


def answering(monkeypatch, *words, diagnoses=()):
    """Let `check` answer every claim with these verdicts."""
    told = [Verdict(word) for word in words]
    report = SimpleNamespace(
        verdict=Verdict.overall(told),
        entries=SimpleNamespace(index=np.arange(3), name=("a", "b", "c"), verdict=told, digits=np.full(3, 4.0)),
        diagnoses=[SimpleNamespace(code=code, entries=entries) for code, entries in diagnoses],
        evaluations=18,
    )
    monkeypatch.setitem(vars(gradcheck), "check", lambda *positional, **options: report)


def figure(figures, name):
    return next(each.value for each in figures if each.name == name)


def test_the_wrong_entries_of_a_claim_are_those_that_are_visibly_off():
    assert WRONG.wrong.tolist() == [False, True, False]
    assert not WRONG.hidden.any()


def test_an_entry_that_is_off_by_less_than_can_be_seen_is_hidden():
    tiny = claim([2.0, 3.0, -5.0], share=(1.0, 1.0, 1e-9), mistake="factor on all")

    assert tiny.hidden.tolist() == [False, False, True]
    assert not tiny.wrong.any()


def test_a_claim_that_is_refuted_at_the_wrong_entry_is_exact(monkeypatch):
    answering(monkeypatch, "confirmed", "refuted", "confirmed", diagnoses=[("sign-flipped", ("b",))])
    figures = verdicts.wrong_figures(verdicts.ask([WRONG]))

    assert figure(figures, "refuted, %") == 100
    assert figure(figures, "exactly the wrong entries, %") == 100
    assert figure(figures, "the right story, %") == 100


@pytest.mark.parametrize("words", [("refuted", "refuted", "confirmed"), ("refuted", "confirmed", "confirmed")])
def test_a_claim_that_is_refuted_at_a_right_entry_is_not_exact(monkeypatch, words):
    answering(monkeypatch, *words)

    assert figure(verdicts.wrong_figures(verdicts.ask([WRONG])), "exactly the wrong entries, %") == 0


def test_a_story_about_a_right_entry_is_not_the_right_story(monkeypatch):
    answering(monkeypatch, "confirmed", "refuted", "confirmed", diagnoses=[("sign-flipped", ("a", "b"))])

    assert figure(verdicts.wrong_figures(verdicts.ask([WRONG])), "the right story, %") == 0


def test_a_wrong_entry_that_is_confirmed_is_counted(monkeypatch):
    answering(monkeypatch, "confirmed", "confirmed", "confirmed")

    assert figure(verdicts.wrong_figures(verdicts.ask([WRONG])), "a wrong entry confirmed") == 1


def test_an_undecided_right_claim_is_no_success_and_no_accusation(monkeypatch):
    answering(monkeypatch, "confirmed", "undecided", "confirmed")
    figures = verdicts.right_figures(verdicts.ask([claim()]))

    assert figure(figures, "confirmed, %") == 0
    assert figure(figures, "entries confirmed, %") == pytest.approx(200 / 3)
    assert figure(figures, "accused") == 0


def test_a_refuted_right_claim_is_an_accusation(monkeypatch):
    answering(monkeypatch, "confirmed", "refuted", "confirmed")

    assert figure(verdicts.right_figures(verdicts.ask([claim()])), "accused") == 1


def test_an_exception_is_counted_and_is_no_verdict(monkeypatch):
    def broken(*positional, **options):
        raise RuntimeError("no idea")

    monkeypatch.setitem(vars(gradcheck), "check", broken)
    told = verdicts.ask([WRONG])

    assert figure(verdicts.wrong_figures(told), "exceptions") == 1
    assert figure(verdicts.wrong_figures(told), "refuted, %") == 0
    assert "RuntimeError: no idea" in verdicts.shortcomings(told)


def test_what_did_not_end_as_it_should_is_listed(monkeypatch):
    answering(monkeypatch, "refuted", "confirmed", "confirmed")

    assert "accuses right entries: 0" in verdicts.shortcomings(verdicts.ask([claim()]))


def test_what_ended_as_it_should_is_not_listed(monkeypatch):
    answering(monkeypatch, "confirmed", "confirmed", "confirmed")

    assert verdicts.shortcomings(verdicts.ask([claim()])) == "none"


@pytest.mark.parametrize("make", [right_claims, planted, noisy_claims])
def test_a_corpus_depends_on_its_seed_and_on_nothing_else(make):
    first, again, other = ([each.claimed for each in make(2, seed, most=3)] for seed in (1, 1, 2))

    assert all(np.array_equal(a, b) for a, b in zip(first, again, strict=True))
    assert not all(np.array_equal(a, b) for a, b in zip(first, other, strict=False))


def test_turned_signs_are_wrong_claims():
    assert all(each.wrong.sum() == 1 for each in verdicts.flipped(noisy_claims(1, most=3)))


def test_the_report_stands_the_figures_beside_their_goals(monkeypatch):
    few = right_claims(1, most=2)[:3]
    monkeypatch.setattr(verdicts, "right_claims", lambda points, seed: few)
    monkeypatch.setattr(verdicts, "planted", lambda points, seed: planted(1, most=2)[:7])
    monkeypatch.setattr(verdicts, "noisy_claims", lambda points, seed: noisy_claims(1, most=1))

    text = verdicts.run(1)
    assert "≥ 99.00" in text
    assert "Planted mistakes:" in text
