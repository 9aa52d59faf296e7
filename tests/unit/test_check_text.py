"""The failure message of a check: for somebody in a hurry, at 80 columns."""

import numpy as np
import pytest

from gradcheck.records.report import Diagnosis, DirectionChecks
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.report.check_text import WORST, check_text
from tests.records import CONFIRMED, INF, NAN, OPEN, REFUTED, UNDECIDED, WRONG, check_report, finding, row

SIGN = Diagnosis(
    code=DiagnosisCode.SIGN_FLIPPED,
    text="2 of 3 entries are the witness times -1; negate the claim.",
    entries=("chord", "span"),
)


def first_line(report):
    return check_text(report).splitlines()[0]


def test_the_first_line_names_the_claim_the_model_the_verdict_and_the_worst_entry():
    assert first_line(check_report(WRONG, row())) == (
        "gradient of drag refuted: chord is claimed 4.2, found 2.1 ± 3e-12"
    )


def test_the_first_line_of_a_confirmed_claim_tells_how_many_digits_agree_at_least():
    report = check_report(row(digits=11.7), row("chord", digits=14.0))

    assert first_line(report) == "gradient of drag confirmed: all 2 entries agree to 11 digits or more"


def test_a_confirmed_zero_is_said_to_agree_within_the_bounds_not_to_zero_digits():
    report = check_report(row(claim=0.0, witness=0.0, digits=0.0))

    assert first_line(report) == "gradient of drag confirmed: the entry agrees within the bounds"


def test_zeros_among_confirmed_entries_do_not_hide_the_digits_of_the_others():
    report = check_report(row(digits=11.7), row("chord", claim=0.0, witness=0.0, digits=0.0), row("tail", digits=13.0))

    assert first_line(report) == "gradient of drag confirmed: all 3 agree to 11 digits or within bounds"


def test_the_first_line_of_an_undecided_claim_accuses_nobody():
    assert first_line(check_report(OPEN)) == "gradient of drag undecided: sweep agrees to 1 digit only"


def test_an_entry_about_which_no_witness_can_speak_is_told_as_such():
    report = check_report(row(claim=3.0, witness=NAN, bound=INF, digits=NAN, verdict=UNDECIDED))

    assert first_line(report) == "gradient of drag undecided: span is claimed 3, and no witness can tell"


def test_a_claim_and_a_witness_that_agree_to_many_digits_are_shown_with_enough_to_look_different():
    close = row(claim=1.00000001, witness=1.00000002, bound=1e-14, digits=8.0, verdict=REFUTED)

    assert "claimed 1.00000001, found 1.00000002" in first_line(check_report(close))


def test_a_claim_of_nan_comes_first_of_all():
    report = check_report(WRONG, row("tail", claim=NAN, witness=1.0, digits=NAN, verdict=REFUTED))

    assert first_line(report) == "gradient of drag refuted: tail is claimed nan, found 1 ± 1e-12"


def test_the_likely_mistake_stands_before_the_table_with_its_mend():
    text = check_text(check_report(WRONG, row(), diagnoses=(SIGN,)))

    assert text.index("Likely mistake: the sign is flipped (sign-flipped)") < text.index("witness ± bound")
    assert "negate the claim" in text


def test_at_most_ten_entries_are_listed_and_the_others_are_counted_by_verdict():
    rows = [row(f"x[{i}]", digits=float(i % 7), verdict=REFUTED) for i in range(12)]
    report = check_report(*rows, *[row(f"y[{i}]") for i in range(30)])
    text = check_text(report)

    assert sum(line.endswith("  refuted") for line in text.splitlines()) == WORST
    assert "The other 32: 2 refuted, 30 confirmed." in text


def test_worst_entries_come_first_in_the_table():
    text = check_text(check_report(row(), OPEN, WRONG))

    assert text.index("\n  chord") < text.index("\n  sweep") < text.index("\n  span")


def test_the_reason_of_undecided_entries_is_told_once_with_the_entries():
    reason = "the noise of the value hides it; a budget of 400 would decide"
    rows = [row(f"x[{i}]", verdict=UNDECIDED, bound=INF, reason=reason) for i in range(20)]
    text = " ".join(check_text(check_report(*rows)).split())

    assert text.count(reason) == 1
    assert "Undecided: x[0], x[1], x[2], x[3], x[4], x[5] and 14 more" in text


def test_why_an_entry_was_not_judged_by_the_plain_rule_is_told_although_it_is_confirmed():
    text = check_text(check_report(row(reason="the rounding floor decides; 9 digits are seen")))

    assert "\n  span: the rounding floor decides; 9 digits are seen\n" in text


def test_a_confirmed_claim_takes_two_lines():
    assert len(check_text(check_report(row())).splitlines()) == 2


def test_evaluations_and_seconds_stand_at_the_end():
    last = check_text(check_report(WRONG, evaluations=1234, seconds=7777.0)).splitlines()[-1]

    assert last == "Checked at (0.3, 1.2) against finite difference: 1,234 evaluations in 2 h 9 min."


def test_directions_are_told_with_the_smallest_error_that_they_would_have_seen():
    directions = DirectionChecks(
        claim=[1.0, 2.0], witness=[1.0, 3.0], bound=[0.0, 0.0], verdict=(CONFIRMED, REFUTED), smallest_visible=2e-4
    )
    text = check_text(check_report(verdict=REFUTED, directions=directions))

    assert text.startswith("gradient of drag refuted: of 2 random directions, 1 refuted, 1 confirmed\n")
    assert "would have seen: 2e-4" in " ".join(text.split())


def test_a_report_without_any_entry_says_so():
    assert first_line(check_report()) == "gradient of drag confirmed: no entry was looked at"


def test_notices_and_findings_are_told():
    text = check_text(check_report(row(), notices=("x was given as integers",), findings=(finding(),)))

    assert "Note: x was given as integers" in text
    assert "HAZARD kink (the slope jumps): stress, variable span" in text


LONG = "a_very_long_name_of_a_wing.fuselage_frame[{}].thickness_of_the_skin_at_the_root"
CASES = {
    "plain": check_report(WRONG, row(), OPEN, diagnoses=(SIGN,)),
    "long names": check_report(
        *[row(LONG.format(i), claim=NAN, verdict=REFUTED, digits=NAN) for i in range(40)],
        function=LONG,
        kind="jacobian",
        diagnoses=(Diagnosis(code=DiagnosisCode.UNKNOWN, text="x" * 300, entries=(LONG,) * 50),),
    ),
    "all digits": check_report(
        *[
            row(LONG.format(i), -1.2345678901234567e-123, -1.2345678901234599e-123, 1.2e-145, 15.0, REFUTED)
            for i in range(12)
        ]
    ),
    "infinities": check_report(
        row(claim=INF, witness=-INF, bound=INF, digits=-INF, verdict=UNDECIDED, reason="y" * 200)
    ),
    "large counts": check_report(WRONG, point=np.full(1000000, 1 / 3), evaluations=10**12, seconds=1e9),
    "nothing": check_report(),
    "control characters": check_report(row("x\n\x1b[31m" * 20, verdict=REFUTED, reason="a\tb\n" * 60)),
}


@pytest.mark.parametrize("report", CASES.values(), ids=CASES.keys())
def test_no_line_is_wider_than_a_terminal(report):
    assert max(len(line) for line in check_text(report).splitlines()) <= 80


@pytest.mark.parametrize("report", CASES.values(), ids=CASES.keys())
def test_nothing_that_would_disturb_a_terminal_is_printed(report):
    assert all(letter.isprintable() or letter == "\n" for letter in check_text(report))


def test_long_names_that_differ_only_in_the_middle_are_told_apart_in_the_table():
    lines = check_text(CASES["long names"]).splitlines()
    names = [line.split()[0] for line in lines if line.endswith("refuted")]

    assert len(names) == len(set(names)) == WORST


def test_figures_too_long_for_the_first_line_are_left_to_the_table():
    assert first_line(CASES["all digits"]) == "gradient of drag refuted: of 12 entries, 12 refuted"


def test_a_hundred_thousand_entries_are_told_as_briefly_as_eleven():
    many = check_report(*[row(f"x[{i}]", verdict=REFUTED, digits=0.0) for i in range(100_000)])

    assert len(check_text(many).splitlines()) < 25
    assert "The 10 worst of 100,000 entries" in check_text(many)


def test_an_explanation_that_several_points_share_is_told_once():
    assert check_text(check_report(WRONG, diagnoses=(SIGN, SIGN))).count("Likely mistake") == 1


def test_many_explanations_are_cut_and_counted():
    many = tuple(Diagnosis(code=DiagnosisCode.UNKNOWN, text=f"point {i}", entries=()) for i in range(9))
    text = check_text(check_report(WRONG, diagnoses=many))

    assert text.count("Likely mistake") == 4
    assert "and 5 other likely mistakes, in the report's diagnoses" in text


def test_the_name_in_the_first_line_has_all_the_room_that_bound_and_digits_leave():
    name = "defects[5] by x[52]"
    report = check_report(row(name, 4.2, 2.1, 3e-12, 0.0, REFUTED), kind="jacobian", function="defects")

    assert first_line(report) == f"jacobian of defects refuted: {name} is claimed 4.2, found 2.1"


def test_a_name_too_long_for_the_first_line_stands_alone_in_the_second_with_its_ends_whole():
    name = "a_long_name_of_reynolds_numbers[5] by velocity_of_stage[52] @ point 1"
    report = check_report(row(name, 4.2, 2.1, 3e-12, 0.0, REFUTED), function="a_long_name_of_reynolds_numbers")
    first, second = check_text(report).splitlines()[:2]

    assert "[52] @ point 1 is claimed 4.2, found 2.1" in first
    assert second == f"  {name}"
