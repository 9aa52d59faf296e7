"""Derivatives of automatic differentiation that are wrong, or a convention, in released libraries.

Figures are outputs of jax 0.10 and autograd 1.9 against closed forms: sinc'(x) = -pi²x/3 near 0, expit' = s(x)·s(-x).
"""

import warnings

import numpy as np
import pytest
from scipy import special

from tests.outside.asking import CONFIRMED, REFUTED, UNDECIDED, report_on, verdict_on

jax = pytest.importorskip("jax")
autograd = pytest.importorskip("autograd")

import autograd.numpy as anp  # noqa: E402
import jax.numpy as jnp  # noqa: E402


@pytest.fixture
def double_precision():
    with jax.enable_x64(True):
        yield


def sinc_slope(x):
    """Of sin(pi x)/(pi x), to 1e-12 for |x| <= 1e-6."""
    return -(np.pi**2) * x / 3


# --- sinc near zero ---


@pytest.mark.parametrize("x", [1e-6, 1e-7, 1e-8])
@pytest.mark.usefixtures("double_precision")
def test_the_right_slope_of_sinc_near_zero_is_not_refuted(x):
    assert verdict_on(jnp.sinc, x, sinc_slope(x)) != REFUTED


#: x, and the relative error of what jax gives; at 1e-8 it is -2.1002231716731708e-08 for -3.2898681336964526e-08.
SINC_ERRORS = [(1e-6, 2.8e-5), (1e-7, 4.1e-3), (1e-8, 0.36)]


@pytest.mark.parametrize(("x", "share"), SINC_ERRORS)
@pytest.mark.usefixtures("double_precision")
def test_the_error_that_jax_makes_in_the_slope_of_sinc_near_zero_lies_far_outside_the_bound_of_the_witness(x, share):
    report = report_on(jnp.sinc, x, gradient="jax")

    assert abs(report.entries.claim[0] / sinc_slope(x) - 1) == pytest.approx(share, rel=0.1)
    assert abs(report.entries.witness[0] - sinc_slope(x)) <= 3 * report.entries.bound[0]
    assert abs(report.entries.witness[0] - report.entries.claim[0]) > 100 * report.entries.bound[0]


@pytest.mark.parametrize("x", [x for x, _ in SINC_ERRORS])
@pytest.mark.usefixtures("double_precision")
def test_the_slope_that_jax_gives_for_sinc_near_zero_is_not_confirmed(x):
    assert report_on(jnp.sinc, x, gradient="jax").verdict != CONFIRMED


@pytest.mark.usefixtures("double_precision")
def test_the_slope_that_jax_gives_for_sinc_away_from_zero_is_confirmed():
    assert report_on(jnp.sinc, 0.3, gradient="jax").verdict == CONFIRMED


def test_the_nan_that_autograd_gives_for_sinc_at_zero_is_refuted():
    with np.errstate(divide="ignore", invalid="ignore"):
        claim = autograd.grad(anp.sinc)(0.0)

    assert np.isnan(claim)
    assert verdict_on(anp.sinc, 0.0, claim) == REFUTED


# --- expit far out ---


def product_rule(x):
    """s(1 - s): exactly 0 from 37 on, where the derivative is 4.24835425529e-18 at 40."""
    return special.expit(x) * (1 - special.expit(x))


def test_far_to_the_right_values_cannot_tell_the_right_slope_of_expit_from_zero_and_both_stand_or_fall_together():
    claims = [product_rule(40.0), 4.24835425529e-18]

    reports = [report_on(special.expit, 40.0, gradient=np.array(claim)) for claim in claims]

    assert claims[0] == 0
    assert {report.verdict for report in reports} in ({CONFIRMED}, {UNDECIDED})
    assert all(report.entries.reason[0] for report in reports)


def test_far_to_the_left_the_slope_of_expit_is_confirmed_to_eight_digits_and_zero_refuted():
    assert report_on(special.expit, -40.0, gradient=product_rule).verdict == CONFIRMED
    assert verdict_on(special.expit, -40.0, 4.24835425529e-18 * (1 + 1e-6)) == REFUTED
    assert verdict_on(special.expit, -40.0, 0.0) == REFUTED


# --- conventions at kinks ---


@pytest.mark.parametrize(
    ("function", "x", "convention"),
    [
        (jnp.abs, 0.0, 1.0),
        (lambda x: jnp.maximum(x, 0.0), 0.0, 0.5),
        (jax.nn.relu, 0.0, 0.0),
        (lambda x: jnp.clip(x, 0.0, 1.0), 1.0, 0.5),
        (lambda x: jnp.clip(x, 0.0, 1.0), 0.0, 0.5),
        (lambda x: jnp.max(jnp.array([x, 1.0, 1.0])), 1.0, 1 / 3),
        (lambda x: jnp.linalg.eigvalsh(jnp.array([[1.0, x], [x, 1.0]]))[0], 0.0, 0.0),
        (lambda x: jnp.interp(x, jnp.array([0.0, 1.0, 2.0]), jnp.array([0.0, 1.0, 5.0])), 1.0, 4.0),
    ],
    ids=["abs", "max", "relu", "clip above", "clip below", "max of equals", "crossing eigenvalues", "interp"],
)
@pytest.mark.usefixtures("double_precision")
def test_what_jax_chooses_at_a_kink_is_neither_confirmed_nor_refuted(function, x, convention):
    report = report_on(function, x, gradient="jax")

    assert report.entries.claim[0] == pytest.approx(convention)
    assert report.verdict == UNDECIDED
    assert [finding.code for finding in report.findings] == ["kink"]


@pytest.mark.parametrize(
    ("function", "x", "convention"),
    [
        (anp.abs, 0.0, 0.0),
        (lambda x: anp.maximum(x, 0.0), 0.0, 0.5),
        (lambda x: anp.clip(x, 0.0, 1.0), 0.0, 0.0),
        (lambda x: anp.clip(x, 0.0, 1.0), 1.0, 0.0),
        (lambda x: anp.max(anp.array([x, 1.0, 1.0])), 1.0, 1 / 3),
    ],
    ids=["abs", "max", "clip below", "clip above", "max of equals"],
)
def test_what_autograd_chooses_at_a_kink_is_neither_confirmed_nor_refuted(function, x, convention):
    report = report_on(function, x, gradient="autograd")

    assert report.entries.claim[0] == pytest.approx(convention)
    assert report.verdict == UNDECIDED
    assert [finding.code for finding in report.findings] == ["kink"]


@pytest.mark.parametrize("source", ["jax", "autograd"])
@pytest.mark.parametrize("name", ["norm", "root of a square"])
@pytest.mark.usefixtures("double_precision")
def test_the_nan_that_automatic_differentiation_gives_for_a_length_at_zero_is_refuted(name, source):
    module = {"jax": jnp, "autograd": anp}[source]
    length = {
        "norm": lambda x: module.linalg.norm(module.array([x, 0.0])),
        "root of a square": lambda x: (x * x) ** 0.5,
    }

    with np.errstate(divide="ignore", invalid="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # autograd divides by zero
        report = report_on(length[name], 0.0, gradient=source)

    assert np.isnan(report.entries.claim[0])
    assert report.verdict == REFUTED


@pytest.mark.parametrize(
    ("step", "x"), [(jnp.floor, 0.0), (jnp.round, 0.5), (jnp.sign, 0.0)], ids=["floor", "round", "sign"]
)
@pytest.mark.usefixtures("double_precision")
def test_the_zero_that_jax_gives_for_a_step_is_undecided_at_the_step(step, x):
    report = report_on(step, x, gradient="jax")

    assert (report.entries.claim[0], report.verdict) == (0.0, UNDECIDED)
    assert "jump" in report.entries.reason[0]


@pytest.mark.usefixtures("double_precision")
def test_at_the_vertical_end_of_a_root_nothing_is_decided():
    """where(x > 0, sqrt x, 0): jax gives NaN, and the true slope is 0 on one side and infinite on the other."""
    report = report_on(lambda x: jnp.where(x > 0, jnp.sqrt(x), 0.0), 0.0, gradient="jax")

    assert np.isnan(report.entries.claim[0])
    assert report.verdict == UNDECIDED


@pytest.mark.usefixtures("double_precision")
def test_the_nan_of_a_branch_not_taken_is_refuted():
    """where(x == 0, 1, sin x/x): the branch not taken divides by zero, and its NaN spoils the derivative 0."""
    report = report_on(lambda x: jnp.where(x == 0, 1.0, jnp.sin(x) / jnp.where(x == 0, x, x)), 0.0, gradient="jax")

    assert np.isnan(report.entries.claim[0])
    assert report.verdict == REFUTED


# --- single precision ---


def in_single_precision(x):
    """e^x/sqrt(sin^3 x + cos^3 x), whose slope at 1.5 is 4.053427893898620657714188 (50 digits)."""
    return jnp.exp(x) / jnp.sqrt(jnp.sin(x) ** 3 + jnp.cos(x) ** 3)


def test_the_single_precision_of_jax_is_no_error():
    assert report_on(in_single_precision, 1.5, gradient=jax.grad(in_single_precision)).verdict == CONFIRMED


def test_a_slope_computed_beforehand_in_single_precision_is_no_error_either():
    """jax gives 4.053427696228027, which is 5e-8 off: one unit in the last place of a float32."""
    claim = jax.grad(in_single_precision)(jnp.float32(1.5))

    assert claim.dtype == np.float32
    assert report_on(in_single_precision, 1.5, gradient=claim).verdict == CONFIRMED
