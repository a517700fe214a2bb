"""Episodes on the control period, against scipy's interpolators; gaps split, never bridged."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.interpolate import interp1d

from nearhand.service.episodes.episode import Episode, Split
from nearhand.service.episodes.resampling import regular_stretches, resample, split_at_gaps

PERIOD_S = 0.05


def episode_at(times_s: NDArray[np.float64], *, split: Split = "train", terminated: bool = True) -> Episode:
    generator = np.random.default_rng(5)
    return Episode(
        episode="e", rig="r", operator="ann", times_s=times_s, split=split, terminated=terminated,
        observations=generator.standard_normal((len(times_s) + 1, 2)).astype(np.float32),
        actions=generator.standard_normal((len(times_s), 1)).astype(np.float32),
    )  # fmt: skip


def test_what_is_regular_passes_bit_for_bit() -> None:
    episode = episode_at(np.arange(40) * PERIOD_S + np.random.default_rng(1).uniform(-0.004, 0.004, 40))
    (found,) = regular_stretches(episode, PERIOD_S)
    assert found is episode


def test_commands_hold_and_states_interpolate_as_scipy_has_it() -> None:
    times_s = np.cumsum(np.random.default_rng(2).uniform(0.01, 0.12, 60))
    episode = episode_at(times_s)
    found = resample(episode, PERIOD_S)
    assert found is not None
    known_s = np.append(times_s, times_s[-1] + PERIOD_S)
    even_s = times_s[0] + PERIOD_S * np.arange(found.length + 1)
    states = interp1d(known_s, episode.observations, axis=0)(np.minimum(even_s, known_s[-1]))
    held = interp1d(times_s, episode.actions, axis=0, kind="previous", bounds_error=False, fill_value="extrapolate")
    np.testing.assert_allclose(found.observations, states, rtol=0, atol=1e-6)
    np.testing.assert_array_equal(found.actions, held(even_s[:-1] + 1e-9).astype(np.float32))
    np.testing.assert_allclose(found.times_s, even_s[:-1], rtol=0, atol=1e-12)


@given(seed=st.integers(0, 2**32 - 1), count=st.integers(2, 60))
def test_states_stay_within_what_was_recorded_and_commands_are_recorded_ones(seed: int, count: int) -> None:
    episode = episode_at(np.cumsum(np.random.default_rng(seed).uniform(0.001, 0.4, count)))
    recorded = {row.tobytes() for row in episode.actions}
    for part in regular_stretches(episode, PERIOD_S):
        assert len(part.observations) == part.length + 1
        assert (part.observations <= episode.observations.max(axis=0) + 1e-6).all()
        assert (part.observations >= episode.observations.min(axis=0) - 1e-6).all()
        assert {row.tobytes() for row in part.actions} <= recorded
        assert np.diff(part.times_s) == pytest.approx(np.full(part.length - 1, PERIOD_S), abs=0.26 * PERIOD_S)


def test_a_gap_splits_and_nothing_of_it_is_learned() -> None:
    times_s = np.concatenate([np.arange(10), np.arange(30, 50)]) * PERIOD_S
    episode = episode_at(times_s)
    first, second = split_at_gaps(episode, PERIOD_S)
    assert (first.length, second.length) == (9, 20)
    np.testing.assert_array_equal(first.observations, episode.observations[:10])
    np.testing.assert_array_equal(second.observations, episode.observations[10:])
    np.testing.assert_array_equal(second.actions, episode.actions[10:])
    assert (first.terminated, second.terminated) == (False, True)
    assert (first.fragment, second.fragment) == (False, True)
    (longest,) = regular_stretches(episode_at(times_s, split="held-out"), PERIOD_S)
    assert longest.length == 20


def test_times_that_do_not_go_forward_are_left_out() -> None:
    times_s = np.array([0.0, 1.0, 1.0, 2.0, 1.5, 3.0, 4.0]) * PERIOD_S
    (found,) = split_at_gaps(episode_at(times_s), PERIOD_S)
    np.testing.assert_array_equal(found.times_s, times_s[[0, 1, 3, 5, 6]])
    assert len(found.observations) == 6
