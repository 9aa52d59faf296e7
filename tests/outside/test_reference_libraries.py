"""Functions and derivatives that come from the same general library: right ones are confirmed, real faults are named.

Figures are outputs of the libraries (scipy 1.17, scikit-learn 1.9, statsmodels 0.15); a Richardson tableau of central
differences agrees with those that are right.
"""

import numpy as np
import pytest
from scipy import optimize, special

import gradcheck
from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, report_on, verdicts

# --- scipy ---

#: Rosenbrock's function, H. H. Rosenbrock, Comput. J. 3 (1960) 175-184, as scipy.optimize chains it.
ROSENBROCK_POINT = [1.3, 0.7, 0.8, 1.9, 1.2]
ROSENBROCK_GRADIENT = [515.4, -285.4, -341.6, 2085.4, -482.0]
ROSENBROCK_HESSIAN = np.diag([1750.0, 470.0, 210.0, 4054.0, 200.0]) + sum(
    np.diag([-520.0, -280.0, -320.0, -760.0], k) for k in (-1, 1)
)


def test_the_gradient_of_rosenbrocks_function_is_confirmed():
    report = report_on(optimize.rosen, ROSENBROCK_POINT, gradient=optimize.rosen_der)

    assert report.verdict == CONFIRMED
    assert report.entries.witness.tolist() == pytest.approx(ROSENBROCK_GRADIENT, rel=1e-11)


def test_the_hessian_of_rosenbrocks_function_is_confirmed_as_the_jacobian_of_its_gradient():
    report = report_on(optimize.rosen_der, ROSENBROCK_POINT, jacobian=optimize.rosen_hess)

    assert report.verdict == CONFIRMED
    np.testing.assert_allclose(report.entries.witness.reshape(5, 5), ROSENBROCK_HESSIAN, rtol=1e-11, atol=1e-9)


def test_the_hessian_of_rosenbrocks_function_is_estimated_from_values_within_its_bound():
    answer = gradcheck.estimate(optimize.rosen, at=ROSENBROCK_POINT, order=2)

    assert np.all(np.abs(answer.value - ROSENBROCK_HESSIAN) <= answer.bound)
    assert answer.bound.max() <= 1e-8 * np.abs(ROSENBROCK_HESSIAN).max()


def test_the_mathieu_functions_take_degrees_but_their_derivative_is_per_radian():
    """scipy.special.mathieu_cem(2, 5, 45) gives a slope of -0.8556109366879098; per degree -0.014933227961276772."""
    report = report_on(
        lambda x: special.mathieu_cem(2, 5, x)[0], 45.0, gradient=lambda x: special.mathieu_cem(2, 5, x)[1]
    )

    assert report.verdict == REFUTED
    assert [diagnosis.code for diagnosis in report.diagnoses] == ["degrees-for-radians"]
    assert report.entries.witness[0] == pytest.approx(-0.014933227961276772, rel=1e-12)
    assert report.entries.claim[0] / report.entries.witness[0] == pytest.approx(180 / np.pi, rel=1e-12)


# --- scikit-learn ---


@pytest.fixture(scope="module")
def gaussian_process():
    """1.3·RBF(0.9) + white noise 0.05 on six points."""
    regression = pytest.importorskip("sklearn.gaussian_process")
    kernels = regression.kernels
    kernel = kernels.ConstantKernel(1.3) * kernels.RBF(0.9) + kernels.WhiteKernel(0.05)
    model = regression.GaussianProcessRegressor(kernel=kernel, alpha=1e-10, optimizer=None)
    places = np.array([0, 0.7, 1.3, 2.1, 3.2, 4])
    return model.fit(places[:, None], np.array([0, 0.64, 0.96, 0.86, -0.06, -0.76]))


THETA = np.log([1.3, 0.9, 0.05])
THETA_GRADIENT = np.array([-1.8640709655827594, 3.388423780700494, -0.42566505927990433])


def test_the_gradient_of_a_log_marginal_likelihood_is_confirmed(gaussian_process):
    """C. E. Rasmussen, C. K. I. Williams, "Gaussian Processes for Machine Learning" (2006), equation 5.9."""
    likelihood = gaussian_process.log_marginal_likelihood

    report = report_on(likelihood, THETA, gradient=lambda theta: likelihood(theta, eval_gradient=True)[1])

    assert report.verdict == CONFIRMED
    assert report.entries.witness.tolist() == pytest.approx(THETA_GRADIENT, rel=1e-10)


def test_a_gradient_by_the_parameters_given_for_one_by_their_logarithms_is_refuted(gaussian_process):
    report = report_on(gaussian_process.log_marginal_likelihood, THETA, gradient=THETA_GRADIENT / np.exp(THETA))

    assert set(verdicts(report)) == {"refuted"}


LOSSES = ["HalfBinomialLoss", "HalfPoissonLoss", "HalfGammaLoss", "HalfTweedieLoss", "ExponentialLoss"]


@pytest.mark.parametrize("raw", [-6.0, -0.7, 0.4, 5.0])
@pytest.mark.parametrize("name", LOSSES)
def test_gradients_and_hessians_of_smooth_losses_are_confirmed(name, raw):
    losses = pytest.importorskip("sklearn._loss.loss")
    loss, target = getattr(losses, name)(), np.array([1.0])

    def value(x):
        return loss.loss(target, np.array([x]))

    def slopes(x):
        return [float(each[0]) for each in loss.gradient_hessian(target, np.array([x]))]

    assert report_on(lambda x: value(x)[0], raw, gradient=lambda x: slopes(x)[0]).verdict == CONFIRMED
    assert report_on(lambda x: slopes(x)[0], raw, gradient=lambda x: slopes(x)[1]).verdict == CONFIRMED


def test_the_hessian_of_the_absolute_error_is_a_convention_and_no_derivative():
    losses = pytest.importorskip("sklearn._loss.loss")
    loss, target = losses.AbsoluteError(), np.array([1.0])

    def slope(x):
        return float(loss.gradient(target, np.array([x]))[0])

    report = report_on(slope, 0.3, gradient=lambda x: float(loss.gradient_hessian(target, np.array([x]))[1][0]))

    assert (report.entries.claim[0], report.verdict) == (1.0, REFUTED)


def test_the_gradients_at_the_ties_of_piecewise_linear_losses_are_conventions():
    """-1 for the absolute error and -0.3 for the pinball loss of 0.3, with slopes ±1 and -0.3, 0.7 on the two sides."""
    losses = pytest.importorskip("sklearn._loss.loss")

    for loss, convention in ((losses.AbsoluteError(), -1.0), (losses.PinballLoss(quantile=0.3), -0.3)):
        slope = float(loss.gradient(np.array([1.0]), np.array([1.0]))[0])
        report = report_on(
            lambda x, loss=loss: loss.loss(np.array([1.0]), np.array([x]))[0], 1.0, gradient=np.array(slope)
        )

        assert (slope, report.verdict) == (pytest.approx(convention), UNDECIDED)
        assert [finding.code for finding in report.findings] == ["kink"]


# --- statsmodels ---

SPECTOR_POINT = np.array([0.5, 0.05, 1.0, -3.0])
SPECTOR_SCORE = [-15.262056811176446, -115.98520688306083, -1.265749818787985, -5.654200114363524]
#: Rounded: W. H. Greene, "Econometric Analysis", logit on the data of Spector & Mazzeo (from memory).
SPECTOR_OPTIMUM = np.array([2.826112594889, 0.095157661318, 2.378687655093, -13.021346858116])


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


def test_score_and_hessian_of_a_logit_model_are_confirmed(logit):
    score = report_on(logit.loglike, SPECTOR_POINT, gradient=logit.score)

    assert score.verdict == CONFIRMED
    assert score.entries.witness.tolist() == pytest.approx(SPECTOR_SCORE, rel=1e-10)
    assert report_on(logit.score, SPECTOR_POINT, jacobian=logit.hessian).verdict == CONFIRMED


def test_the_score_at_the_textbook_optimum_is_not_refuted(logit):
    assert SPECTOR_OPTIMUM.tolist() == pytest.approx([2.8261, 0.0952, 2.3787, -13.0213], abs=5e-5)
    assert report_on(logit.loglike, SPECTOR_OPTIMUM, gradient=logit.score).verdict != REFUTED


def test_the_score_at_the_textbook_optimum_is_confirmed(logit):
    assert report_on(logit.loglike, SPECTOR_OPTIMUM, gradient=logit.score).verdict == CONFIRMED


def test_score_and_hessian_of_a_poisson_model_are_confirmed(models, visits):
    model, point = models.Poisson(*visits), np.array([-0.05, 0.02, 0.5])

    score = report_on(model.loglike, point, gradient=model.score)

    assert score.verdict == CONFIRMED
    assert score.entries.witness.tolist() == pytest.approx(
        [1084.1032644057486, 10430.911108760372, 728.4541820152335], rel=1e-10
    )
    hessian = report_on(model.score, point, jacobian=model.hessian)
    assert hessian.verdict == CONFIRMED
    assert hessian.entries.witness[0] == pytest.approx(-7008.908585985478, rel=1e-10)


NEGATIVE_BINOMIAL_POINT = np.array([-0.05, 0.02, 0.5, 0.7])


@pytest.mark.parametrize("method", ["nb2", "nb1"])
def test_the_negative_binomial_hessian_lacks_the_chain_rule_in_the_row_and_column_of_the_dispersion(
    models, visits, method
):
    """Before a fit, value and score take ln alpha as the last parameter, but the Hessian is by alpha: a real fault."""
    model = models.NegativeBinomial(*visits, loglike_method=method)

    report = report_on(model.score, NEGATIVE_BINOMIAL_POINT, jacobian=model.hessian)

    words = verdicts(report)
    assert set(words[:3, :3].ravel()) == {"confirmed"}
    assert {*words[3, :], *words[:, 3]} == {"refuted"}


@pytest.mark.parametrize("method", ["nb2", "nb1"])
def test_the_score_of_the_negative_binomial_model_is_confirmed(models, visits, method):
    model = models.NegativeBinomial(*visits, loglike_method=method)

    assert report_on(model.loglike, NEGATIVE_BINOMIAL_POINT, gradient=model.score).verdict == CONFIRMED


def test_the_missing_factor_of_the_negative_binomial_hessian_is_measured_and_diagnosed(models, visits):
    """H[0, 3] is claimed as -92.294085479 where -185.8574645175 is right: e^-0.7 = 0.4965853038 times."""
    model = models.NegativeBinomial(*visits, loglike_method="nb2")

    report = report_on(model.score, NEGATIVE_BINOMIAL_POINT, jacobian=model.hessian)

    witness = report.entries.witness.reshape(4, 4)
    assert (witness[0, 3], witness[3, 3]) == pytest.approx((-185.8574645175, -146.8140768003), rel=1e-10)
    factor = next(diagnosis for diagnosis in report.diagnoses if diagnosis.code == "constant-factor")
    assert len(factor.entries) == 6
    assert "0.496585" in factor.text


def test_the_negative_binomial_hessian_is_right_once_the_parameters_are_not_transformed(models, visits):
    model = models.NegativeBinomial(*visits, loglike_method="nb2")
    model._transparams = False
    point = np.append(NEGATIVE_BINOMIAL_POINT[:3], np.exp(0.7))

    assert report_on(model.score, point, jacobian=model.hessian).verdict == CONFIRMED


def test_a_likelihood_whose_scale_moves_is_told_from_a_score_that_holds_it(models, visits):
    """GLM, gamma with log link: loglike estimates the scale anew at every point unless it is given."""
    statsmodels = pytest.importorskip("statsmodels.api")
    family = statsmodels.families.Gamma(statsmodels.families.links.Log())
    model = statsmodels.GLM(visits[0] + 0.5, visits[1], family=family)
    point = np.array([-0.05, 0.02, 0.5])

    moving = report_on(model.loglike, point, gradient=model.score)
    held = report_on(lambda b: model.loglike(b, scale=1.0), point, gradient=lambda b: model.score(b, scale=1.0))

    assert set(verdicts(moving)) == {"refuted"}
    assert held.verdict == CONFIRMED
