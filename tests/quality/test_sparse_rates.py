"""Mistakes planted in sparse Jacobians are told apart, and no innocent entry is accused."""

import pytest

from benchmarks.sparse import FACTORS, SLIGHT, outcome_of
from benchmarks.sparse_corpus import SHAPES, model_of, planted

N = 400
SEEDS = range(2)


@pytest.mark.parametrize("shape", SHAPES)
def test_wrong_misplaced_and_missing_entries_of_every_shape_are_told_apart(shape):
    for seed in SEEDS:
        model = model_of(shape, SHAPES[shape](N, seed), seed)
        jacobian = model.jacobian(model.x0)
        for factor in (FACTORS[seed], SLIGHT):
            mistakes = planted(jacobian, factor, seed)
            outcome = outcome_of(model, mistakes.claim, mistakes, seed)

            assert outcome.verdict == "refuted"
            assert outcome.told_apart
            assert outcome.false == 0


@pytest.mark.parametrize("shape", SHAPES)
def test_right_jacobians_of_every_shape_are_confirmed(shape):
    for seed in SEEDS:
        model = model_of(shape, SHAPES[shape](N, 50 + seed), 50 + seed)

        assert outcome_of(model, model.jacobian(model.x0), None, seed).verdict == "confirmed"
