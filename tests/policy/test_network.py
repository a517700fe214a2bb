"""The NumPy policy: history, normalisation and action units."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.policy.network import Policy, Window, episode_windows

MakePolicy = Callable[..., Policy]


def test_a_one_unit_network_is_its_formula() -> None:
    """tanh(0.5·2 − 1) = 0, tanh(0.5·4 − 1) = 0.76159415595576 (tanh 1, any table)."""
    one = np.ones(1, dtype=np.float32)
    policy = Policy(
        weights=(np.array([[0.5]], dtype=np.float32), np.array([[3.0]], dtype=np.float32)),
        biases=(-one, 0 * one),
        observation_mean=0 * one,
        observation_scale=one,
        action_middle=10 * one,
        action_half=2 * one,
        log_sd=0 * one,
    )
    assert policy.action(np.array([[2.0]], dtype=np.float32))[0, 0] == pytest.approx(10.0)
    assert policy.action(np.array([[4.0]], dtype=np.float32))[0, 0] == pytest.approx(10 + 2 * 3 * 0.76159415595576)


@given(
    past_observations=st.integers(0, 3),
    past_actions=st.integers(0, 3),
    steps=st.integers(1, 6),
    seed=st.integers(0, 99),
)
def test_the_window_holds_the_last_values_newest_first(
    make_policy: MakePolicy, past_observations: int, past_actions: int, steps: int, seed: int
) -> None:
    policy = make_policy(seed, past_observations=past_observations, past_actions=past_actions)
    generator = np.random.default_rng(seed)
    observations = generator.standard_normal((steps + 1, 3)).astype(np.float32)
    actions = generator.standard_normal((steps, 2)).astype(np.float32)
    rest = np.zeros(2, dtype=np.float32)
    rows = episode_windows(policy, observations, actions, rest)
    for t in range(steps + 1):
        seen = [observations[max(t - k, 0)] for k in range(past_observations + 1)]
        done = [actions[t - k] if t - k >= 0 else rest for k in range(1, past_actions + 1)]
        expected = np.concatenate(
            [(o - policy.observation_mean) / policy.observation_scale for o in seen]
            + [(a - policy.action_middle) / policy.action_half for a in done]
        )
        np.testing.assert_allclose(rows[t], expected, rtol=1e-6, atol=1e-6)


def test_a_batch_is_its_episodes_side_by_side(make_policy: MakePolicy, generator: np.random.Generator) -> None:
    policy = make_policy()
    observations = generator.standard_normal((5, 4, 3)).astype(np.float32)
    actions = generator.standard_normal((4, 4, 2)).astype(np.float32)
    rest = np.ones(2, dtype=np.float32)
    batch = Window(policy, 4, rest)
    batch.start(observations[0])
    for t in range(4):
        batch.acted(actions[t])
        batch.observed(observations[t + 1])
    for index in range(4):
        alone = episode_windows(policy, observations[:, index], actions[:, index], rest)
        np.testing.assert_array_equal(batch.values[index], alone[-1])
