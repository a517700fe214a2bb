"""Shared fixtures: deterministic generators and a free context for sockets."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest
import zmq
from hypothesis import HealthCheck, settings

settings.register_profile(
    "nearhand", deadline=None, derandomize=True, max_examples=60, suppress_health_check=[HealthCheck.too_slow]
)
settings.load_profile("nearhand")


@pytest.fixture
def generator() -> np.random.Generator:
    """A seeded generator."""
    return np.random.default_rng(20_240_501)


@pytest.fixture
def context() -> Iterator[zmq.Context[zmq.Socket[bytes]]]:
    """A context of its own whose sockets are all closed at the end."""
    made: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    yield made
    made.destroy(linger=0)
