"""The budget against a step-by-step simulation of the worst case, and its warnings."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from nearhand.client.options import rig_text
from nearhand.service.envelope.budget import budgets, unbraked, way_to_standstill
from nearhand.service.rigs import Rig

RigWith = Callable[..., Rig]


def simulated(rig: Rig, speed: float) -> float:
    """Return how far the small crane's drive runs towards high, by steps of 0.1 ms."""
    (axis,) = rig.braking
    drive = rig.actions[0]
    ramp_per_s = min(rig.fallback.ramp_per_s * (drive.high - drive.low), drive.slew_per_s)
    hold_s = rig.fallback.hold_s if rig.fallback.kind == "hold" else 0.0
    silent_s = rig.timing.deadline_s + rig.timing.period_s
    pushed_s = silent_s + rig.timing.lease_s + axis.reaction_s + hold_s
    place, now_s, acceleration, step_s = 0.0, 0.0, 0.0, 1e-4
    while speed > 0.0 or now_s < pushed_s:
        if now_s >= pushed_s:
            acceleration = max(acceleration - ramp_per_s * step_s, -axis.deceleration)
        elif now_s >= silent_s:
            acceleration = drive.high
        place += speed * step_s
        speed += acceleration * step_s
        now_s += step_s
    return place


@pytest.mark.parametrize("kind", ["ramp", "hold"])
@pytest.mark.parametrize("speed", [0.3, 1.0, 2.0])
def test_the_way_is_that_of_a_simulated_worst_case(rig_with: RigWith, kind: str, speed: float) -> None:
    rig = rig_with(fallback={"kind": kind, "hold_s": 0.2}, braking={"reaction_s": 0.1})
    (axis,) = rig.braking
    terms = way_to_standstill(rig, axis, "high", speed)
    assert sum(term.travel for term in terms) == pytest.approx(simulated(rig, speed), rel=2e-3)
    assert terms[-1].speed == pytest.approx(0.0, abs=1e-9)


def test_an_axis_driven_by_speed_brakes_from_its_speed(rig_with: RigWith) -> None:
    # v·t + v²/(2d): 1 m/s for 0.12 + 0.06 s, then 0.5 m/s² = 0.18 + 1 m; by hand.
    rig = rig_with(braking={"drives": "velocity"}, actions=[
        {"name": "drive", "unit": "m/s", "low": -2.0, "high": 2.0, "slew_per_s": 6.0},
    ])  # fmt: skip
    (axis,) = rig.braking
    assert sum(term.travel for term in way_to_standstill(rig, axis, "high", 1.0)) == pytest.approx(1.18)


def test_limits_that_are_too_close_are_told(rig_with: RigWith) -> None:
    texts = [text for one in budgets(rig_with(braking={"low": -2.0, "high": 2.0})) for text in one.warnings]
    assert any("full speed is safe nowhere" in text for text in texts)
    assert any("beyond the limit" in text for text in texts)
    wide = rig_with(braking={"low": -30.0, "high": 30.0})
    assert [one.warnings for one in budgets(wide)] == [(), ()]
    close = rig_with(braking={"low": -5.0, "high": 5.001})
    assert any("so close" in text for one in budgets(close) for text in one.warnings)


def test_each_end_of_each_axis_and_what_has_no_axis(rig_with: RigWith) -> None:
    rig = rig_with(braking={"low": -30.0, "high": 30.0})
    high, low = budgets(rig)
    assert (high.end, low.end) == ("high", "low") and high.travel == pytest.approx(low.travel)
    assert high.brakes_from == pytest.approx(30.0 - high.travel) and low.brakes_from == pytest.approx(-30 + low.travel)
    assert unbraked(rig) == ("hoist",)


def test_the_cranes_limits_leave_room() -> None:
    rig, _ = rig_text("crane")
    for one in budgets(rig):
        assert not one.warnings
        assert 0.0 < one.speed_at_range_end < one.full_speed
        assert one.seconds > rig.timing.deadline_s
