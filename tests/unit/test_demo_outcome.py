"""The demonstration held against what was planted in it."""

from gradcheck.demo.outcome import held_against, outcome_text
from gradcheck.demo.scenario import Planted
from gradcheck.records.finding import FindingCode, Location
from tests.records import CONFIRMED, OPEN, REFUTED, audit_report, check_report, finding, row

KINK = Planted(kind=FindingCode.KINK, function="cost", variable="speed", places=(0.9, 1.1))
WRONG_CLAIM = Planted(kind=FindingCode.CLAIM_REFUTED, function="cost", variable="width")
NOISE = Planted(kind=FindingCode.NOISE, function="temperature")
MAYBE = Planted(kind=FindingCode.CLAIM_UNDECIDED, function="cost", variable="sweep", certain=False)
INTEGER = Planted(kind=FindingCode.INTEGER_VARIABLE, function="", variable="pumps")


def kink(lower=0.9 - 1e-9, upper=0.9 + 1e-9, **fields):
    where = Location(point=[0.9], line="speed", lower=lower, upper=upper)
    return finding(**({"function": "cost", "variable": "speed", "where": where} | fields))


def at_point(code, **fields):
    return finding(**({"code": code, "where": Location(point=[1.0])} | fields))


def test_what_was_planted_and_found_is_exact():
    report = audit_report(
        claims=(check_report(row("width", verdict=REFUTED), function="cost"),),
        findings=(kink(), at_point(FindingCode.NOISE, function="temperature", variable=None)),
    )
    outcome = held_against(report, [KINK, WRONG_CLAIM, NOISE])

    assert outcome.exact
    assert outcome.found == (KINK, WRONG_CLAIM, NOISE)


def test_what_was_planted_and_not_found_is_missed():
    outcome = held_against(audit_report(), [KINK, MAYBE])

    assert outcome.missed == (KINK,)
    assert not outcome.exact


def test_a_consequence_that_need_not_be_found_is_found_all_the_same():
    report = audit_report(claims=(check_report(OPEN, function="cost"),))

    assert held_against(report, [MAYBE]).found == (MAYBE,)


def test_a_finding_at_another_place_is_surplus_and_does_not_count_as_found():
    outcome = held_against(audit_report(findings=(kink(1.0 - 1e-9, 1.0 + 1e-9),)), [KINK])

    assert outcome.missed == (KINK,)
    assert outcome.surplus == ("the slope jumps (kink) in cost, variable speed at 1 ± 1e-9",)


def test_a_finding_in_another_function_is_surplus():
    assert held_against(audit_report(findings=(kink(function="pressure"),)), [KINK]).surplus


def test_a_finding_of_another_variable_is_surplus():
    assert held_against(audit_report(findings=(kink(variable="width"),)), [KINK]).surplus


def test_a_finding_along_no_variable_is_known_by_kind_and_function():
    assert held_against(audit_report(findings=(kink(7.0, 8.0, variable=None),)), [KINK]).exact


def test_a_planted_fault_of_no_function_is_found_in_any():
    report = audit_report(findings=(at_point(FindingCode.INTEGER_VARIABLE, function="cost", variable="pumps"),))

    assert held_against(report, [INTEGER]).exact


def test_a_wrong_entry_that_was_not_planted_is_surplus():
    report = audit_report(
        claims=(check_report(row("width", verdict=REFUTED), row("height", verdict=REFUTED), function="cost"),)
    )

    assert held_against(report, [WRONG_CLAIM]).surplus == (
        "a claimed derivative is wrong (claim-refuted) in cost, variable height",
    )


def test_an_entry_of_a_jacobian_belongs_to_its_variable():
    report = audit_report(claims=(check_report(row("cost[2] by width", verdict=REFUTED), function="cost"),))

    assert held_against(report, [WRONG_CLAIM]).exact


def test_confirmed_entries_are_no_facts():
    report = audit_report(claims=(check_report(row("width", verdict=CONFIRMED), function="cost"),))

    assert held_against(report, []).exact


def test_the_list_tells_found_missed_and_surplus():
    report = audit_report(findings=(kink(), kink(function="pressure")))
    lines = outcome_text(held_against(report, [KINK, NOISE])).splitlines()

    assert lines[1] == "  - found: the slope jumps (kink) in cost, variable speed"
    assert lines[2] == "  - NOT FOUND: the value is noisy (noise) in temperature"
    assert lines[3].startswith("  - FOUND, BUT NOT PLANTED: the slope jumps (kink) in pressure")
    assert lines[-1] != "Exactly what is planted was found."


def test_the_list_ends_with_the_good_news():
    text = outcome_text(held_against(audit_report(findings=(kink(),)), [KINK]))

    assert text.endswith("\nExactly what is planted was found.")
