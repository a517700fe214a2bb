"""Trimming of whole episodes: contaminated samples, labels, and majorities."""

from __future__ import annotations

import numpy as np

from nearhand.service.learn.robust import leave_one_out, trimmed_weights


def contaminated(generator: np.random.Generator) -> np.ndarray:
    """Return 14 episodes about zero and 6 about 4, in three features."""
    return np.concatenate([generator.normal(0, 1, (14, 3)), generator.normal(4, 1, (6, 3))])


def test_thirty_percent_of_strangers_are_trimmed_without_a_label(generator: np.random.Generator) -> None:
    caught = lost = 0
    for _ in range(50):
        weights = trimmed_weights(contaminated(generator))
        caught += int((weights[14:] == 0).sum())
        lost += int((weights[:14] == 0).sum())
    assert caught > 0.5 * 300
    assert lost < 0.1 * 700


def test_a_few_labels_find_the_rest_and_are_never_overruled(generator: np.random.Generator) -> None:
    each = contaminated(generator)
    weights = trimmed_weights(each, {0: True, 1: True, 2: True, 14: False, 15: False})
    assert weights[14:].sum() <= 1
    assert weights[:14].sum() >= 12
    assert trimmed_weights(each, {14: True, 0: False})[[14, 0]].tolist() == [1, 0]


def test_equal_episodes_and_a_majority_stay() -> None:
    assert trimmed_weights(np.zeros((5, 2))).tolist() == [1.0] * 5
    assert trimmed_weights(np.array([[0.0], [1.0], [2.0], [3.0], [100.0]])).sum() >= 3
    np.testing.assert_allclose(leave_one_out(np.array([[0.0], [1.0], [5.0]]), np.ones(3, bool)), [3, 1.5, 4.5])
