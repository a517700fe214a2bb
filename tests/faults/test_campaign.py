"""Faults in a closed loop of real processes: each kind once, and the oracle itself against known wrongs."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest

from nearhand.client.faults.campaign import run
from nearhand.client.faults.injections import KINDS
from nearhand.client.faults.oracle import Oracle, furthest
from nearhand.client.options import rig_text
from nearhand.service.rigs import Rig

CALM = [8.0, 0.0, 0.0, 0.0, 4.0, 2.0]


@pytest.fixture(scope="module")
def crane() -> Rig:
    """The crane that comes with Nearhand."""
    return rig_text("crane")[0]


def test_no_action_breaks_a_rule_whatever_fails() -> None:
    result = run(count=len(KINDS))
    assert result["violations"] == []
    assert result["figures"]["kinds"] == len(KINDS) >= 12
    assert result["figures"]["trips"] >= 5 and result["figures"]["actions judged"] > 500
    assert all(target["met"] for target in result["targets"].values())


def judged(rig: Rig, *steps: tuple[float, str, dict[str, Any]]) -> list[str]:
    """Return what the oracle says of a course of actions, one per control period."""
    oracle = Oracle(rig)
    oracle.permit()
    for action, mode, more in steps:
        if more.get("permit"):
            oracle.permit()
        told = more.get("told", CALM)
        oracle.judge([action], mode, told, [more.get("speed", 0.0)], "test")
    return oracle.violations


def test_the_oracle_lets_a_good_course_pass(crane: Rig) -> None:
    rising: list[tuple[float, str, dict[str, Any]]] = [(0.1 * k, "armed", {}) for k in range(6)]
    assert judged(crane, *rising, (0.4, "latched", {}), (0.3, "armed", {"permit": True})) == []


@pytest.mark.parametrize(
    ("steps", "word"),
    [
        ([(0.7, "armed", {})], "out of range"),
        ([(math.nan, "armed", {})], "not finite"),
        ([(0.3, "armed", {})], "slew"),
        ([(0.1, "armed", {}), (0.0, "latched", {}), (0.1, "armed", {})], "nobody has re-armed"),
        ([(0.1, "armed", {"told": [17.5, 2.0, 0, 0, 4, 0]})], "cannot stop"),
        ([(0.1, "latched", {"speed": 1.0})] * 80, "drives on"),
        ([(0.0, "latched", {"speed": 1.0})] * 800, "is still"),
    ],
    ids=["range", "finite", "slew", "permission", "braking", "drives on", "stands"],
)
def test_the_oracle_sees_each_wrong(crane: Rig, steps: list[tuple[float, str, dict[str, Any]]], word: str) -> None:
    violations = judged(crane, *steps)
    assert any(word in one for one in violations)


def test_the_oracles_stopping_distance_is_that_of_elementary_kinematics(crane: Rig) -> None:
    # Held for t at speed v without acceleration, then the ramp to −d, then v²/(2d); computed by hand for the crane:
    # v = 1 m/s, t = 0.16 s, ramp to −0.5 m/s² at 2.4 m/s³ in 0.20833 s (0.19768 m, leaving 0.94792 m/s).
    (axis,) = crane.braking
    ramp_s = 0.5 / 2.4
    after = 1.0 - 2.4 * ramp_s**2 / 2
    expected = 0.16 + (ramp_s - 2.4 * ramp_s**3 / 6) + after**2 / (2 * 0.5)
    assert furthest(1.0, 0.0, crane, axis) == pytest.approx(expected, rel=5e-3)
    assert np.isclose(after, 0.94792, atol=1e-5)
