"""Small rigs, and exactly sampled plants for them."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest

from nearhand.service.rigs import Rig


def make_rig(**changes: Any) -> Rig:
    """Return a rig with one accelerated braking axis and a second, free action channel; tables are merged."""
    table: dict[str, Any] = {
        "name": "yard-crane",
        "title": "crane",
        "observations": [
            {"name": "position", "unit": "m", "low": -5.0, "high": 5.0},
            {"name": "velocity", "unit": "m/s", "low": -2.0, "high": 2.0},
        ],
        "actions": [
            {"name": "drive", "unit": "m/s²", "low": -0.6, "high": 0.6, "slew_per_s": 6.0},
            {"name": "hoist", "unit": "m/s", "low": -0.3, "high": 0.7, "rest": 0.1, "slew_per_s": 2.0},
        ],
        "timing": {"period_s": 0.02, "deadline_s": 0.1, "lease_s": 0.06},
        "fallback": {"kind": "ramp", "ramp_per_s": 2.0},
        "braking": [
            {
                "position": "position", "velocity": "velocity", "action": "drive", "drives": "acceleration",
                "low": -3.0, "high": 4.0, "deceleration": 0.5, "reaction_s": 0.0,
            }
        ],
    }  # fmt: skip
    for key, value in changes.items():
        if key == "braking" and isinstance(value, dict):
            table["braking"] = [{**table["braking"][0], **value}]
        elif isinstance(value, dict):
            table[key] = {**table.get(key, {}), **value}
        else:
            table[key] = value
    return Rig.model_validate(table)


@pytest.fixture(scope="session")
def rig_with() -> Callable[..., Rig]:
    """A function that returns a small rig with changes."""
    return make_rig
