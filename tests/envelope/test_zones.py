"""Forbidden zones: prediction, reach, and what a machine does before one."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm

from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.chain import limit
from nearhand.service.envelope.limits import Limits
from nearhand.service.envelope.zones import TIMES, Zones, prediction
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Rig, rig_from_toml

RigWith = Callable[..., Rig]
RATES = {"position": "velocity", "velocity": "drive"}
#: Between 1 m and 2 m nothing may be faster than 0.4 m/s, looked at one second ahead.
SLOW: dict[str, Any] = {
    "name": "people",
    "ahead_s": 1.0,
    "inside": [
        {"of": {"position": 1.0}, "at_least": 1.0},
        {"of": {"position": 1.0}, "at_most": 2.0},
        {"of": {"velocity": 1.0}, "at_least": 0.4},
    ],
}


def zoned(rig_with: RigWith, *zones: dict[str, Any], **changes: Any) -> Rig:
    """Return the small crane with forbidden zones."""
    return rig_with(zones=list(zones), rates=RATES, **changes)


def test_the_prediction_is_the_exponential_of_the_declared_rates(rig_with: RigWith) -> None:
    # x' = A·x + B·u with u held: the blocks of expm([[A, B], [0, 0]]·h), as SciPy computes them.
    rig = zoned(rig_with, SLOW)
    block = np.zeros((4, 4))
    block[0, 1] = block[1, 2] = 1.0
    for ahead_s in (0.06, 1.0, 7.0):
        p, q = prediction(rig, ahead_s)
        whole = expm(block * ahead_s)
        assert p == pytest.approx(whole[:2, :2]) and q == pytest.approx(whole[:2, 2:])


def test_a_minus_sign_says_that_a_channel_falls_with_its_rate(rig_with: RigWith) -> None:
    rig = rig_with(zones=[SLOW], rates={"position": "-velocity", "velocity": "drive"})
    p, q = prediction(rig, 2.0)
    assert p[0, 1] == pytest.approx(-2.0) and q[0, 0] == pytest.approx(-2.0)


@settings(max_examples=400)
@given(
    position=st.floats(-5, 5), velocity=st.floats(-2, 2), wanted=st.floats(-0.6, 0.6), held=st.floats(-0.6, 0.6),
    hoist=st.floats(-0.3, 0.7), ahead_s=st.floats(0, 3), speed=st.floats(-1, 1),
)  # fmt: skip
def test_within_magnitude_and_slew_always_and_out_of_the_zone_wherever_an_action_leads_out(
    rig_with: RigWith, position: float, velocity: float, wanted: float, held: float, hoist: float, ahead_s: float,
    speed: float,
) -> None:  # fmt: skip
    inside = [*SLOW["inside"][:2], {"of": {"velocity": 1.0}, "at_least": speed}]
    rig = zoned(rig_with, {"name": "z", "ahead_s": ahead_s, "inside": inside}, braking=[])
    limits = Limits.of(rig)
    previous = np.array([held, hoist], dtype=np.float32)
    row = np.array([position, velocity], dtype=np.float32)
    result = limit(limits, [wanted, hoist], previous, row, Guards(limits))
    action = result.action.astype(np.float64)
    assert (action >= limits.low - 1e-6).all() and (action <= limits.high + 1e-6).all()
    assert (np.abs(action - previous) <= limits.slew_step + 1e-6).all()
    lease_s = rig.timing.lease_s
    predicted = [prediction(rig, float(after_s)) for after_s in np.linspace(lease_s, max(ahead_s, lease_s), TIMES)]

    def depth(drive: float) -> float:
        then = [p @ row + q @ np.array([drive, hoist]) for p, q in predicted]
        return max(float(min(one[0] - 1.0, 2.0 - one[0], one[1] - speed)) for one in then)

    low = max(float(limits.low[0]), held - float(limits.slew_step[0]))
    high = min(float(limits.high[0]), held + float(limits.slew_step[0]))
    if min(depth(low), depth(high)) < -1e-4:
        assert depth(float(action[0])) <= 1e-4
    free = limit(Limits.of(rig_with(braking=[])), [wanted, hoist], previous, row, Guards(limits)).action
    assert result.zoned or result.action == pytest.approx(free)


def test_a_machine_that_wants_full_speed_passes_people_slowly_and_goes_on(rig_with: RigWith) -> None:
    limits = Limits.of(zoned(rig_with, {**SLOW, "ahead_s": 3.0}))
    guards = Guards(limits)
    position, velocity, held = -2.5, 0.0, limits.rest
    fastest_inside, zoned_periods, period_s = 0.0, 0, limits.period_s
    for _ in range(1500):
        guards.note(held)
        row = np.array([position, velocity], dtype=np.float32)
        result = limit(limits, [0.3 if velocity < 1.2 else 0.0, 0.1], held, row, guards)
        held = result.action
        zoned_periods += result.zoned
        position += velocity * period_s + float(held[0]) * period_s**2 / 2
        velocity += float(held[0]) * period_s
        if 1.0 < position < 2.0:
            fastest_inside = max(fastest_inside, velocity)
    assert zoned_periods > 50
    assert fastest_inside < 0.41
    assert position > 2.0


def test_without_zones_nothing_is_computed(rig_with: RigWith) -> None:
    assert Limits.of(rig_with()).zones is None
    zones = Zones(zoned(rig_with, SLOW))
    action = [0.1, 0.1]
    assert not zones.keep(action, [-4.0, 0.0], [-0.6, -0.3], [0.6, 0.7]) and action == [0.1, 0.1]


@pytest.mark.parametrize(
    ("change", "word"),
    [
        ('[rates]\nposition = "speed"', "rates"),
        ('[rates]\nposition = "position"', "rates"),
        ('[[zones]]\nname = "z"\ninside = [{of = {height = 1.0}, at_least = 1.0}]', "no observation channel"),
        ('[[zones]]\nname = "z"\ninside = [{of = {position = 1.0}, at_least = 1.0}]', "no action moves"),
        ('[[zones]]\nname = "z"\ninside = [{of = {position = 1.0}}]', "exactly one"),
        ('[[zones]]\nname = "z"\ninside = []', "inside"),
        ('[rates]\nposition = "velocity"\nvelocity = "position"\n[[zones]]\nname = "z"\n'
         'inside = [{of = {position = 1.0}, at_most = 1.0}]', "no action moves"),
    ],
)  # fmt: skip
def test_zones_that_cannot_be_kept_are_refused_in_words(change: str, word: str) -> None:
    toml = """
name = "rig"
title = "rig"
observations = [
    {name = "position", unit = "m", low = 0.0, high = 1.0},
    {name = "velocity", unit = "m/s", low = 0.0, high = 1.0},
]
actions = [{name = "drive", unit = "m/s²", low = -1.0, high = 1.0, slew_per_s = 1.0}]
timing = {period_s = 0.02, deadline_s = 0.1, lease_s = 0.06}
"""
    rig_from_toml(toml)
    with pytest.raises(ConfigError, match=word):
        rig_from_toml(toml + change)
