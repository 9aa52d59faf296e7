"""Claims of second derivatives: right ones confirmed, wrong ones refuted, the mistake named."""

import numpy as np
import pytest
import scipy.sparse as sparse

import gradcheck
from gradcheck import DerivativeShapeError, DiagnosisCode, UsageError, Verdict

X = np.array([0.4, 1.3, -0.8])


def energy(x):
    return float(np.exp(x[0]) * x[1] ** 2 + x[0] * x[2] ** 3 + np.sin(x[1] * x[2]))


def slope(x):
    e, c = np.exp(x[0]), np.cos(x[1] * x[2])
    return np.array([e * x[1] ** 2 + x[2] ** 3, 2 * e * x[1] + x[2] * c, 3 * x[0] * x[2] ** 2 + x[1] * c])


def curvature(x):
    e, c, s = np.exp(x[0]), np.cos(x[1] * x[2]), np.sin(x[1] * x[2])
    h = np.zeros((3, 3))
    h[0, 0], h[0, 1], h[0, 2] = e * x[1] ** 2, 2 * e * x[1], 3 * x[2] ** 2
    h[1, 1], h[1, 2], h[2, 2] = 2 * e - x[2] ** 2 * s, c - x[1] * x[2] * s, 6 * x[0] * x[2] - x[1] ** 2 * s
    return h + np.triu(h, 1).T


def changed(change):
    """A claim that spoils the right Hessian."""

    def claim(x):
        h = curvature(x)
        return change(h)

    return claim


def at(i, j, factor):
    def change(h):
        h[i, j] *= factor
        h[j, i] = h[i, j]
        return h

    return changed(change)


def look(function=energy, point=X, **options):
    """The report, whatever it says."""
    return gradcheck.check(function, point, **({"on_refuted": "return", "on_undecided": "pass"} | options))


def second(report):
    """The part on second derivatives."""
    return next(part for part in report.parts or (report,) if part.kind in ("hessian", "hvp"))


def codes(report):
    return [diagnosis.code for diagnosis in second(report).diagnoses]


def refuted_places(report):
    entries = second(report).entries
    return {
        tuple(place)
        for place, verdict, source in zip(entries.index.tolist(), entries.verdict, entries.source, strict=True)
        if verdict == Verdict.REFUTED and source != "identity"
    }


WAYS = pytest.mark.parametrize("more", [{}, {"gradient": slope}], ids=["by values", "by the gradient"])

# --- right ones ------------------------------------------------------------------------------------------------------


@WAYS
@pytest.mark.parametrize(
    "claim",
    [curvature, curvature(X), lambda x: curvature(x).tolist(), lambda x: sparse.csr_matrix(curvature(x))],
    ids=["callable", "array", "lists", "sparse"],
)
def test_a_right_hessian_is_confirmed(claim, more):
    report = look(hessian=claim, **more)

    assert report.verdict == Verdict.CONFIRMED
    assert second(report).entries.digits.min() > 7


def test_a_confirmed_gradient_is_the_witness_and_the_report_says_so():
    report = look(hessian=curvature, gradient=slope)

    told = second(report)
    assert set(told.entries.source) == {"differences of the confirmed gradient"}
    assert any(notice.startswith("held against differences of the confirmed gradient") for notice in told.notices)
    assert told.evaluations < 10 < second(look(hessian=curvature)).evaluations


def test_a_gradient_that_is_refuted_is_no_witness():
    report = look(hessian=curvature, gradient=lambda x: 2 * slope(x))

    assert [str(part.verdict) for part in report.parts] == ["refuted", "confirmed"]
    assert any("was not confirmed, so the values were differenced" in notice for notice in second(report).notices)


@pytest.mark.parametrize("claim", [slope(X), lambda x: slope(X)], ids=["array", "constant"])
def test_a_gradient_that_is_right_at_the_point_alone_is_no_witness(claim):
    report = look(hessian=curvature, gradient=claim)

    assert report.verdict == Verdict.CONFIRMED
    assert set(second(report).entries.source) == {"finite difference"}


def test_a_gradient_that_fails_elsewhere_leaves_the_values():
    def fragile(x):
        if not np.array_equal(x, X):
            raise RuntimeError("only here")
        return slope(x)

    assert look(hessian=curvature, gradient=fragile).verdict == Verdict.CONFIRMED


def test_value_and_gradient_serves_as_the_witness_as_well():
    report = look(hessian=curvature, value_and_gradient=lambda x: (energy(x), slope(x)))

    assert report.verdict == Verdict.CONFIRMED
    assert set(second(report).entries.source) == {"differences of the confirmed value_and_gradient"}


@WAYS
def test_a_true_zero_is_confirmed(more):
    report = look(lambda x: x[0] ** 3 + x[1] ** 3, [1.3, 0.7], hessian=lambda x: np.diag(6 * np.asarray(x)))

    assert report.verdict == Verdict.CONFIRMED


@pytest.mark.parametrize("more", [{}, {"gradient": lambda x: 2 * (x - np.array([1.0, 2.0]))}])
def test_the_hessian_at_an_optimum_is_confirmed(more):
    report = look(lambda x: (x[0] - 1) ** 2 + (x[1] - 2) ** 2, [1.0, 2.0], hessian=2 * np.eye(2), **more)

    assert report.verdict == Verdict.CONFIRMED


def test_a_model_of_one_number_has_a_hessian_of_one():
    assert look(np.exp, 0.3, hessian=np.exp).verdict == Verdict.CONFIRMED
    assert look(np.exp, 0.3, gradient=np.exp, hessian=lambda x: 2 * np.exp(x)).verdict == Verdict.REFUTED


A = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])


def waves(x):
    return A @ np.sin(x)


@pytest.mark.parametrize("more", [{}, {"jacobian": lambda x: A * np.cos(x)}], ids=["by values", "by the jacobian"])
def test_a_vector_model_has_a_hessian_for_each_output(more):
    def right(x):
        return np.stack([np.diag(-row * np.sin(x)) for row in A])

    def wrong(x):
        h = right(x)
        h[1, 2, 2] *= 1.5
        return h

    assert look(waves, X, hessian=right, **more).verdict == Verdict.CONFIRMED
    told = look(waves, X, hessian=wrong, **more)
    assert refuted_places(told) == {(5, 2)}
    assert "(waves[1]: x[2], x[2])" in str(told)


def test_a_nested_input_takes_a_nesting_of_nestings():
    def product(a, b):
        return float(np.sum(a**2) * b)

    report = look(
        product,
        gradcheck.args(np.array([1.0, 2.0]), 3.0),
        hessian=lambda a, b: ((2 * b * np.eye(2), 2 * a), (2 * a, 0.0)),
    )

    assert report.verdict == Verdict.CONFIRMED
    assert "(a[1], b)" in report.entries.name


# --- wrong ones ------------------------------------------------------------------------------------------------------


@WAYS
@pytest.mark.parametrize("place", [(0, 0), (0, 1), (1, 2)])
@pytest.mark.parametrize("factor", [1 + 1e-5, 1.37, -1.0, 0.0])
def test_one_wrong_entry_is_found(place, factor, more):
    told = look(hessian=at(*place, factor), **more)

    assert refuted_places(told) == {place, place[::-1]}


@WAYS
def test_the_sign_is_told(more):
    assert codes(look(hessian=changed(np.negative), **more)) == [DiagnosisCode.SIGN_FLIPPED]


@WAYS
def test_a_diagonal_counted_twice_is_told(more):
    told = look(hessian=changed(lambda h: h + np.diag(np.diag(h))), **more)

    assert codes(told) == [DiagnosisCode.CONSTANT_FACTOR]
    assert "all 3 entries on the diagonal are 2 times the second derivatives" in second(told).diagnoses[0].text


@WAYS
def test_mixed_terms_counted_twice_are_told(more):
    told = look(hessian=changed(lambda h: 2 * h - np.diag(np.diag(h))), **more)

    assert codes(told) == [DiagnosisCode.CONSTANT_FACTOR]
    assert "beside the diagonal are 2 times" in second(told).diagnoses[0].text


@WAYS
@pytest.mark.parametrize(("triangle", "name"), [(np.triu, "upper"), (np.tril, "lower")])
def test_one_triangle_is_told(triangle, name, more):
    told = look(hessian=changed(triangle), **more)

    assert codes(told) == [DiagnosisCode.ZERO_ENTRY]
    assert f"only the {name} triangle is filled, and it is right" in second(told).diagnoses[0].text


@WAYS
def test_asymmetry_is_an_entry_of_its_own(more):
    def skew(h):
        h[0, 1] *= 1.01
        return h

    told = second(look(hessian=changed(skew), **more))

    assert "H[x[0], x[1]] = H[x[1], x[0]]" in told.entries.name
    assert told.entries.source[told.entries.name.index("H[x[0], x[1]] = H[x[1], x[0]]")] == "identity"


def test_asymmetry_refutes_where_no_witness_can_speak():
    def skew(h):
        h[0, 1] *= 1.01
        return h

    told = look(hessian=changed(skew), budget=5)

    assert told.verdict == Verdict.REFUTED
    assert "a Hessian is symmetric, and this is not" in told.diagnoses[0].text


@WAYS
def test_the_outer_product_of_the_gradient_is_told(more):
    told = look(hessian=lambda x: np.outer(slope(x), slope(x)), **more)

    assert codes(told) == [DiagnosisCode.MISSING_PATH]
    assert "the outer product of one vector with itself" in second(told).diagnoses[0].text


TIMES = np.arange(1, 7) / 3
MEASURED = np.array([1.0, 0.8, -0.5, 1.2, 2.9, 2.1])


def residuals(p):
    return p[0] * np.exp(-p[1] * TIMES) - MEASURED


def sensitivities(p):
    decay = np.exp(-p[1] * TIMES)
    return np.stack([decay, -p[0] * TIMES * decay], axis=1)


@pytest.mark.parametrize("more", [{}, {"gradient": lambda p: sensitivities(p).T @ residuals(p)}])
def test_a_gauss_newton_matrix_for_an_indefinite_hessian_is_told(more):
    told = look(
        lambda p: float(residuals(p) @ residuals(p) / 2),
        [1.5, 0.7],
        hessian=lambda p: sensitivities(p).T @ sensitivities(p),
        **more,
    )

    assert codes(told) == [DiagnosisCode.MISSING_PATH]
    assert "Gauss-Newton" in second(told).diagnoses[0].text


def test_a_right_hessian_with_one_wrong_entry_is_called_no_approximation():
    told = look(
        lambda x: float(np.exp(x[0]) * x[1] ** 2),
        [1.0, 2.0],
        hessian=lambda x: np.exp(x[0]) * np.array([[x[1] ** 2, 2 * x[1]], [2 * x[1], 4.0]]),
    )

    assert codes(told) == [DiagnosisCode.CONSTANT_FACTOR]


def test_the_first_line_names_the_entry():
    told = str(look(hessian=at(0, 1, 2.0)))

    assert told.startswith("hessian of energy refuted: (x[0], x[1]) is claimed ")


# --- Hessian-vector products -----------------------------------------------------------------------------------------


@WAYS
def test_a_wrong_hessian_vector_product_is_found_with_its_entries(more):
    told = look(hvp=lambda x, v: at(1, 2, 2.0)(x) @ v, **more)

    units = {place for place in refuted_places(told) if place[1] < 3}
    assert units == {(1, 2), (2, 1)}
    assert codes(told) == [DiagnosisCode.CONSTANT_FACTOR]


def test_what_cancels_for_one_random_vector_does_not_decide():
    """Second differences show a product with seven digits only; its entries, which are confirmed, show the rest."""

    def power(x):
        return float(1e3 + np.sum(x**4) + np.prod(x[:3]))

    def product(x, v):
        h = np.diag(12 * x**2)
        for i, j, k in ((0, 1, 2), (0, 2, 1), (1, 2, 0)):
            h[i, j] = h[j, i] = x[k]
        return h @ v

    points = [np.random.default_rng(seed).uniform(0.2, 1.5, 6) for seed in range(12)]

    assert {str(look(power, x, hvp=product, seed=seed).verdict) for seed, x in enumerate(points)} == {"confirmed"}


def test_a_gauss_newton_product_is_told():
    told = look(
        lambda p: float(residuals(p) @ residuals(p) / 2),
        [1.5, 0.7],
        hvp=lambda p, v: sensitivities(p).T @ (sensitivities(p) @ v),
    )

    assert codes(told) == [DiagnosisCode.MISSING_PATH]


# --- many variables --------------------------------------------------------------------------------------------------

MANY = np.linspace(0.2, 1.5, 300)


def chain(x):
    return float(np.sum(x[1:] * np.sin(x[:-1])))


def chain_slope(x):
    return np.concatenate([x[1:] * np.cos(x[:-1]), [0.0]]) + np.concatenate([[0.0], np.sin(x[:-1])])


def chain_curvature(x):
    own, mixed = np.concatenate([-x[1:] * np.sin(x[:-1]), [0.0]]), np.cos(x[:-1])
    return sparse.diags([mixed, own, mixed], [-1, 0, 1]).tocsr()


@pytest.mark.parametrize("more", [{}, {"gradient": chain_slope}], ids=["by values", "by the gradient"])
def test_many_variables_are_looked_at_along_random_directions(more):
    right = look(chain, MANY, hessian=chain_curvature, **more)

    assert right.verdict == Verdict.CONFIRMED
    assert any("random directions" in notice and "would have been seen" in notice for notice in second(right).notices)
    assert second(right).evaluations < 700


def spoilt(x):
    h = chain_curvature(x).tolil()
    h[70, 71] = h[71, 70] = 1.01 * h[70, 71]
    return h.tocsr()


def test_the_wrong_entries_of_many_are_named_by_the_gradient():
    told = look(chain, MANY, gradient=chain_slope, hessian=spoilt)

    assert refuted_places(told) == {(70, 71), (71, 70)}
    # One factor of no name in one entry (and its mirror image) is no story; it is told as what it is.
    assert codes(told) == [DiagnosisCode.UNKNOWN]
    assert "1.01 and 1.01 times the derivative" in told.diagnoses[0].text


def test_by_values_alone_the_report_says_that_it_cannot_name_them():
    told = look(chain, MANY, hessian=spoilt)

    assert told.verdict == Verdict.REFUTED
    assert "does not show in which entries: claim a gradient in the same call" in told.diagnoses[0].text


@pytest.mark.parametrize("more", [{}, {"gradient": chain_slope}], ids=["by values", "by the gradient"])
def test_the_error_that_is_said_to_be_visible_is_seen(more):
    told = second(look(chain, MANY, hessian=chain_curvature, **more))
    notice = next(notice for notice in told.notices if "would have been seen" in notice)
    size = float(notice.partition("an error of ")[2].split()[0])
    for place in ((3, 3), (298, 299)):

        def off(x, place=place):
            h = chain_curvature(x).tolil()
            h[place] += size
            h[place[::-1]] = h[place]
            return h.tocsr()

        assert look(chain, MANY, hessian=off, **more).verdict == Verdict.REFUTED


def test_directions_all_looks_at_every_entry():
    x = MANY[:20]
    report = look(chain, x, hessian=lambda x: chain_curvature(x).toarray(), directions="all")

    assert report.verdict == Verdict.CONFIRMED
    assert len(report.entries) == 400


def test_no_verdict_depends_on_the_seed():
    right = {str(look(chain, MANY[:60], hessian=chain_curvature, seed=seed).verdict) for seed in range(10)}
    wrong = {str(look(chain, MANY[:90], hessian=spoilt, seed=seed).verdict) for seed in range(10)}

    assert (right, wrong) == ({"confirmed"}, {"refuted"})


# --- rough models, few digits, small budgets -------------------------------------------------------------------------


def test_at_a_kink_the_entries_across_it_are_undecided():
    report = look(lambda x: abs(x[0]) * x[1] + x[1] ** 2, [0.0, 1.0], hessian=[[0.0, 0.0], [0.0, 2.0]])

    verdicts = dict(zip(report.entries.name, report.entries.verdict, strict=True))
    assert verdicts["(x[1], x[1])"] == Verdict.CONFIRMED
    assert {verdicts["(x[0], x[0])"], verdicts["(x[0], x[1])"]} == {Verdict.UNDECIDED}


def test_noise_confirms_nothing_and_still_refutes_what_is_wrong():
    rng = np.random.default_rng(5)

    def noisy(x):
        return energy(x) + 1e-9 * rng.normal()

    assert look(noisy, hessian=curvature).verdict == Verdict.UNDECIDED
    assert refuted_places(look(noisy, hessian=at(1, 1, 2.0))) == {(1, 1)}


@WAYS
def test_a_spent_budget_leaves_entries_undecided(more):
    report = look(hessian=curvature, budget=40, **more)

    assert report.evaluations <= 40
    assert second(report).verdict in (Verdict.UNDECIDED, Verdict.CONFIRMED)
    assert second(look(hessian=curvature, budget=20)).verdict == Verdict.UNDECIDED


def test_evaluations_of_the_gradient_count_for_the_budget():
    calls = []

    def counted(x):
        calls.append(1)
        return slope(x)

    look(hessian=curvature, gradient=counted, budget=30)

    # One call for the claim itself is free, as is every claim at the point.
    assert len(calls) <= 31


# --- what no Hessian is ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("claim", "words"),
    [
        (lambda x: np.diag(curvature(x)), "if these are the diagonal entries alone, give the whole matrix"),
        (lambda x: curvature(x).ravel(), "right number of entries: reshape it to (3, 3)"),
        (lambda x: curvature(x)[:2], "shape (3, 3) is expected"),
        (lambda x: sparse.csr_matrix(curvature(x)[:2]), "shape (3, 3) is expected"),
    ],
    ids=["diagonal", "flat", "rows missing", "sparse rows missing"],
)
def test_a_wrong_shape_is_an_error_that_names_both(claim, words):
    with pytest.raises(DerivativeShapeError) as told:
        look(hessian=claim)

    assert words in str(told.value)


def test_the_hessian_of_one_output_of_several_is_told():
    with pytest.raises(DerivativeShapeError, match=r"shape \(2, 3, 3\) is expected; .* pick one with output"):
        look(waves, X, hessian=lambda x: np.eye(3))


@pytest.mark.parametrize("claim", [lambda x: 1j * curvature(x), lambda x: sparse.csr_matrix(1j * curvature(x))])
def test_a_complex_hessian_is_refused(claim):
    with pytest.raises(UsageError, match="complex"):
        look(hessian=claim)


@WAYS
def test_an_entry_that_is_not_finite_is_refuted_and_spoils_no_other(more):
    told = look(hessian=at(0, 1, np.nan), **more)

    assert refuted_places(told) == {(0, 1), (1, 0)}


def test_a_hessian_that_raises_is_a_finding():
    def broken(x):
        raise RuntimeError("no second derivatives yet")

    told = look(hessian=broken)

    assert told.verdict == Verdict.REFUTED
    assert "no second derivatives yet" in told.diagnoses[0].text


def test_a_report_does_not_advise_what_was_done_already():
    told = look(chain, MANY, gradient=lambda x: 1.1 * chain_slope(x), hessian=spoilt)

    assert second(told).verdict == Verdict.REFUTED
    assert "claim a gradient" not in str(told)
    assert "A gradient claimed" not in str(told)
