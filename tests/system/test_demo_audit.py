"""The audit finds what is planted in the demonstration because it is there, not because it is known."""

import pytest

import gradcheck
from gradcheck.demo.scenario import DEFAULT_PUMP_TABLE, branch_problem, planted_in

MOVED = tuple((flow if flow != 1.6 else 1.5, head) for flow, head in DEFAULT_PUMP_TABLE)


def kinks(report):
    """(function, variable) -> brackets of the kinks found."""
    found = {}
    for finding in report.findings:
        if finding.code == "kink":
            found.setdefault((finding.function, finding.variable), []).append(finding.where)
    return found


def test_with_the_planted_entry_mended_the_claim_is_confirmed():
    report = gradcheck.audit(branch_problem(mended=True))

    assert {claim.function: str(claim.verdict) for claim in report.claims} == {
        "objective": "confirmed",
        "pressure": "confirmed",
        "temperature": "undecided",
        "velocity": "confirmed",
    }
    assert report.ready


def test_the_moved_knot_moves_what_is_planted():
    as_it_is, moved = (
        {i.places for i in planted_in(pump_table=t) if i.kind == "kink"} for t in (DEFAULT_PUMP_TABLE, MOVED)
    )

    assert not as_it_is & moved


@pytest.mark.parametrize("table", [DEFAULT_PUMP_TABLE, MOVED], ids=["as it is", "knot moved"])
def test_the_brackets_of_the_kinks_move_with_the_knot_of_the_pump_table(table):
    found = kinks(gradcheck.audit(branch_problem(pump_table=table)))

    planted = {
        (item.function, item.variable): item.places
        for item in planted_in(pump_table=table)
        if item.kind == "kink" and item.places
    }
    assert planted
    assert set(found) == set(planted)
    for line, places in planted.items():
        assert len(found[line]) == len(places)
        for where, place in zip(sorted(found[line], key=lambda w: w.lower), places, strict=True):
            slack = 1e-9 * abs(place)
            assert where.lower - slack <= place <= where.upper + slack


def test_a_tighter_inner_iteration_makes_the_temperature_confirmable():
    report = gradcheck.audit(branch_problem(mended=True, inner_tolerance=1e-15))

    verdicts = {claim.function: str(claim.verdict) for claim in report.claims}
    assert verdicts["temperature"] == "confirmed"
