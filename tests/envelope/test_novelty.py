"""The confidence gate's score and its calibration."""

from __future__ import annotations

import math

import numpy as np
import pytest

from nearhand.service.envelope.novelty import Float32, NoveltyScore, calibrate


def vector(*values: float) -> Float32:
    """Return a float32 vector."""
    return np.array(values, dtype=np.float32)


def windows(generator: np.random.Generator, count: int, d: int = 4) -> Float32:
    """Draw correlated windows whose last channel is constant."""
    rows = generator.standard_normal((count, d)).astype(np.float32)
    rows[:, 1] = 0.9 * rows[:, 0] + 0.1 * rows[:, 1]
    rows[:, -1] = 3.0
    return rows


def test_a_constant_channel_neither_breaks_the_score_nor_hides_a_change(generator: np.random.Generator) -> None:
    episodes = [windows(generator, 30) for _ in range(19)]
    score = NoveltyScore(calibrate(windows(generator, 500), episodes))
    usual = windows(generator, 1)[0]
    assert math.isfinite(score.score(usual))
    changed = usual.copy()
    changed[-1] += 1.0
    assert score.p_value(changed) == pytest.approx(1 / 20)


def test_the_score_grows_without_bound_and_overflows_to_infinity(generator: np.random.Generator) -> None:
    score = NoveltyScore(calibrate(windows(generator, 500), [windows(generator, 30)]))
    direction = vector(1, -1, 1, 0)
    values = [score.score(np.float32(scale) * direction) for scale in (1, 10, 1e3, 1e6)]
    assert values == sorted(values) and values[-1] > 1e5
    assert score.score(vector(3e38, -3e38, 3e38, 3e38)) == math.inf
    assert score.p_value(np.full(4, np.nan, dtype=np.float32)) == score.smallest_epsilon


def test_without_calibration_every_p_value_is_one(generator: np.random.Generator) -> None:
    score = NoveltyScore(calibrate(windows(generator, 50), []))
    assert score.smallest_epsilon == 1.0
    assert score.p_value(np.full(4, 1e6, dtype=np.float32)) == 1.0


def test_the_p_value_counts_the_episodes_that_were_at_least_as_strange() -> None:
    tensors = {
        "centre": np.zeros(1, dtype=np.float32),
        "whitening": np.ones((1, 1), dtype=np.float32),
        "maxima": vector(1, 2, 2, 4),
    }
    score = NoveltyScore(tensors)
    for value, expected in ((0.5, 1.0), (1.0, 1.0), (1.5, 0.8), (2.0, 0.8), (3.0, 0.4), (4.0, 0.4), (5.0, 0.2)):
        assert score.p_value(vector(value)) == pytest.approx(expected)


def test_tensors_are_float32_and_the_calibrated_maxima_are_those_that_serving_gives(
    generator: np.random.Generator,
) -> None:
    episodes = [windows(generator, length) for length in (5, 1, 40)]
    tensors = calibrate(windows(generator, 200), episodes)
    assert all(values.dtype == np.float32 and np.isfinite(values).all() for values in tensors.values())
    score = NoveltyScore(tensors)
    maxima = sorted(np.float32(max(score.score(row) for row in rows)) for rows in episodes)
    assert np.array_equal(tensors["maxima"], maxima)


@pytest.mark.parametrize(
    "bad", [np.zeros((0, 3), np.float32), np.full((4, 3), np.nan, np.float32), np.zeros(3, np.float32)]
)
def test_windows_that_cannot_calibrate_are_refused(bad: Float32) -> None:
    with pytest.raises(ValueError, match="windows"):
        calibrate(bad, [])


def test_tensors_that_do_not_fit_each_other_are_refused(generator: np.random.Generator) -> None:
    tensors = calibrate(windows(generator, 50), [windows(generator, 5)])
    with pytest.raises(ValueError, match="do not fit"):
        NoveltyScore({**tensors, "centre": tensors["centre"][:2]})
    with pytest.raises(KeyError):
        NoveltyScore({"centre": tensors["centre"]})
