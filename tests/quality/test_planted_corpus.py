"""The corpus of planted mistakes is what it says: derivatives are right, mistakes sit where they are said to be."""

import numpy as np
import pytest

from tests.quality.planted_corpus import MISTAKES, honest, planted
from tests.quality.planted_models import MODELS, REGIMES, Model


@pytest.mark.parametrize("model", MODELS, ids=lambda model: model.name)
def test_derivatives_are_those_of_the_values(model: Model) -> None:
    """By differences of fourth order, which see about nine digits."""
    steps = 1e-4 * np.abs(model.x0)
    slopes = np.stack(
        [_slope(model, step * row, step) for step, row in zip(steps, np.eye(steps.size), strict=True)], -1
    )

    exact = model.derivative(model.x0)
    np.testing.assert_allclose(slopes.reshape(exact.shape), exact, rtol=0, atol=1e-8 * np.abs(exact).max())


def _slope(model: Model, along: np.ndarray, step: float) -> np.ndarray:
    near, far = (
        np.ravel(model.value(model.x0 + k * along)) - np.ravel(model.value(model.x0 - k * along)) for k in (1, 2)
    )
    return (8.0 * near - far) / (12.0 * step)


def test_a_third_of_the_models_is_kept_aside() -> None:
    assert sum(model.aside for model in MODELS) >= len(MODELS) // 3
    assert sum(regimes.aside for regimes in REGIMES) == len(REGIMES) // 2


def test_there_are_enough_kinds_and_models() -> None:
    assert len(MODELS) >= 22
    assert len(MISTAKES) >= 16


def test_a_planted_mistake_is_wrong_exactly_where_it_is_said_to_be() -> None:
    for claim in planted(1, 5):
        for k in range(len(claim.points)):
            where = np.any([masks[k] for _, masks in claim.parts], axis=0)
            if claim.exact:
                assert not (claim.claimed[k] != claim.right[k])[~where].any(), (claim.name, claim.kind)


def test_honest_claims_are_right() -> None:
    for claim in honest(1, 5):
        if claim.kind != "at a kink":
            assert np.array_equal(claim.claimed[0], claim.right[0])
