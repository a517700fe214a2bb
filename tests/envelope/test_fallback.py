"""What acts when the policy may not."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from nearhand.service.envelope.fallback import FallbackAction
from nearhand.service.envelope.limits import Float32, Limits
from nearhand.service.rigs import Rig

RigWith = Callable[..., Rig]
PERIOD_NS = 20_000_000


def vector(*values: float) -> Float32:
    """Return a float32 vector."""
    return np.array(values, dtype=np.float32)


def course(fallback: FallbackAction, start: Float32, periods: int) -> list[Float32]:
    """Return the actions of so many periods, none of them seen."""
    actions = [start]
    for period in range(periods):
        actions.append(fallback.act(actions[-1], period * PERIOD_NS))
    return actions[1:]


def test_rest_is_commanded_at_once_whatever_the_slew(rig_with: RigWith) -> None:
    # A stop of category 0 cuts in the same cycle, without a ramp (IEC 60204-1, 9.2.2; from memory).
    limits = Limits.of(rig_with(fallback={"kind": "rest"}, braking=[]))
    (first,) = course(FallbackAction(limits), vector(0.6, 0.7), 1)
    assert np.array_equal(first, limits.rest)
    assert abs(first[1] - 0.7) > limits.slew_step[1]


def test_a_ramp_goes_at_its_rate_to_rest_and_stays(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with(fallback={"ramp_per_s": 0.5}, braking=[]))
    actions = course(FallbackAction(limits), vector(0.6, -0.3), 200)
    assert actions[0] == pytest.approx([0.6 - 0.5 * 1.2 * 0.02, -0.3 + 0.5 * 1.0 * 0.02], abs=1e-6)
    # 0.6 at 0.6/s is one second, 0.4 at 0.5/s is 0.8 s.
    assert actions[48][0] > 1e-3 and actions[51] == pytest.approx(limits.rest, abs=1e-6)
    assert np.array_equal(actions[-1], limits.rest)


def test_a_ramp_faster_than_slew_is_held_to_slew(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with(fallback={"ramp_per_s": 1000.0}, braking=[]))
    (first,) = course(FallbackAction(limits), vector(0.6, 0.7), 1)
    assert first == pytest.approx([0.6 - 0.12, 0.7 - 0.04], abs=1e-6)


def test_hold_keeps_for_its_time_then_ramps_and_begins_anew_after_its_end(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with(fallback={"kind": "hold", "hold_s": 0.1}, braking=[]))
    fallback = FallbackAction(limits)
    start = vector(0.5, 0.5)
    actions = course(fallback, start, 60)
    assert all(np.array_equal(action, start) for action in actions[:5])
    assert actions[5][0] < 0.5
    assert np.array_equal(actions[-1], limits.rest)
    fallback.end()
    again = fallback.act(start, 10**12)
    assert np.array_equal(again, start)


@pytest.mark.parametrize("kind", ["rest", "ramp", "hold"])
@pytest.mark.parametrize("velocity", [1.5, -1.5, 0.004])
def test_an_accelerated_axis_is_braked_to_standstill_not_left_to_coast(
    rig_with: RigWith, kind: str, velocity: float
) -> None:
    rig = rig_with(fallback={"kind": kind, "hold_s": 0.1 if kind == "hold" else 0.0})
    fallback = FallbackAction(Limits.of(rig))
    fallback.see(vector(0.0, velocity), 0)
    action, speed = vector(0.0, 0.1), velocity
    speeds = []
    for period in range(1, 400):
        speed += 0.02 * float(action[0])
        action = fallback.act(action, period * PERIOD_NS)
        assert abs(float(action[0])) <= 0.5 + 1e-6
        speeds.append(speed * np.sign(velocity))
    assert abs(speed) < 1e-3
    assert min(speeds) > -0.05 * abs(velocity)  # no motion back
    assert action[0] == pytest.approx(0.0, abs=1e-2)


def test_an_axis_driven_by_speed_is_told_to_stand(rig_with: RigWith) -> None:
    fallback = FallbackAction(Limits.of(rig_with(braking={"drives": "velocity"}, fallback={"kind": "rest"})))
    fallback.see(vector(0.0, 1.0), 0)
    assert fallback.act(vector(0.6, 0.1), PERIOD_NS)[0] == 0.0


@pytest.mark.parametrize("speed", [-0.9, 0.9])
@pytest.mark.parametrize(("gain", "stuck", "residue"), [(1.0, False, 0.03), (0.5, False, 0.03), (1.0, True, 0.1)])
def test_it_comes_to_rest_though_the_drive_is_weak_or_the_speed_is_stuck(
    rig_with: RigWith, speed: float, gain: float, stuck: bool, residue: float
) -> None:
    limits = Limits.of(rig_with(fallback={"kind": "ramp", "ramp_per_s": 2.0}))
    (axis,) = limits.axes
    assert axis.accelerates
    fallback = FallbackAction(limits)
    action, true, lowest = limits.rest.copy(), speed, abs(speed)
    for period in range(1000):
        observed = np.zeros(8)
        observed[axis.velocity] = speed if stuck else true
        fallback.see(observed, period * PERIOD_NS)
        action = fallback.act(action, period * PERIOD_NS)
        true += gain * float(action[axis.action]) * 1e-9 * PERIOD_NS
        lowest = min(lowest, true * np.sign(speed))
    assert abs(true) < residue and lowest > -residue


@pytest.mark.parametrize("factor", [-5.0, 5.0, 30.0])
def test_a_reading_that_can_be_no_speed_does_not_set_the_machine_moving(rig_with: RigWith, factor: float) -> None:
    limits = Limits.of(rig_with(fallback={"kind": "ramp", "ramp_per_s": 2.0}))
    (axis,) = limits.axes
    fallback = FallbackAction(limits)
    action, true = limits.rest.copy(), 0.3
    for period in range(1000):
        observed = np.zeros(8)
        observed[axis.velocity] = true if period < 5 else factor * (abs(true) + 1.0)
        fallback.see(observed, period * PERIOD_NS)
        if period >= 5:
            action = fallback.act(action, period * PERIOD_NS)
        true += float(action[axis.action]) * 1e-9 * PERIOD_NS
        assert -0.1 < true < 0.31
    assert abs(true) < 0.1


def test_a_speed_that_grows_by_braking_is_not_followed(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with(fallback={"kind": "ramp", "ramp_per_s": 2.0}))
    (axis,) = limits.axes
    fallback = FallbackAction(limits)
    action, true = limits.rest.copy(), 0.5
    for period in range(1000):
        observed = np.zeros(8)
        observed[axis.velocity] = min(0.5 + 1.2 * (0.5 - true), 2.0)
        fallback.see(observed, period * PERIOD_NS)
        action = fallback.act(action, period * PERIOD_NS)
        true += float(action[axis.action]) * 1e-9 * PERIOD_NS
    assert abs(true) < 0.1
