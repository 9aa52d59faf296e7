"""Identities that a claim breaks on its own: no value of the model is needed to see it."""

import numpy as np
import pytest

import gradcheck
from gradcheck import Verdict
from gradcheck.claims.identities import FACTOR, Slack, adjoint_pair, ignored, linearity, probes, symmetry

SLACK = Slack(rel_tol=1e-8, abs_tol=0.0, unit_roundoff=2.0**-53)
J = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
V1, V2 = np.array([0.3, -1.0, 0.7]), np.array([2.0, 0.1, 0.4])


def broken_by(product):
    """Names of the identities that a product breaks."""
    probed = np.array([product(row) for row in probes(V1, V2)])
    return [each.name for each in linearity(product(V1), product(V2), probed, SLACK)]


def test_a_linear_product_breaks_none():
    assert broken_by(lambda v: J @ v) == []


def test_the_factor_is_no_power_of_two():
    assert np.log2(abs(FACTOR)) % 1 != 0


@pytest.mark.parametrize(
    ("product", "names"),
    [
        (lambda v: J @ v + 1e-3, ["scaling", "negation", "sum", "zero vector"]),
        (lambda v: J @ np.abs(v), ["scaling", "negation", "sum"]),
        (lambda v: J @ v**3, ["scaling", "sum"]),
        (lambda v: J @ v if v.any() else np.full(2, np.nan), ["zero vector"]),
        (lambda v: J @ v if v.any() else np.full(2, 1e-300), ["zero vector"]),
    ],
    ids=["constant added", "absolute value", "cube", "nan for zero", "not exactly zero"],
)
def test_what_is_not_linear_breaks(product, names):
    assert broken_by(product) == names


def test_rounding_breaks_nothing():
    rng = np.random.default_rng(0)
    for _ in range(200):
        wide = rng.normal(size=(5, 400)) * 10.0 ** rng.uniform(-6, 6, (5, 1))
        first, second = rng.normal(size=(2, 400))
        probed = np.array([wide @ row for row in probes(first, second)])

        assert linearity(wide @ first, wide @ second, probed, SLACK) == []


def test_single_precision_breaks_nothing_at_its_own_tolerance():
    slack = Slack(rel_tol=1e-3, abs_tol=0.0, unit_roundoff=2.0**-24)
    narrow = J.astype(np.float32)
    probed = np.array([narrow @ row.astype(np.float32) for row in probes(V1, V2)])

    assert linearity(narrow @ V1.astype(np.float32), narrow @ V2.astype(np.float32), probed, slack) == []


def test_entries_that_ignore_the_vector_are_marked():
    def half(v):
        return np.array([J[0] @ v, 7.0])

    same, by_sign = ignored(half(V1), half(FACTOR * V1), half(-V1), SLACK)

    assert (same.tolist(), by_sign.tolist()) == ([False, True], [False, False])


def test_entries_that_know_only_the_sign_are_marked():
    def normalised(v):
        return J @ v / np.linalg.norm(v)

    same, by_sign = ignored(normalised(V1), normalised(FACTOR * V1), normalised(-V1), SLACK)

    assert (same.tolist(), by_sign.tolist()) == ([False, False], [True, True])


def test_an_adjoint_pair_holds_and_a_wrong_one_does_not():
    tangents, cotangents = np.stack([V1, V2]), np.array([[0.5, -2.0], [3.0, 0.1]])
    pushed, pulled = tangents @ J.T, cotangents @ J

    assert adjoint_pair(tangents, pushed, cotangents, pulled, SLACK) is None
    assert adjoint_pair(tangents, pushed, cotangents, pulled * 1.0001, SLACK) is not None


def test_symmetry_is_judged_in_the_units_of_the_variables():
    typical = np.array([1.0, 1e-6])
    matrix = np.array([[2.0, 3e6], [3e6 * (1 + 1e-4), 5e12]])

    apart, _ = symmetry(matrix, typical, SLACK)

    assert apart.tolist() == [[False, True], [True, False]]


# --- as a check tells them -------------------------------------------------------------------------------------------


def stresses(x):
    return J @ np.sin(x)


def look(**claims):
    return gradcheck.check(stresses, [0.3, 0.5, -1.2], on_refuted="return", on_undecided="pass", **claims)


def test_a_broken_identity_is_an_entry_with_both_sides():
    told = look(jvp=lambda x, v: (J * np.cos(x)) @ np.abs(v))

    entries = told.entries
    place = next(i for i, name in enumerate(entries.name) if name.startswith("jvp(-v) = -jvp(v) in "))
    assert entries.verdict[place] == Verdict.REFUTED
    assert entries.source[place] == "identity"
    assert entries.claim[place] == pytest.approx(-entries.witness[place])


def test_a_product_that_is_right_for_unit_vectors_only_is_told():
    told = look(jvp=lambda x, v: (J * np.cos(x)) @ np.abs(v))

    assert "it is right for unit vectors, but J·v must be linear in the tangent v" in told.diagnoses[0].text


def test_a_constant_that_is_added_is_told():
    told = look(jvp=lambda x, v: (J * np.cos(x)) @ v + 1e-3)

    assert "the zero vector gives 0.001 where 0 is due" in told.diagnoses[0].text


def test_a_pair_that_holds_is_told():
    told = look(jvp=lambda x, v: (J * np.cos(x)) @ v, vjp=lambda x, w: (J * np.cos(x)).T @ w)

    assert "⟨jvp(v), w⟩ = ⟨v, vjp(w)⟩ holds for random v and w" in told.parts[1].notices


def test_a_pair_that_does_not_fit_is_refuted_even_where_no_witness_can_speak():
    told = look(jvp=lambda x, v: (J * np.cos(x)) @ v, vjp=lambda x, w: 1.01 * (J * np.cos(x)).T @ w, budget=1)

    assert [str(part.verdict) for part in told.parts] == ["undecided", "refuted"]
    assert "jvp and vjp are no adjoint pair" in told.diagnoses[0].text


def test_a_claim_within_the_tolerance_asked_for_breaks_no_identity():
    told = look(jvp=lambda x, v: (J * np.cos(x)) @ v, vjp=lambda x, w: (1 + 1e-5) * (J * np.cos(x)).T @ w, rel_tol=1e-4)

    assert told.verdict == Verdict.CONFIRMED
