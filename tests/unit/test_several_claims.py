"""Several claims in one call, and the value that comes with a gradient."""

import json
import pickle
import warnings

import numpy as np
import pytest
from jsonschema import Draft202012Validator

import gradcheck
from gradcheck import DerivativeMismatch, DerivativeShapeError, DiagnosisCode, UndecidedWarning, UsageError, Verdict
from gradcheck.checking import check_described
from gradcheck.report.json_format import schema

X = [0.4, 1.3]


def loss(x):
    return float(np.exp(x[0]) * x[1] ** 2)


def slope(x):
    return np.exp(x[0]) * np.array([x[1] ** 2, 2 * x[1]])


def curvature(x):
    return np.exp(x[0]) * np.array([[x[1] ** 2, 2 * x[1]], [2 * x[1], 2.0]])


def look(function=loss, at=X, **options):
    """The report, whatever it says."""
    return gradcheck.check(function, at, **({"on_refuted": "return", "on_undecided": "pass"} | options))


ALL = {
    "gradient": slope,
    "hessian": curvature,
    "jvp": lambda x, v: slope(x) @ v,
    "vjp": lambda x, w: slope(x) * w,
    "hvp": lambda x, v: curvature(x) @ v,
    "value_and_gradient": lambda x: (loss(x), slope(x)),
}

# --- several claims --------------------------------------------------------------------------------------------------


def test_every_kind_of_claim_is_checked_in_one_call():
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        report = gradcheck.check(loss, X, **ALL)

    assert report.verdict == Verdict.CONFIRMED
    assert [part.kind for part in report.parts] == list(ALL)


def test_a_single_claim_has_no_parts():
    assert look(gradient=slope).parts == ()


def test_the_decisive_claim_is_on_top():
    report = look(gradient=slope, hessian=lambda x: 2 * curvature(x))

    assert (report.kind, report.verdict) == ("hessian", Verdict.REFUTED)
    assert [str(part.verdict) for part in report.parts] == ["confirmed", "refuted"]
    assert report.diagnoses == report.parts[1].diagnoses != ()


def test_evaluations_are_those_of_all_claims():
    calls = []

    def counted(x):
        calls.append(1)
        return loss(x)

    report = look(counted, **ALL)

    assert report.evaluations == len(calls) == sum(part.evaluations for part in report.parts)


def test_a_wrong_claim_among_right_ones_raises_and_the_text_tells_all():
    with pytest.raises(DerivativeMismatch) as told:
        gradcheck.check(loss, X, hessian=lambda x: -curvature(x), gradient=slope)

    text = str(told.value)
    assert text.startswith("hessian of loss refuted: ")
    assert "\n\ngradient of loss confirmed: " in text
    assert text.splitlines()[-1].startswith("2 claims, 1 refuted, 1 confirmed: ")


def test_the_text_fits_into_80_columns():
    for report in (look(**ALL), look(hessian=lambda x: -curvature(x), gradient=slope, vjp=lambda x, w: slope(x))):
        assert max(map(len, str(report).splitlines())) <= 80


def test_an_undecided_claim_beside_a_confirmed_one_warns_and_does_not_raise():
    rng = np.random.default_rng(1)

    def noisy(x):
        return loss(x) + 1e-8 * rng.normal()

    with pytest.warns(UndecidedWarning):
        report = gradcheck.check(noisy, X, rel_tol=1e-7, gradient=slope, hessian=curvature, budget=200)

    assert report.verdict == Verdict.UNDECIDED


def test_several_claims_at_several_points():
    report = look(at=gradcheck.points([0.4, 1.3], [1.1, 0.7]), gradient=slope, hvp=ALL["hvp"])

    assert [part.kind for part in report.parts] == ["gradient", "hvp"]
    assert all(name.endswith(("@ point 0", "@ point 1")) for part in report.parts for name in part.entries.name)


def test_no_claim_at_all_is_an_error():
    with pytest.raises(UsageError, match="check needs at least one claim"):
        gradcheck.check(loss, X)


def test_a_report_travels():
    report = look(gradient=slope, hessian=lambda x: -curvature(x))

    again = pickle.loads(pickle.dumps(report))

    assert str(again) == str(report)
    assert [part.kind for part in again.parts] == ["gradient", "hessian"]


@pytest.mark.parametrize(
    "claims", [ALL, {"vjp": lambda x, w: slope(x)}, {"value_and_gradient": lambda x: (0, slope(x))}]
)
def test_the_document_holds_to_the_schema(claims):
    document = json.loads(json.dumps(look(**claims).to_dict(), allow_nan=False))

    Draft202012Validator(schema("check")).validate(document)


def test_an_audit_holds_to_its_schema_with_every_kind_of_claim():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("a", 0.4), gradcheck.Variable("b", 1.3)],
        objective=gradcheck.Function(loss, **ALL),
    )
    document = json.loads(json.dumps(gradcheck.audit(problem, budget=600).to_dict(), allow_nan=False))

    Draft202012Validator(schema("audit")).validate(document)


# --- several functions -----------------------------------------------------------------------------------------------


def stresses(x):
    return np.array([x[0] * x[1], np.exp(x[1]), x[0] ** 2])


def stress_jacobian(x):
    return np.array([[x[1], x[0]], [0.0, np.exp(x[1])], [2 * x[0], 0.0]])


def problem_of(**changes):
    claims = {
        "jacobian": stress_jacobian,
        "jvp": lambda x, v: stress_jacobian(x) @ v,
        "vjp": lambda x, w: stress_jacobian(x).T @ w,
    }
    return gradcheck.Problem(
        variables=[gradcheck.Variable("span", 0.4), gradcheck.Variable("chord", 1.3)],
        objective=gradcheck.Function(loss, gradient=slope, hessian=curvature, hvp=ALL["hvp"]),
        constraints={"stress": gradcheck.Function(stresses, **(claims | changes), upper=10.0)},
    )


def test_all_claims_of_all_functions_are_checked():
    reports = check_described(problem_of())

    assert [(report.function, report.kind, str(report.verdict)) for report in reports] == [
        ("objective", "gradient", "confirmed"),
        ("objective", "hessian", "confirmed"),
        ("objective", "hvp", "confirmed"),
        ("stress", "jacobian", "confirmed"),
        ("stress", "jvp", "confirmed"),
        ("stress", "vjp", "confirmed"),
    ]


def test_an_audit_finds_the_wrong_product_of_a_constraint():
    report = gradcheck.audit(problem_of(vjp=lambda x, w: 2 * stress_jacobian(x).T @ w))

    wrong = [claim for claim in report.claims if claim.verdict == Verdict.REFUTED]
    assert [(claim.function, claim.kind) for claim in wrong] == [("stress", "vjp")]
    assert not report.ready
    assert "Mend the vjp of stress" in str(report)


def test_an_output_of_one_run_has_claims_of_every_kind():
    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("span", 0.4), gradcheck.Variable("chord", 1.3)],
        model=lambda x: {"loss": loss(x), "stress": stresses(x)},
        objective=gradcheck.Output("loss", gradient=slope, hvp=ALL["hvp"]),
        constraints={"stress": gradcheck.Output("stress", vjp=lambda x, w: stress_jacobian(x).T @ w)},
    )

    assert {str(report.verdict) for report in check_described(problem)} == {"confirmed"}


def test_a_decorated_model_has_claims_of_every_kind():
    described = gradcheck.model(at=X, gradient=slope, hvp=ALL["hvp"])(lambda x: loss(x))

    assert [part.kind for part in gradcheck.check(described).parts] == ["gradient", "hvp"]
    assert [claim.kind for claim in gradcheck.audit(described).claims] == ["gradient", "hvp"]


def test_a_combination_of_objectives_is_an_output_like_any_other():
    weights = np.array([1.0, 0.5, 2.0])
    report = look(
        stresses,
        output=lambda r: weights @ r,
        gradient=lambda x: weights @ stress_jacobian(x),
        hessian=lambda x: np.array([[4.0, 1.0], [1.0, 0.5 * np.exp(x[1])]]),
    )

    assert report.verdict == Verdict.CONFIRMED


def test_scores_of_observations_are_the_jacobian_of_their_contributions():
    y, z = np.array([1.2, 0.4, 2.2, 0.9]), np.array([0.3, -0.5, 1.0, 0.1])

    def contributions(p):
        return -((y - p[0] - p[1] * z) ** 2)

    def scores(p):
        gap = 2 * (y - p[0] - p[1] * z)
        return np.stack([gap, gap * z], axis=1)

    both = look(contributions, [0.5, 1.0], jacobian=scores)
    total = look(contributions, [0.5, 1.0], output=np.sum, gradient=lambda p: scores(p).sum(axis=0))

    assert (both.verdict, total.verdict) == (Verdict.CONFIRMED, Verdict.CONFIRMED)


# --- value and gradient ----------------------------------------------------------------------------------------------


def test_a_right_value_is_an_entry_of_its_own():
    report = look(value_and_gradient=ALL["value_and_gradient"])

    assert report.entries.name == ("value", "x[0]", "x[1]")
    assert report.entries.index.tolist() == [-1, 0, 1]
    assert report.verdict == Verdict.CONFIRMED


@pytest.mark.parametrize(
    ("value", "code", "words"),
    [
        (lambda f: f - 3.0, DiagnosisCode.UNKNOWN, "it is off by -3"),
        (lambda f: -f, DiagnosisCode.SIGN_FLIPPED, "is one maximized and the other minimized"),
        (lambda f: f / 2, DiagnosisCode.CONSTANT_FACTOR, "it is 0.5 times the model's"),
        (lambda f: np.nan, DiagnosisCode.UNKNOWN, "look for an overflow"),
    ],
    ids=["term", "sign", "half", "nan"],
)
def test_a_wrong_value_is_refuted_and_its_mistake_named(value, code, words):
    told = look(value_and_gradient=lambda x: (value(loss(x)), slope(x)))

    assert [str(verdict) for verdict in told.entries.verdict] == ["refuted", "confirmed", "confirmed"]
    assert [diagnosis.code for diagnosis in told.diagnoses] == [code]
    assert words in told.diagnoses[0].text


def test_a_wrong_gradient_beside_a_right_value_is_refuted():
    told = look(value_and_gradient=lambda x: (loss(x), 2 * slope(x)))

    assert [str(verdict) for verdict in told.entries.verdict] == ["confirmed", "refuted", "refuted"]


def test_a_vector_model_has_values_and_a_jacobian():
    report = look(stresses, value_and_gradient=lambda x: (stresses(x), stress_jacobian(x)))

    assert report.verdict == Verdict.CONFIRMED
    assert report.entries.index.shape == (9, 2)
    assert report.entries.name[:3] == ("value[0]", "value[1]", "value[2]")


def test_a_value_summed_in_another_order_is_confirmed():
    terms = np.random.default_rng(0).normal(size=1000) * 1e3

    def total(x):
        return float(np.sum(terms * x[0]))

    report = look(total, [1.1], value_and_gradient=lambda x: (sum(float(t) * x[0] for t in terms), [np.sum(terms)]))

    assert report.verdict == Verdict.CONFIRMED


@pytest.mark.parametrize(
    ("claim", "error", "words"),
    [
        (slope, UsageError, "must return a pair"),
        (lambda x: (loss(x), slope(x), 1), UsageError, "a tuple of 3"),
        (lambda x: (slope(x), loss(x)), DerivativeShapeError, "in this order"),
        (lambda x: (None, slope(x)), UsageError, "returned None"),
        (lambda x: (loss(x), slope(x)[:1]), DerivativeShapeError, "shape (2,) is expected"),
    ],
    ids=["gradient alone", "three", "other order", "none", "short"],
)
def test_what_is_no_pair_of_value_and_gradient_is_an_error(claim, error, words):
    with pytest.raises(error) as told:
        look(value_and_gradient=claim)

    assert words in str(told.value)


def _two_variables(**claims):
    variables = [gradcheck.Variable(name, 0.5, lower=0.0, upper=2.0) for name in ("span", "chord")]
    return gradcheck.Problem(
        variables=variables, objective=gradcheck.Function(lambda x: float(x[0] ** 2 * x[1]), **claims)
    )


def test_an_audit_holds_the_value_beside_a_gradient_against_the_model_at_the_same_point():
    problem = _two_variables(
        value_and_gradient=lambda x: (x[0] ** 2 * x[1], np.array([2 * x[0] * x[1], x[0] ** 2])),
    )
    report = gradcheck.audit(problem, samples=3)
    assert [str(claim.verdict) for claim in report.claims] == ["confirmed"] * 4
    assert all("value" in claim.entries.name for claim in report.claims)
