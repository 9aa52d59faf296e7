"""Reports as strict JSON, held to the schemas in the package."""

import json

import pytest
from jsonschema import Draft202012Validator

from gradcheck.errors import UsageError
from gradcheck.records.advice import Family
from gradcheck.records.estimate import Estimate, Scan
from gradcheck.records.finding import FindingCode, Severity
from gradcheck.records.report import Diagnosis, DirectionChecks
from gradcheck.records.verdict import DiagnosisCode, Verdict
from gradcheck.report.json_format import SCHEMAS, document, error_document, schema
from tests.records import CONFIRMED, INF, NAN, OPEN, WRONG, audit_report, check_report, finding, row
from tests.unit.test_audit_text import CASES as AUDITS

CHECK = check_report(
    WRONG,
    OPEN,
    row(claim=NAN, witness=-INF, bound=INF, digits=NAN),
    diagnoses=(Diagnosis(code=DiagnosisCode.UNKNOWN, text="no known mistake fits", entries=("chord",)),),
    findings=(finding(), finding(variable=None)),
    directions=DirectionChecks(claim=[1.0], witness=[NAN], bound=[INF], verdict=(CONFIRMED,)),
    notices=("x was given as integers",),
)


def strictly(text):
    """The document, read by a parser that knows no NaN."""

    def refuse(constant):
        raise AssertionError(f"{constant} is no JSON")

    return json.loads(text, parse_constant=refuse)


def complaints(name, text):
    return [error.message for error in Draft202012Validator(schema(name)).iter_errors(strictly(text))]


@pytest.mark.parametrize("name", SCHEMAS)
def test_a_schema_is_a_schema(name):
    Draft202012Validator.check_schema(schema(name))


@pytest.mark.parametrize("report", AUDITS.values(), ids=AUDITS.keys())
def test_an_audit_holds_to_its_schema(report):
    assert complaints("audit", document(report)) == []


@pytest.mark.parametrize("report", [CHECK, check_report(row()), check_report()], ids=["full", "short", "empty"])
def test_a_check_holds_to_its_schema(report):
    assert complaints("check", document(report)) == []


def test_several_checks_are_one_document_with_an_overall_verdict():
    text = document([CHECK, check_report(row())])

    assert complaints("check", text) == []
    assert strictly(text)["verdict"] == "refuted"
    assert len(strictly(text)["reports"]) == 2


def test_one_check_in_a_list_is_written_as_that_check():
    assert document([CHECK]) == document(CHECK)


def test_a_failure_holds_to_its_schema():
    assert complaints("error", error_document(3, "the model raised at its start point")) == []


def test_the_status_and_error_of_a_failed_audit_hold_to_its_schema():
    text = document(audit_report(evaluable=False, ready=False), status=3, error="the model raised")

    assert complaints("audit", text) == []


def test_nan_and_infinities_are_strings():
    entries = strictly(document(CHECK))["entries"]

    assert (entries["claim"][2], entries["witness"][2], entries["bound"][2]) == ("nan", "-inf", "inf")


def test_the_sentences_of_findings_and_diagnoses_are_part_of_the_document():
    content = strictly(document(CHECK))

    assert content["findings"][0]["text"] == "the slope jumps from 1 to 2"
    assert content["diagnoses"][0]["text"] == "no known mistake fits"


def test_the_rendered_report_is_no_part_of_the_document():
    assert "text" not in strictly(document(CHECK))


@pytest.mark.parametrize("missing", ["format", "version", "verdict", "entries", "seconds"])
def test_a_check_that_lacks_a_field_is_refused_by_the_schema(missing):
    content = strictly(document(CHECK))
    del content[missing]

    assert complaints("check", json.dumps(content))


@pytest.mark.parametrize(
    ("field", "value"), [("ready", "yes"), ("surprise", 1), ("format", "another"), ("evaluations", -1), ("version", 2)]
)
def test_an_audit_with_a_wrong_field_is_refused_by_the_schema(field, value):
    content = strictly(document(audit_report())) | {field: value}

    assert complaints("audit", json.dumps(content))


@pytest.mark.parametrize("name", ["audit", "check"])
def test_the_schemas_know_every_code_and_no_other(name):
    parts = schema(name)["$defs"]

    assert set(parts["verdict"]["enum"]) == set(Verdict)
    assert set(parts["finding"]["properties"]["code"]["enum"]) == set(FindingCode)
    assert set(parts["finding"]["properties"]["severity"]["enum"]) == set(Severity)
    assert set(parts["diagnosis"]["properties"]["code"]["enum"]) == set(DiagnosisCode)


def test_the_audit_schema_knows_both_families():
    assert set(schema("audit")["$defs"]["advice"]["properties"]["family"]["enum"]) == set(Family)


def test_what_two_schemas_share_is_the_same_in_both():
    audit, check = schema("audit")["$defs"], schema("check")["$defs"]
    shared = set(audit) & set(check)

    assert {"number", "finding", "location", "entries", "directions", "diagnosis", "verdict"} <= shared
    assert all(audit[name] == check[name] for name in shared)


def test_an_unknown_schema_is_refused_with_the_known_ones():
    with pytest.raises(UsageError, match="there are audit, check, error"):
        schema("adit")


def test_estimates_and_scans_name_their_format():
    estimate = Estimate(
        value=[NAN], bound=[INF], step=[0.1], noise=[0.0], evaluations=3, source="finite difference", reasons={}
    )
    scan = Scan(
        steps=[0.1],
        values=[1.0],
        errors=[INF],
        best_step=NAN,
        noise=0.0,
        order=NAN,
        value=1.0,
        bound=INF,
        along="span",
    )

    assert strictly(document(estimate))["format"] == "gradcheck-estimate"
    assert strictly(document(scan))["format"] == "gradcheck-scan"
