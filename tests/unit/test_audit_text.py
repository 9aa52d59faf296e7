"""The audit as text: verdict, what to do now, and then the evidence in order of weight."""

import numpy as np
import pytest

from gradcheck.records.advice import Advice, Family
from gradcheck.records.finding import FindingCode, Location, Severity
from gradcheck.records.report import Diagnosis, Scaling, Steps, WitnessRecord
from gradcheck.records.verdict import DiagnosisCode
from gradcheck.report.audit_text import audit_text
from tests.records import BLOCKER, INF, NAN, OPEN, WRONG, audit_report, check_report, finding, row

FACTOR = Diagnosis(
    code=DiagnosisCode.CONSTANT_FACTOR, text="the claim is twice the witness; multiply it by 1/2.", entries=("chord",)
)
REFUTED_CLAIM = check_report(WRONG, row(), diagnoses=(FACTOR,))
OPEN_CLAIM = check_report(OPEN, function="lift")
GOOD_CLAIM = check_report(row(), function="mass")
STEPS = Steps(
    function="drag",
    names=("span", "chord"),
    forward=[1e-8, 2e-8],
    forward_error=[1e-7, NAN],
    central=[1e-5, 2e-5],
    central_error=[1e-10, INF],
    noise=1e-16,
)
SCALING = Scaling(names=("span", "chord"), variables=[0.3, 1200.0], spread=1e5)
WITNESSES = (
    WitnessRecord(function="drag", source="complex step", works=True, bound=1e-15, evaluations=15, seconds=0.01),
    WitnessRecord(
        function="drag", source="jax", works=False, bound=NAN, evaluations=0, seconds=0.0, reason="numpy met a tracer"
    ),
)
FULL = {
    "ready": False,
    "claims": (GOOD_CLAIM, OPEN_CLAIM, REFUTED_CLAIM),
    "findings": (
        finding(**BLOCKER),
        finding(),
        finding(severity=Severity.REMARK, code=FindingCode.DEAD_VARIABLE, variable="sweep"),
    ),
    "witnesses": WITNESSES,
    "steps": (STEPS,),
    "scaling": SCALING,
    "complete": False,
    "not_looked_at": ("lift along 3 of 8 variables: the budget was spent",),
    "notices": ("span was given as an integer",),
    "accepted": ({"code": "noise", "function": "lift", "reason": "known, harmless"},),
    "variables": ({"name": "span", "unit": "m"}, {"name": "chord", "unit": None}),
}


def one_line(report):
    return " ".join(audit_text(report).split())


def section(report, title):
    """Lines of a section, without its title."""
    lines = audit_text(report).splitlines()
    start = lines.index(title)
    end = next((i for i, line in enumerate(lines) if i > start and line and not line.startswith(" ")), len(lines))
    return [line.strip() for line in lines[start + 1 : end] if line.strip()]


def test_the_sections_stand_in_the_order_in_which_they_are_needed():
    text = audit_text(audit_report(**FULL))
    titles = [
        "NOT READY",
        "What to do now",
        "Claims",
        "1 blocker",
        "1 hazard",
        "1 remark",
        "Silenced on request",
        "Witnesses",
        "Best steps for drag",
        "Scaling",
        "Advice",
        "To paste",
        "Caution",
        "Not looked at",
        "Notes",
        "Environment",
    ]
    places = [text.index(title if i == 0 else f"\n{title}") for i, title in enumerate(titles)]

    assert places == sorted(places)


def test_a_model_without_faults_is_ready_and_the_first_thing_to_do_is_to_start():
    report = audit_report(claims=(GOOD_CLAIM,))

    assert audit_text(report).startswith("READY: ")
    assert " ".join(section(report, "What to do now")) == (
        "1. Start a gradient-based solver: SQP, with derivatives from the hand-written gradient."
    )


def test_a_gradient_free_family_is_started_too():
    advice = Advice(family=Family.GRADIENT_FREE, derivatives=(), solvers=("CMA-ES",), reasons=())

    assert section(audit_report(advice=advice), "What to do now") == ["1. Start a gradient-free solver: CMA-ES."]


def test_a_refuted_claim_makes_the_verdict_and_its_mend_comes_first():
    report = audit_report(ready=False, claims=(GOOD_CLAIM, REFUTED_CLAIM), findings=(finding(**BLOCKER),))

    assert audit_text(report).startswith("NOT READY: wing has 1 refuted claim and 1 blocker")
    assert section(report, "What to do now") == [
        "1. Mend the gradient of drag: the claim is twice the witness; multiply it by",
        "1/2.",
        "2. Smooth the switch [jump in stress]",
    ]


def test_the_finding_about_a_refuted_claim_is_not_counted_a_second_time():
    about = finding(code=FindingCode.CLAIM_REFUTED, severity=Severity.BLOCKER, remedy="mend it")
    report = audit_report(ready=False, claims=(REFUTED_CLAIM,), findings=(about,))

    assert audit_text(report).startswith("NOT READY: wing has 1 refuted claim\n")
    assert not any(line.startswith("2. ") for line in section(report, "What to do now"))


def test_undecided_claims_and_missing_parts_are_doubts_not_faults():
    report = audit_report(claims=(OPEN_CLAIM,), complete=False)

    assert audit_text(report).startswith("READY, WITH DOUBTS: wing has 1 undecided claim and parts not looked at")
    assert "Do not rely on the gradient of lift yet: it is undecided." in one_line(report)


def test_a_model_that_gives_no_value_gets_neither_advice_nor_a_start():
    crash = finding(code=FindingCode.CRASH, severity=Severity.BLOCKER, text="stress raised ValueError at (0.3, 1.2)")
    text = audit_text(audit_report(ready=False, evaluable=False, complete=False, findings=(crash,)))

    assert text.startswith("NOT EVALUATED: wing gives no value at its start point")
    assert "What to do now\n  1. stress raised ValueError at (0.3, 1.2)\n" in text
    assert "Advice" not in text
    assert "solver" not in text


def test_the_worst_claim_stands_first_and_a_confirmed_one_takes_one_line():
    lines = section(audit_report(**FULL), "Claims")

    assert lines[0].startswith("gradient of drag refuted: chord is claimed 4.2")
    assert lines[-1] == "gradient of mass confirmed: the entry agrees to 12 digits"


def test_a_finding_tells_what_where_why_and_what_to_do():
    lines = section(audit_report(**FULL), "1 hazard: works, but badly or only in places")

    assert lines == [
        "HAZARD kink (the slope jumps): stress, variable span",
        "where: along span at 1.2 ± 1e-9 m",
        "what:  the slope jumps from 1 to 2",
        "do:    replace the table by a smooth spline",
        "seen:  left slope 1, right slope 2",
    ]


def test_a_finding_at_a_point_tells_the_point():
    report = audit_report(findings=(finding(where=Location(point=[1.0, 2.5])),))

    assert "where: at (1, 2.5)" in audit_text(report)


def test_a_finding_at_the_start_point_says_so():
    variables = ({"name": "span", "value": 1.0}, {"name": "chord", "value": 2.5})
    report = audit_report(findings=(finding(where=Location(point=[1.0, 2.5])),), variables=variables)

    assert "where: at the start point" in audit_text(report)


def test_a_finding_of_no_single_function_names_its_variable_only():
    integer = finding(code=FindingCode.INTEGER_VARIABLE, severity=Severity.BLOCKER, function="", variable="plies")
    text = audit_text(audit_report(ready=False, findings=(integer,)))

    assert "BLOCKER integer-variable (an integer variable): variable plies\n" in text
    assert "spline [integer-variable]" in text


def test_the_same_remedy_is_told_once():
    text = audit_text(audit_report(findings=(finding(), finding(variable="chord"))))

    assert text.count("replace the table by a smooth spline") == 1
    assert text.count("do:    as for kink above") == 1


def test_a_reason_that_several_functions_share_is_told_once():
    shared = [
        WitnessRecord(
            function=name, source="jax", works=False, bound=NAN, evaluations=0, seconds=0.0, reason="numpy met a tracer"
        )
        for name in ("drag", "lift", "mass")
    ]

    assert (
        section(audit_report(witnesses=shared), "Witnesses")[-1] == "- jax on drag, lift and mass: numpy met a tracer"
    )


def test_the_findings_of_a_claim_are_told_once():
    claim = check_report(WRONG, findings=(finding(),))
    text = audit_text(audit_report(ready=False, claims=(claim,), findings=(finding(),)))

    assert text.count("HAZARD kink") == 1


def test_a_witness_that_does_not_work_says_why():
    lines = section(audit_report(witnesses=WITNESSES), "Witnesses")

    assert lines[1].split() == ["drag", "complex", "step", "yes", "1e-15", "15", "10", "ms"]
    assert lines[-1] == "- jax on drag: numpy met a tracer"


def test_the_snippet_can_be_pasted_as_it_stands():
    snippet = "if True:\n    steps = [1e-4,\n             2e-5]  # " + "long " * 30
    advice = Advice(family=Family.GRADIENT_BASED, derivatives=(), solvers=(), reasons=(), snippet=snippet)

    assert f"\nTo paste\n{snippet}" in audit_text(audit_report(advice=advice))


def test_a_silenced_finding_is_shown_with_its_reason():
    assert section(audit_report(**FULL), "Silenced on request") == ["- noise, lift: known, harmless"]


def test_many_findings_are_cut_and_counted():
    text = audit_text(audit_report(findings=tuple(finding(variable=f"x[{i}]") for i in range(500))))

    assert "500 hazards" in text
    assert "and 488 more hazards, in the JSON report" in text


def test_many_claims_are_cut_and_counted():
    claims = tuple(check_report(row(), function=f"stress[{i}]") for i in range(200))

    assert section(audit_report(claims=claims), "Claims")[-1] == "and 180 more: 180 confirmed"


LONG = "a_very_long_name_of_a_wing.fuselage_frame[{}].thickness_of_the_skin_at_the_root"
MANY = [LONG.format(i) for i in range(300)]
CASES = {
    "full": audit_report(**FULL),
    "bare": audit_report(advice=Advice(family=Family.GRADIENT_BASED, derivatives=(), solvers=(), reasons=())),
    "long names": audit_report(
        name=LONG,
        ready=False,
        claims=(check_report(*[row(name, claim=NAN, digits=NAN) for name in MANY], OPEN, function=LONG),),
        findings=tuple(
            finding(
                severity=severity,
                function=LONG,
                variable=LONG,
                where=Location(point=np.full(300, 1 / 3), line=LONG, lower=-INF, upper=INF),
                text="word " * 80,
                evidence={LONG: NAN, "count": 10**9, "text": "z" * 200},
            )
            for severity in Severity
        ),
        witnesses=(
            WitnessRecord(
                function=LONG, source=LONG, works=True, bound=NAN, evaluations=10**9, seconds=1e7, reason="r" * 99
            ),
        ),
        steps=(
            Steps(
                function=LONG,
                names=tuple(MANY),
                forward=np.full(300, -1.2e-308),
                forward_error=np.full(300, INF),
                central=np.full(300, NAN),
                central_error=np.full(300, 1.2e-300),
                noise=NAN,
            ),
        ),
        scaling=Scaling(names=tuple(MANY), variables=np.full(300, 1e-300), spread=INF),
        environment={"path": "/" + "folder/" * 40, "threads": {"a": [1, 2, NAN]}},
    ),
}


@pytest.mark.parametrize("report", CASES.values(), ids=CASES.keys())
def test_no_line_is_wider_than_a_terminal(report):
    assert max(len(line) for line in audit_text(report).splitlines()) <= 80


@pytest.mark.parametrize("report", CASES.values(), ids=CASES.keys())
def test_no_line_ends_in_blanks_and_no_two_empty_lines_follow_each_other(report):
    text = audit_text(report)

    assert all(line == line.rstrip() for line in text.splitlines())
    assert "\n\n\n" not in text


def test_units_are_told_with_places():
    assert "at 1.2 ± 1e-9 m" in audit_text(CASES["full"])
