"""Claims of second derivatives from published test problems and released libraries, right and wrong ones."""

import warnings

import numpy as np
import pytest
from scipy import optimize

from gradcheck import DiagnosisCode
from tests.outside.asking import CONFIRMED, REFUTED, report_on
from tests.problem_sets.more_garbow_hillstrom import RESIDUALS, SUMS_OF_SQUARES

# --- Rosenbrock's function (scipy.optimize): value, gradient, Hessian and its products -------------------------------

ROSENBROCK_POINT = np.array([1.3, 0.7, 0.8, 1.9, 1.2])
#: What scipy gives there; a Richardson tableau of the gradient agrees to 1.5e-12.
ROSENBROCK_DIAGONAL, ROSENBROCK_BESIDE = [1750.0, 470.0, 210.0, 4054.0, 200.0], [-520.0, -280.0, -320.0, -760.0]

FROM = pytest.mark.parametrize(
    "more", [{}, {"gradient": optimize.rosen_der}], ids=["values alone", "the confirmed gradient"]
)


@FROM
def test_the_hessian_of_rosenbrocks_function_is_confirmed_with_digits(more):
    report = report_on(optimize.rosen, ROSENBROCK_POINT, hessian=optimize.rosen_hess, **more)

    assert report.verdict == CONFIRMED
    part = report.parts[-1] if report.parts else report
    witness = part.entries.witness.reshape(5, 5)
    assert np.diag(witness) == pytest.approx(ROSENBROCK_DIAGONAL, rel=1e-8)
    assert np.diag(witness, 1) == pytest.approx(ROSENBROCK_BESIDE, rel=1e-8)
    assert part.entries.digits[part.entries.claim != 0].min() >= 8


@FROM
def test_hessian_vector_products_of_rosenbrocks_function_are_confirmed(more):
    assert report_on(optimize.rosen, ROSENBROCK_POINT, hvp=optimize.rosen_hess_prod, **more).verdict == CONFIRMED


def test_products_for_a_thousand_variables_are_confirmed_through_the_gradient():
    point = np.linspace(0.5, 1.5, 1000)
    report = report_on(optimize.rosen, point, gradient=optimize.rosen_der, hvp=optimize.rosen_hess_prod)

    assert report.verdict == CONFIRMED
    assert report.parts[1].evaluations < 20


@FROM
def test_a_product_without_the_mixed_terms_is_refuted(more):
    def only_diagonal(x, v):
        return np.diag(optimize.rosen_hess(x)) * v

    told = report_on(optimize.rosen, ROSENBROCK_POINT, hvp=only_diagonal, **more)

    assert told.verdict == REFUTED
    assert DiagnosisCode.ZERO_ENTRY in [diagnosis.code for diagnosis in told.diagnoses]


# --- J. J. More, B. S. Garbow & K. E. Hillstrom, ACM Trans. Math. Softw. 7 (1981) 17 ---------------------------------


def complex_step_hessian(problem):
    """Of the gradient written by hand (Squire & Trapp, SIAM Review 40 (1998) 110), which is exact to rounding; None
    where that gradient takes no complex numbers.
    """

    def hessian(x):
        moved = x + 1e-25j * np.eye(x.size)
        return np.array([np.imag(np.asarray(problem.gradient(row), dtype=complex)) / 1e-25 for row in moved]).T

    with warnings.catch_warnings():
        warnings.simplefilter("error")
        try:
            found = hessian(problem.x0)
        except Exception:
            return None
    return hessian if np.isfinite(found).all() else None


WITH_HESSIAN = [
    (problem, hessian)
    for problem in SUMS_OF_SQUARES
    if problem.x0.size <= 12 and (hessian := complex_step_hessian(problem)) is not None
]
IDS = [problem.name for problem, _ in WITH_HESSIAN]


def test_most_problems_of_the_set_are_among_these():
    assert len(WITH_HESSIAN) >= 20


@pytest.mark.parametrize(("problem", "hessian"), WITH_HESSIAN, ids=IDS)
def test_the_hessian_of_a_published_problem_is_confirmed_through_its_gradient(problem, hessian):
    report = report_on(problem.function, problem.x0, gradient=problem.gradient, hessian=hessian)

    assert report.parts[1].verdict == CONFIRMED


@pytest.mark.parametrize(("problem", "hessian"), WITH_HESSIAN, ids=IDS)
def test_the_hessian_of_a_published_problem_is_not_refuted_by_its_values(problem, hessian):
    assert report_on(problem.function, problem.x0, hessian=hessian, budget=1500).verdict != REFUTED


@pytest.mark.parametrize(("problem", "hessian"), WITH_HESSIAN, ids=IDS)
def test_a_term_too_much_on_the_diagonal_is_refuted_in_its_place(problem, hessian):
    """A damping term, as it is left in a Hessian by mistake: a thousandth of the largest entry."""

    def damped(x):
        found = hessian(x)
        found[-1, -1] += 1e-3 * np.abs(found).max()
        return found

    told = report_on(problem.function, problem.x0, gradient=problem.gradient, hessian=damped).parts[1]

    n = problem.x0.size
    wrong = [tuple(i) for i, v in zip(told.entries.index.tolist(), told.entries.verdict, strict=True) if v == REFUTED]
    assert wrong == [(n - 1, n - 1)]


BY_NAME = {problem.name: problem for problem in RESIDUALS}


@pytest.mark.parametrize("name", ["Rosenbrock", "Freudenstein-Roth", "Beale", "Helical valley"])
def test_the_gauss_newton_matrix_of_a_published_problem_is_refuted(name):
    """2·JᵀJ leaves out the second derivatives of the residuals, which are not zero at the standard start."""
    problem = BY_NAME[name]

    def gradient(x):
        return 2 * np.asarray(problem.jacobian(x)).T @ np.asarray(problem.function(x))

    def matrix(x):
        jacobian = np.asarray(problem.jacobian(x))
        return 2 * jacobian.T @ jacobian

    told = report_on(
        lambda x: float(np.sum(np.asarray(problem.function(x)) ** 2)), problem.x0, gradient=gradient, hessian=matrix
    )

    assert [part.verdict for part in told.parts] == [CONFIRMED, REFUTED]


# --- statsmodels: log-likelihood, score and Hessian in one call ------------------------------------------------------


@pytest.fixture(scope="module")
def models():
    return pytest.importorskip("statsmodels.discrete.discrete_model")


@pytest.fixture(scope="module")
def logit(models):
    """Grades after a course (Spector & Mazzeo 1980), by grade point average, test score, new method and a constant."""
    data = pytest.importorskip("statsmodels.datasets").spector.load_pandas()
    return models.Logit(data.endog.to_numpy(), np.column_stack([data.exog.to_numpy(), np.ones(len(data.endog))]))


@pytest.fixture(scope="module")
def visits():
    """The first 400 visits to doctors of the RAND health insurance experiment, by two variables and a constant."""
    data = pytest.importorskip("statsmodels.datasets").randhie.load_pandas().data[:400]
    return data["mdvis"].to_numpy(), np.column_stack([data[["lncoins", "disea"]].to_numpy(), np.ones(400)])


def test_score_and_hessian_of_a_logit_model_are_confirmed_in_one_call(logit):
    report = report_on(logit.loglike, [0.5, 0.05, 1.0, -3.0], gradient=logit.score, hessian=logit.hessian)

    assert [part.verdict for part in report.parts] == [CONFIRMED, CONFIRMED]


def test_scores_of_observations_are_confirmed_beside_their_sum(logit):
    report = report_on(logit.loglikeobs, [0.5, 0.05, 1.0, -3.0], jacobian=logit.score_obs)
    total = report_on(logit.loglikeobs, [0.5, 0.05, 1.0, -3.0], output=np.sum, gradient=logit.score)

    assert (report.verdict, total.verdict) == (CONFIRMED, CONFIRMED)


def test_the_hessian_of_a_logit_model_is_not_refuted_by_values_alone(logit):
    assert report_on(logit.loglike, [0.5, 0.05, 1.0, -3.0], hessian=logit.hessian).verdict != REFUTED


def test_the_outer_product_of_scores_is_not_taken_for_the_hessian(logit):
    """The estimate of Berndt, Hall, Hall & Hausman (1974): equal in expectation, not in a sample."""

    def outer(p):
        scores = logit.score_obs(p)
        return -scores.T @ scores

    told = report_on(logit.loglike, [0.5, 0.05, 1.0, -3.0], gradient=logit.score, hessian=outer)

    assert told.parts[1].verdict == REFUTED


POINT = np.array([-0.05, 0.02, 0.5, 0.7])


@pytest.mark.parametrize("more", [True, False], ids=["through the score", "by values"])
def test_the_negative_binomial_hessian_is_refuted_in_the_row_and_column_of_the_dispersion(models, visits, more):
    """Before a fit, value and score take ln alpha as the last parameter, but the Hessian is by alpha: a real fault."""
    model = models.NegativeBinomial(*visits, loglike_method="nb2")

    told = report_on(model.loglike, POINT, hessian=model.hessian, **({"gradient": model.score} if more else {}))
    part = told.parts[1] if told.parts else told

    wrong = {tuple(i) for i, v in zip(part.entries.index.tolist(), part.entries.verdict, strict=True) if v == REFUTED}
    assert wrong == {(i, j) for i in range(4) for j in range(4) if 3 in (i, j)}
    factor = next(diagnosis for diagnosis in part.diagnoses if diagnosis.code == DiagnosisCode.CONSTANT_FACTOR)
    assert "0.496585" in factor.text  # e^-0.7, the missing factor of the chain rule
