"""Small random policies and policy files."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from nearhand.service.policy.format import PolicyFile
from nearhand.service.policy.network import Float32, Policy


def random_policy(
    seed: int = 0, *, n: int = 3, m: int = 2, past_observations: int = 2, past_actions: int = 2
) -> Policy:
    """Return a small random policy."""
    generator = np.random.default_rng(seed)

    def draw(*shape: int) -> Float32:
        return generator.standard_normal(shape).astype(np.float32)

    width = n * (1 + past_observations) + m * past_actions
    return Policy(
        weights=(draw(width, 8), draw(8, m)),
        biases=(draw(8), draw(m)),
        observation_mean=draw(n),
        observation_scale=np.abs(draw(n)) + np.float32(0.5),
        action_middle=draw(m),
        action_half=np.abs(draw(m)) + np.float32(0.5),
        log_sd=draw(m),
        past_observations=past_observations,
        past_actions=past_actions,
    )


@pytest.fixture(scope="session")
def make_policy() -> Callable[..., Policy]:
    """A function that returns a small random policy."""
    return random_policy


@pytest.fixture(scope="session")
def policy_file() -> PolicyFile:
    """A small policy file."""
    return PolicyFile(
        policy=random_policy(),
        rig="crane",
        observations=("a", "b", "c"),
        actions=("u", "v"),
        method="clone",
        novelty={"centre": np.zeros(13, dtype=np.float32)},
        extra={"note": "n"},
    )
