"""Hessian-vector products with many entries: compared as a whole, told by counts and examples, within the limits."""

import numpy as np
import pytest

import gradcheck
from gradcheck import Verdict
from gradcheck.problem.layout import Layout
from gradcheck.records.verdict import DiagnosisCode

N = 3000
X = np.random.default_rng(3).uniform(2.0, 4.0, N)


def energy(x):
    return float(np.sum(x**2 / 2 + x**4 / 4) + np.sum(x[:-1] * x[1:] ** 2) / 3)


def slope(x):
    g = x + x**3
    g[:-1] += x[1:] ** 2 / 3
    g[1:] += 2 * x[:-1] * x[1:] / 3
    return g


def product(x, v, *, below=1.0, where=slice(None)):
    """H·v; what stands below the diagonal is multiplied by `below` in some rows."""
    share = np.ones(x.size - 1)
    share[where] = below
    out = (1 + 3 * x**2) * v
    out[:-1] += 2 * x[1:] * v[1:] / 3
    out[1:] += 2 * x[:-1] * v[1:] / 3 + share * 2 * x[1:] * v[:-1] / 3
    return out


def forgotten(x, v):
    return product(x, v, below=0.0)


def look(hvp, **more):
    options = {"gradient": slope, "on_refuted": "return", "on_undecided": "pass"} | more
    return gradcheck.check(energy, at=X, hvp=hvp, **options)


def second(report):
    return next(part for part in report.parts if part.kind == "hvp")


def test_a_right_product_is_confirmed_as_a_whole_and_told_in_a_few_entries():
    report = second(look(product))

    assert report.verdict == Verdict.CONFIRMED
    assert set(report.directions.verdict) == {Verdict.CONFIRMED}
    assert len(report.entries) == len(report.directions.verdict) == 8
    assert f"all {N:,} entries of each H·v compared" in str(report).replace("\n", " ").replace("        ", "")


def test_names_are_made_only_of_entries_that_are_told(monkeypatch):
    made = []
    name = Layout.name
    monkeypatch.setattr(Layout, "name", lambda self, i: made.append(i) or name(self, i))

    for claim in (product, forgotten):
        str(look(claim))

    assert len(made) < 300


def test_a_refuted_product_is_looked_at_no_longer_than_needed():
    asked = []
    told = second(look(forgotten, gradient=lambda x: asked.append(1) or slope(x)))

    assert told.verdict == Verdict.REFUTED
    assert len(told.directions.verdict) <= 2
    assert len(asked) < 300


def test_of_many_wrong_entries_the_report_says_how_many_and_shows_examples():
    told = second(look(forgotten))

    text = told.diagnoses[0].text
    assert f"{N - 1:,} of {N:,} entries of H·v are wrong" in text
    assert "claim a gradient" not in str(told)
    assert told.diagnoses[0].code == DiagnosisCode.ZERO_ENTRY
    pairs = zip(told.entries.index, told.entries.source, strict=True)
    examples = [place for place, source in pairs if "diff" in source]
    assert len(examples) >= 3
    for row, column in examples:
        assert row == column + 1
    for claim, witness, (row, _) in zip(told.entries.claim, told.entries.witness, examples, strict=False):
        assert claim == 0
        assert witness == pytest.approx(2 * X[row] / 3, rel=1e-8)


def test_few_wrong_entries_are_named():
    def spoilt(x, v):
        out = product(x, v)
        out[41] += 0.5 * v[42]
        out[42] += 0.5 * v[41]
        return out

    told = second(look(spoilt))

    assert {tuple(place) for place in told.entries.index} == {(41, 42), (42, 41)}


def test_few_wrong_rows_are_named_where_their_columns_are_right():
    told = second(look(lambda x, v: product(x, v, below=0.0, where=[70])))

    assert told.verdict == Verdict.REFUTED
    assert f"1 of {N:,} entries of H·v is wrong (x[71])" in told.diagnoses[0].text
    assert {int(row) for row, _ in told.entries.index[:-1]} == {71}  # the last one is the broken symmetry


@pytest.mark.parametrize(("factor", "code"), [(2.0, "constant-factor"), (-1.0, "sign-flipped")])
def test_one_factor_of_all_entries_is_told(factor, code):
    told = second(look(lambda x, v: factor * product(x, v)))

    assert told.diagnoses[0].code == code
    assert f"{N:,} of {N:,} entries of H·v are wrong" in told.diagnoses[0].text


def test_a_claim_that_is_no_number_in_one_entry_is_refuted_there():
    def broken(x, v):
        out = product(x, v)
        out[5] = np.nan
        return out

    told = second(look(broken))

    assert told.verdict == Verdict.REFUTED
    assert "x[5]" in str(told)


def test_products_that_no_quick_look_can_judge_are_not_refuted():
    """A gradient in single precision: every entry goes the long way, and keeps its verdict."""
    told = second(look(product, gradient=lambda x: slope(x).astype(np.float32), directions=2))

    assert told.verdict != Verdict.REFUTED


@pytest.mark.parametrize("budget", [32, 36, 45, 60, 90])
def test_a_budget_that_ends_in_between_is_kept_and_said(budget):
    calls = []
    right = look(product, budget=budget, gradient=lambda x: calls.append(1) or slope(x))

    assert len(calls) <= budget + 3  # the claim itself is free at the point
    assert second(right).verdict in (Verdict.UNDECIDED, Verdict.CONFIRMED)
    if budget < 60:
        assert second(right).verdict == Verdict.UNDECIDED


def test_a_time_that_ends_before_the_claim_is_asked_accuses_nobody(monkeypatch):
    """The clock stands still until the gradient has been asked, and is far beyond the limit afterwards."""
    clock = [0.0]
    monkeypatch.setattr("time.monotonic", lambda: clock[0])

    def slow(x):
        clock[0] += 0.4  # asked at the point and beside it, before the products are claimed
        return slope(x)

    for limit in (0.3, 0.7, 1.1, 1.5, 1.9):
        clock[0] = 0.0
        told = look(product, gradient=slow, time_limit=limit)

        assert told.verdict == Verdict.UNDECIDED, limit


def test_the_time_is_looked_at_between_vectors(monkeypatch):
    clock, asked = [0.0], []
    monkeypatch.setattr("time.monotonic", lambda: clock[0])

    def slow(x):
        asked.append(1)
        clock[0] += 1.0
        return slope(x)

    told = second(look(product, gradient=slow, time_limit=30.5))

    assert told.verdict == Verdict.UNDECIDED
    assert len(asked) <= 32
    assert len(told.directions.verdict) < 8
