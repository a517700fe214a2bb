"""A store in a fresh file, a rig, a policy file."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest

from nearhand.service.policy.format import PolicyFile, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.service.store.store import Store

RIG_TOML = """
name = "yard-crane"
title = "Travelling crane in a stone yard"
[[observations]]
name = "position"
unit = "m"
low = 0.0
high = 12.0
[[observations]]
name = "swing"
unit = "rad"
low = -1.0
high = 1.0
[[actions]]
name = "acceleration"
unit = "m/s2"
low = -0.6
high = 0.6
slew_per_s = 2.0
[timing]
period_s = 0.05
deadline_s = 0.1
lease_s = 0.1
"""


@pytest.fixture(scope="session")
def rig_toml() -> str:
    """TOML of a crane with two observation channels and one action channel."""
    return RIG_TOML


@pytest.fixture
def rig() -> Rig:
    """That crane."""
    return rig_from_toml(RIG_TOML)


@pytest.fixture
def store(tmp_path: Path) -> Iterator[Store]:
    """A store with nothing in it."""
    opened = Store(tmp_path / "nearhand.sqlite3")
    yield opened
    opened.close()


@pytest.fixture
def stocked(store: Store, rig: Rig, rig_toml: str) -> Store:
    """A store that knows the crane."""
    assert store.rigs.put(rig, rig_toml, "an operator")
    return store


@pytest.fixture(scope="session")
def make_policy_bytes() -> Callable[[int], bytes]:
    """A function that returns a small policy file for the crane, different for each seed."""

    def make(seed: int) -> bytes:
        generator = np.random.default_rng(seed)
        policy = Policy(
            weights=(generator.standard_normal((2, 4)).astype(np.float32), np.ones((4, 1), dtype=np.float32)),
            biases=(np.zeros(4, dtype=np.float32), np.zeros(1, dtype=np.float32)),
            observation_mean=np.zeros(2, dtype=np.float32),
            observation_scale=np.ones(2, dtype=np.float32),
            action_middle=np.zeros(1, dtype=np.float32),
            action_half=np.ones(1, dtype=np.float32),
            log_sd=np.zeros(1, dtype=np.float32),
        )
        return write_policy(
            PolicyFile(policy, "yard-crane", ("position", "swing"), ("acceleration",), "clone", {}, {"seed": seed})
        )

    return make
