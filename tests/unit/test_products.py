"""Claims that are products of the derivative with a vector: J·v, Jᵀ·w, H·v."""

import warnings

import numpy as np
import pytest

import gradcheck
from gradcheck import DerivativeShapeError, DiagnosisCode, UsageError, Verdict
from gradcheck.checking import check_described
from gradcheck.records.finding import FindingCode

A = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0], [0.0, 1.0, 2.5], [1.0, 1.0, 1.0]])
X = [0.3, 0.5, -1.2]


def stresses(x):
    return A @ np.sin(x)


def jacobian(x):
    return A * np.cos(x)


def push(x, v):
    return jacobian(x) @ v


def pull(x, w):
    return jacobian(x).T @ w


def square(x):
    return A[:3] @ np.sin(x)


def energy(x):
    return float(np.exp(x[0]) * x[1] ** 2 + x[0] * x[2] ** 3)


def curvature(x):
    e = np.exp(x[0])
    return np.array(
        [
            [e * x[1] ** 2, 2 * e * x[1], 3 * x[2] ** 2],
            [2 * e * x[1], 2 * e, 0.0],
            [3 * x[2] ** 2, 0.0, 6 * x[0] * x[2]],
        ]
    )


def slope(x):
    e = np.exp(x[0])
    return np.array([e * x[1] ** 2 + x[2] ** 3, 2 * e * x[1], 3 * x[0] * x[2] ** 2])


def look(function=stresses, at=X, **options):
    """The report, whatever it says."""
    return gradcheck.check(function, at, **({"on_refuted": "return", "on_undecided": "pass"} | options))


def codes(report):
    return [diagnosis.code for diagnosis in report.diagnoses]


def refuted_names(report):
    verdicts = report.entries.verdict
    return {name for name, verdict in zip(report.entries.name, verdicts, strict=True) if verdict == Verdict.REFUTED}


# --- right products --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["jvp", "vjp"])
def test_a_right_product_is_silent(kind):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        report = gradcheck.check(stresses, X, **{kind: push if kind == "jvp" else pull})

    assert (report.kind, report.verdict) == (kind, Verdict.CONFIRMED)


@pytest.mark.parametrize("more", [{}, {"gradient": slope}], ids=["values", "gradient"])
def test_a_right_hessian_vector_product_is_confirmed_with_and_without_a_gradient(more):
    report = look(energy, hvp=lambda x, v: curvature(x) @ v, **more)

    assert report.verdict == Verdict.CONFIRMED


def test_unit_vectors_are_tried_where_they_are_few_and_random_ones_always():
    report = look(jvp=push)

    assert "stresses[2] along x[1]" in report.entries.name
    assert "stresses[2] along random v 4" in report.entries.name
    assert any("3 unit vectors and 4 random vectors of several lengths" in notice for notice in report.notices)


def test_many_variables_are_looked_at_along_random_vectors_only():
    n = 400
    report = look(lambda x: float(np.sin(x).sum()), np.linspace(0.1, 1.0, n), jvp=lambda x, v: np.cos(x) @ v)

    assert report.verdict == Verdict.CONFIRMED
    assert len(report.entries) == 8
    assert report.evaluations < 100


def test_a_pullback_of_many_variables_costs_the_same_for_any_number_of_them():
    def wave(x):
        return np.stack([np.sum(x[1:] * np.sin(x[:-1])), np.sum(x**2)])

    def back(x, w):
        inner = np.concatenate([x[1:] * np.cos(x[:-1]), [0.0]]) + np.concatenate([[0.0], np.sin(x[:-1])])
        return w[0] * inner + w[1] * 2 * x

    costs = {look(wave, np.linspace(0.1, 1.0, n), vjp=back).evaluations for n in (200, 4000)}
    wrong = look(wave, np.linspace(0.1, 1.0, 4000), vjp=lambda x, w: back(x, w) + np.eye(4000)[70] * 1e-2 * w[0])

    assert max(costs) < 80
    assert wrong.verdict == Verdict.REFUTED


def test_directions_says_how_many_random_vectors():
    report = look(jvp=push, directions=3)

    assert [name for name in report.entries.name if name.startswith("stresses[0]")] == [
        f"stresses[0] along random v {i}" for i in (1, 2, 3)
    ]


def test_the_index_of_an_entry_is_output_and_vector():
    report = look(jvp=push)

    place = report.entries.name.index("stresses[3] along x[1]")
    assert report.entries.index[place].tolist() == [3, 1]


def test_a_scalar_model_of_one_number_has_products_of_numbers():
    report = look(np.exp, 0.3, jvp=lambda x, v: np.exp(x) * v, vjp=lambda x, w: np.exp(x) * w)

    assert report.verdict == Verdict.CONFIRMED


def test_an_output_of_one_entry_keeps_its_axis_for_the_cotangent():
    seen = []

    def back(x, w):
        seen.append(np.shape(w))
        return w[0] * 2 * x

    report = look(lambda x: np.array([x @ x]), vjp=back)

    assert report.verdict == Verdict.CONFIRMED
    assert set(seen) == {(1,)}


def test_the_verdict_does_not_depend_on_the_seed():
    right = {str(look(jvp=push, vjp=pull, seed=seed).verdict) for seed in range(20)}
    wrong = {str(look(vjp=lambda x, w: pull(x, w) + w.sum(), seed=seed).verdict) for seed in range(20)}

    assert (right, wrong) == ({"confirmed"}, {"refuted"})


def test_a_product_from_differences_is_judged_by_the_tolerance_asked_for():
    def from_differences(x, v):
        return (stresses(x + 1e-6 * v) - stresses(x - 1e-6 * v)) / 2e-6

    assert look(jvp=from_differences, rel_tol=1e-5).verdict == Verdict.CONFIRMED
    assert look(jvp=from_differences, rel_tol=1e-12).verdict != Verdict.CONFIRMED


# --- structure -------------------------------------------------------------------------------------------------------


def product(a, b, mode="sum"):
    return float(np.sum(a**2) * b)


POINT = gradcheck.args(np.array([1.0, 2.0]), 3.0, mode="sum")


def test_a_tangent_of_several_arguments_is_a_tuple_of_parts():
    def forward(a, b, v, mode):
        da, db = v
        return 2 * a @ da * b + np.sum(a**2) * db

    assert look(product, POINT, jvp=forward).verdict == Verdict.CONFIRMED


def test_a_tangent_of_one_differentiated_argument_is_that_part_alone():
    report = look(product, POINT, wrt="a", jvp=lambda a, b, v, mode: 2 * a @ v * b)

    assert report.verdict == Verdict.CONFIRMED


def test_a_pullback_returns_the_structure_of_the_input():
    report = look(product, POINT, vjp=lambda a, b, w, mode: (w * 2 * a * b, w * np.sum(a**2)))

    assert report.verdict == Verdict.CONFIRMED
    assert "a[1] for w = 1" in report.entries.name


def test_a_vector_has_the_structure_of_a_dict():
    def loss(p):
        return float(p["w"] @ p["w"] * p["b"])

    def second(p, v):
        return {"w": 2 * p["b"] * v["w"] + 2 * p["w"] * v["b"], "b": 2 * p["w"] @ v["w"]}

    report = look(loss, {"w": np.array([1.0, 2.0]), "b": 2.0, "name": "n"}, hvp=second)

    assert report.verdict == Verdict.CONFIRMED
    assert 'p["b"] along p["w"][0]' in report.entries.name


# --- wrong products --------------------------------------------------------------------------------------------------


def test_the_transpose_is_told_where_its_shape_fits():
    told = look(square, jvp=lambda x, v: (A[:3] * np.cos(x)).T @ v)

    assert codes(told) == [DiagnosisCode.TRANSPOSED]
    assert "this is Jᵀ·v, where J·v is due" in told.diagnoses[0].text


def test_a_pullback_that_pushes_is_told():
    told = look(square, vjp=lambda x, w: (A[:3] * np.cos(x)) @ w)

    assert codes(told) == [DiagnosisCode.TRANSPOSED]
    assert "this is J·w, where Jᵀ·w is due" in told.diagnoses[0].text


def test_a_pullback_without_the_cotangent_is_told():
    told = look(vjp=lambda x, w: jacobian(x).sum(axis=0))

    assert codes(told) == [DiagnosisCode.IGNORES_COTANGENT]
    assert "returns the same as vjp(x, w)" in told.diagnoses[0].text


def test_a_gradient_that_stands_in_for_a_pullback_is_right_for_one_and_refuted_for_others():
    told = look(energy, vjp=lambda x, w: slope(x))

    assert codes(told) == [DiagnosisCode.IGNORES_COTANGENT]
    assert not any(name.endswith("for w = 1") for name in refuted_names(told))


def test_a_cotangent_that_one_path_ignores_is_told_with_its_entries():
    def back(x, w):
        whole = pull(x, w)
        whole[1] = jacobian(x)[:, 1].sum()
        return whole

    told = look(vjp=back)

    assert codes(told) == [DiagnosisCode.IGNORES_COTANGENT]
    assert told.diagnoses[0].entries == ("x[1]",)
    assert "in x[1]" in told.diagnoses[0].text


def test_a_normalised_vector_is_told():
    told = look(energy, hvp=lambda x, v: curvature(x) @ v / (np.linalg.norm(v) or 1.0))

    assert codes(told) == [DiagnosisCode.IGNORES_COTANGENT]
    assert "only the sign of the vector is used" in told.diagnoses[0].text


def test_a_lost_sign_is_told():
    assert codes(look(vjp=lambda x, w: -pull(x, w))) == [DiagnosisCode.SIGN_FLIPPED]


def test_a_factor_is_told():
    told = look(jvp=lambda x, v: 2 * push(x, v))

    assert codes(told) == [DiagnosisCode.CONSTANT_FACTOR]
    assert "the claim is 2 times the derivative" in told.diagnoses[0].text


def test_a_path_that_is_missing_for_one_variable_is_told_with_it():
    told = look(vjp=lambda x, w: pull(x, w) * np.array([1.0, 0.0, 1.0]))

    assert DiagnosisCode.ZERO_ENTRY in codes(told)
    assert all(name.startswith("x[1]") for name in refuted_names(told))


def test_the_first_line_says_what_is_wrong():
    told = str(look(energy, hvp=lambda x, v: 2 * curvature(x) @ v))

    assert told.startswith("hvp of energy refuted: x[")
    assert len(told.partition("\n")[0]) <= 80


# --- at a kink, with noise, within bounds ----------------------------------------------------------------------------


def test_at_a_kink_a_product_between_the_slopes_is_undecided_and_one_outside_is_refuted():
    def hinge(x):
        return abs(x[0]) * x[1]

    between = look(hinge, [0.0, 1.0], jvp=lambda x, v: 0.3 * v[0])
    outside = look(hinge, [0.0, 1.0], jvp=lambda x, v: 3.0 * v[0])

    assert (between.verdict, outside.verdict) == (Verdict.UNDECIDED, Verdict.REFUTED)


def test_a_model_is_never_called_outside_its_bounds():
    outside = []

    def root(x):
        if not ((np.asarray(x) >= 0) & (np.asarray(x) <= 1)).all():
            outside.append(np.array(x))
        return float(np.sqrt(x[0]) * x[1] ** 2 + x[2])

    def first(x):
        return np.array([0.5 * x[1] ** 2 / np.sqrt(x[0]), 2 * x[1] * np.sqrt(x[0]), 1.0])

    def second(x):
        mixed = x[1] / np.sqrt(x[0])
        return np.array([[-0.25 * x[0] ** -1.5 * x[1] ** 2, mixed, 0.0], [mixed, 2 * np.sqrt(x[0]), 0.0], [0.0] * 3])

    report = look(
        root,
        [0.5, 1.0, 0.3],
        bounds=(0.0, 1.0),
        jvp=lambda x, v: first(x) @ v,
        vjp=lambda x, w: first(x) * w,
        hvp=lambda x, v: second(x) @ v,
    )

    assert outside == []
    assert report.verdict == Verdict.CONFIRMED


def test_a_whole_number_variable_is_in_no_vector():
    seen = []

    def forward(x, v):
        seen.append(v[1])
        return 2 * x[0] * x[1] * v[0]

    problem = gradcheck.Problem(
        variables=[gradcheck.Variable("span", 1.5), gradcheck.Variable("plies", 4, integer=True)],
        objective=gradcheck.Function(lambda x: x[0] ** 2 * x[1], jvp=forward),
    )
    report = check_described(problem)[0]

    assert report.verdict == Verdict.CONFIRMED
    assert set(seen) == {0.0}


def test_a_model_of_many_points_at_once_has_products_of_one_point():
    report = look(lambda x: np.sin(x) @ A.T, jvp=push, vjp=pull, batched=True)

    assert report.verdict == Verdict.CONFIRMED


# --- what no product is ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("claims", "words"),
    [
        ({"jvp": lambda x, v: pull(x, np.ones(4))}, "(3,) is the shape of x: it looks like Jᵀ·v, which is a vjp"),
        ({"vjp": lambda x, w: push(x, np.ones(3))}, "(4,) is the shape of the output: it looks like J·w"),
        ({"jvp": lambda x, v: np.ones((4, 1))}, "right number of entries: reshape it to (4,)"),
        ({"vjp": lambda x, w: np.ones((3, 3))}, "it looks like the whole matrix: multiply it by the vector"),
        ({"hvp": lambda x, v: v}, "the model returns shape (4,) (4 outputs), so hvp cannot be checked"),
    ],
    ids=["jvp of the other side", "vjp of the other side", "column", "matrix", "hvp of a vector model"],
)
def test_a_wrong_shape_is_an_error_that_names_both_shapes(claims, words):
    with pytest.raises(DerivativeShapeError) as told:
        look(**claims)

    assert words in str(told.value)


@pytest.mark.parametrize(
    ("claim", "words"),
    [
        (lambda x, v: None, "jvp returned None; does it lack a return statement?"),
        (lambda x, v: 1j * push(x, v), "complex"),
        (lambda x, v: [[1.0], [2.0, 3.0]], "an array of real numbers is needed"),
        (lambda x, v: np.array([object()] * 4), "an array of real numbers is needed"),
        (np.ones(4), "give a function jvp(x, v)"),
        ("torchlight", "names no derivative source"),
    ],
    ids=["none", "complex", "ragged", "object", "array", "source"],
)
def test_what_cannot_be_a_product_is_one_clear_error(claim, words):
    with pytest.raises(UsageError) as told:
        look(jvp=claim)

    assert words in str(told.value)


def test_a_claim_that_raises_for_some_vectors_is_a_finding_and_refuted():
    def picky(x, v):
        if np.linalg.norm(v) > 5:
            raise ValueError("the tangent is too long")
        return push(x, v)

    told = look(jvp=picky)

    assert told.verdict == Verdict.REFUTED
    assert [finding.code for finding in told.findings] == [FindingCode.CRASH]
    assert "the tangent is too long" in told.diagnoses[0].text
    assert all("random v 3" in name for name in refuted_names(told))


def test_a_claim_that_does_not_take_a_vector_is_a_finding():
    told = look(jvp=jacobian)

    assert told.verdict == Verdict.REFUTED
    assert "for every vector" in told.diagnoses[0].text


def test_a_product_that_is_not_finite_is_refuted():
    told = look(jvp=lambda x, v: push(x, v) * np.array([1.0, np.nan, 1.0, 1.0]))

    assert told.verdict == Verdict.REFUTED
    assert all(name.startswith(("stresses[1]", "jvp(0)")) for name in refuted_names(told))


def test_a_product_that_writes_into_x_is_told():
    def careless(x, v):
        x += 1.0
        return push(x - 1.0, v)

    told = look(jvp=careless)

    assert FindingCode.MUTATES_INPUT in [finding.code for finding in told.findings]


def test_a_spent_budget_leaves_a_product_undecided():
    report = look(jvp=push, budget=9)

    assert report.verdict == Verdict.UNDECIDED
    assert report.evaluations <= 9


def test_a_right_vjp_is_not_refuted_beside_a_wrong_jvp():
    x = np.array([0.5, 1.5, 2.0])
    report = gradcheck.check(
        lambda x: x**2, at=x, jvp=lambda x, v: 4 * x * v, vjp=lambda x, w: 2 * x * w, on_refuted="return"
    )
    assert {part.kind: str(part.verdict) for part in report.parts} == {"jvp": "refuted", "vjp": "confirmed"}
