"""Every twelfth trap and every twelfth honest rule of the corpus; the whole of it is measured by `benchmarks.rules`."""

import pytest

pytest.importorskip("jax")
pytest.importorskip("autograd")

from benchmarks.rules import heard
from tests.quality.rule_corpus import HONEST, TRAPS


def test_the_corpus_has_traps_and_honest_rules_enough_and_no_name_twice():
    names = [rule.name for rule in (*TRAPS, *HONEST)]

    assert len(TRAPS) >= 40
    assert len(HONEST) >= 20
    assert len(set(names)) == len(names)


@pytest.mark.parametrize("rule", TRAPS[4::12], ids=lambda rule: rule.name)
def test_a_trap_is_named(rule):
    assert heard(rule).missing == []


@pytest.mark.parametrize("rule", HONEST[4::12], ids=lambda rule: rule.name)
def test_an_honest_rule_is_not_accused(rule):
    outcome = heard(rule)

    assert not outcome.accused, outcome.text
    assert outcome.verdict == rule.verdict
