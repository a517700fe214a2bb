"""A small rig."""

from __future__ import annotations

import pytest

from nearhand.service.rigs import Rig, rig_from_toml

RIG_TOML = """
name = "cart"
title = "Cart on a track"
observations = [
    { name = "position", unit = "m", low = -2.0, high = 2.0 },
    { name = "speed", unit = "m/s", low = -1.0, high = 1.0 },
    { name = "angle", unit = "rad", low = -0.5, high = 0.5 },
]
actions = [{ name = "push", unit = "m/s2", low = -1.0, high = 1.0, slew_per_s = 10.0 }]

[timing]
period_s = 0.02
deadline_s = 0.06
lease_s = 0.06
"""


@pytest.fixture(scope="session")
def rig() -> Rig:
    """A rig with three observation channels and one action channel."""
    return rig_from_toml(RIG_TOML)
