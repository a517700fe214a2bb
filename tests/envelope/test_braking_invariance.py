"""No sequence of proposals takes an exactly sampled plant over its limits, lease expiry and a late drive included."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from nearhand.service.envelope.braking import AxisGuard, Guards
from nearhand.service.envelope.chain import limit
from nearhand.service.envelope.fallback import FallbackAction
from nearhand.service.envelope.limits import Limits
from nearhand.service.rigs import Rig

RigWith = Callable[..., Rig]
#: Positions go through float32 (spacing 2.4e-7 at 4 m), velocities too, over hundreds of periods.
ROUNDING_M = 2e-5


class Axis:
    """A double integrator, or an integrator whose speed follows the command at a limited rate; exact zero-order hold.

    The drive obeys ``delay`` periods late.
    """

    def __init__(self, *, accelerates: bool, position: float, velocity: float, delay: int, rate: float) -> None:
        self.accelerates, self.position, self.velocity, self.rate = accelerates, position, velocity, rate
        self.commands: deque[float] = deque([0.0] * delay)
        self.highest = self.lowest = position

    def hold(self, command: float, period_s: float) -> None:
        """Advance by one period; extremes within the period count."""
        self.commands.append(command)
        command = self.commands.popleft()
        if self.accelerates:
            self._advance(command, period_s)
        else:
            gap = command - self.velocity
            slowing_s = min(abs(gap) / self.rate, period_s)
            self._advance(np.sign(gap) * self.rate, slowing_s)
            if slowing_s < period_s:
                self.velocity = command
                self._advance(0.0, period_s - slowing_s)

    def _advance(self, acceleration: float, time_s: float) -> None:
        after = self.velocity + acceleration * time_s
        if self.velocity * after < 0:
            turn = self.position - self.velocity**2 / (2 * acceleration)
            self.highest, self.lowest = max(self.highest, turn), min(self.lowest, turn)
        self.position += (self.velocity + after) / 2 * time_s
        self.velocity = after
        self.highest, self.lowest = max(self.highest, self.position), min(self.lowest, self.position)


def run(
    rig: Rig,
    plan: list[tuple[float, int]],
    *,
    position: float,
    velocity: float = 0.0,
    delay: int = 0,
    lost_at: int | None = None,
    settle: int = 0,
    blind: bool = False,
) -> tuple[Axis, list[float]]:
    """Drive along a plan of (proposal, periods); from ``lost_at`` on no new action comes: lease, then fallback.

    The rig's end still sees its own sensors then, unless it is ``blind``.
    """
    limits = Limits.of(rig)
    guards, fallback = Guards(limits), FallbackAction(limits)
    declared = rig.braking[0]
    axis = Axis(
        accelerates=declared.drives == "acceleration", position=position, velocity=velocity, delay=delay,
        rate=declared.deceleration,
    )  # fmt: skip
    period_s, period_ns = rig.timing.period_s, round(rig.timing.period_s * 1e9)
    lease = round(rig.timing.lease_s / period_s)
    held = limits.rest.copy()
    guards.restart(held)
    applied = []
    proposals = [value for value, periods in plan for _ in range(periods)]
    end = len(proposals) if lost_at is None else min(lost_at, len(proposals))
    for step in range(end + settle):
        observation = np.array([axis.position, axis.velocity], dtype=np.float32)
        guards.note(held)
        if step < end:
            fallback.see(observation, step * period_ns)
            proposed = np.array([proposals[step], 0.0], dtype=np.float32)
            held = limit(limits, proposed, held, observation, guards).action
        elif step >= end + lease:
            if not blind:
                fallback.see(observation, step * period_ns)
            held = fallback.act(held, step * period_ns)
        applied.append(float(held[0]))
        axis.hold(float(held[0]), period_s)
    return axis, applied


def assert_inside(axis: Axis, rig: Rig) -> None:
    assert axis.highest <= rig.braking[0].high + ROUNDING_M
    assert axis.lowest >= rig.braking[0].low - ROUNDING_M


plans = st.lists(
    st.tuples(st.floats(-1e6, 1e6) | st.sampled_from([-0.6, 0.6, 0.0, 0.3]), st.integers(1, 120)),
    min_size=1, max_size=12,
)  # fmt: skip

VARIANTS: list[dict[str, Any]] = [
    {},
    {"fallback": {"kind": "rest"}},
    {"fallback": {"kind": "hold", "hold_s": 0.3}},
    {"fallback": {"kind": "ramp", "ramp_per_s": 0.4}},
    {"braking": {"reaction_s": 0.1}},
    {"braking": {"deceleration": 0.6, "reaction_s": 0.05}, "timing": {"period_s": 0.05, "lease_s": 0.1}},
    {"braking": {"drives": "velocity", "deceleration": 0.8}},
    {"braking": {"drives": "velocity", "deceleration": 50.0, "reaction_s": 0.06}},
    {"braking": {"low": -0.3, "high": 0.4, "reaction_s": 0.04}},
]


@pytest.mark.parametrize("changes", VARIANTS, ids=str)
@settings(max_examples=40)
@given(
    plan=plans,
    position=st.floats(-0.9, 0.9),
    share=st.floats(0, 1),
    lost_at=st.none() | st.integers(0, 400),
    blind=st.booleans(),
)
def test_the_axis_never_leaves_its_range(
    rig_with: RigWith, changes: dict[str, Any], plan: list[tuple[float, int]], position: float, share: float,
    lost_at: int | None, blind: bool,
) -> None:  # fmt: skip
    rig = rig_with(**changes)
    declared = rig.braking[0]
    middle, half = (declared.high + declared.low) / 2, (declared.high - declared.low) / 2
    # An unseen speed can be reckoned forward only if the drive obeys at once.
    delay = 0 if blind else round(share * np.ceil(declared.reaction_s / rig.timing.period_s - 1e-9))
    lease = round(rig.timing.lease_s / rig.timing.period_s)
    start = middle + position * (half - 0.1)
    settle = lease + 1200 if lost_at is not None else 0
    axis, _ = run(rig, plan, position=start, delay=delay, lost_at=lost_at, settle=settle, blind=blind)
    assert_inside(axis, rig)


@pytest.mark.parametrize("changes", VARIANTS, ids=str)
@pytest.mark.parametrize("side", [-1.0, 1.0])
def test_full_speed_ahead_is_stopped_short_of_the_limit_but_near_it(
    rig_with: RigWith, changes: dict[str, Any], side: float
) -> None:
    rig = rig_with(**changes)
    declared = rig.braking[0]
    axis, _ = run(rig, [(side * 9.0, 4000)], position=(declared.high + declared.low) / 2)
    assert_inside(axis, rig)
    gap = declared.high - axis.highest if side > 0 else axis.lowest - declared.low
    # Useful, not only harmless: it comes within what easing and the longest hold at a crawl could need.
    assert gap < 0.25


@pytest.mark.parametrize("blind", [False, True])
@pytest.mark.parametrize("changes", VARIANTS, ids=str)
def test_contact_lost_at_full_speed_ends_at_standstill_inside(
    rig_with: RigWith, changes: dict[str, Any], blind: bool
) -> None:
    rig = rig_with(**changes)
    declared = rig.braking[0]
    periods = 300
    for lost_at in range(20, periods, 23):
        axis, applied = run(
            rig, [(9.0, periods)], position=declared.low + 0.15, lost_at=lost_at, settle=1500, blind=blind
        )
        assert_inside(axis, rig)
        assert abs(axis.velocity) < 1e-3
        assert abs(applied[-1]) < 1e-3


def test_a_fast_start_inside_the_set_is_stopped(rig_with: RigWith) -> None:
    rig = rig_with()
    # Rest for a transit, a lease and a period; a ramp of 2·1.2/s down to −0.5; then v²/(2·0.5), and easing.
    for velocity in (0.2, 0.8, 1.6):
        needed = velocity * (0.02 + 0.08 + 0.5 / 2.4) + velocity**2 / (2 * 0.5) + 0.5 * 0.06**2 / 2
        axis, _ = run(rig, [(9.0, 2000)], position=rig.braking[0].high - needed, velocity=velocity)
        assert_inside(axis, rig)


def test_what_a_late_drive_may_still_follow_is_reckoned_with(rig_with: RigWith) -> None:
    limits = Limits.of(rig_with(braking={"reaction_s": 0.2}))
    resting, accelerating = (AxisGuard(limits.axes[0], limits) for _ in range(2))
    for guard, action in ((resting, 0.0), (accelerating, 0.6)):
        guard.restart(0.0)
        for _ in range(11):
            guard.note(action)
    # Speed 1 m/s with 1.8 m left: 0.2 s and a transit of 0.6 m/s² more make a difference of some 0.13 m/s.
    assert accelerating.keep(2.2, 1.0, 0.5) < resting.keep(2.2, 1.0, 0.5) - 0.05
    for _ in range(11):
        accelerating.note(0.0)
    assert accelerating.keep(2.2, 1.0, 0.5) == resting.keep(2.2, 1.0, 0.5)


@pytest.mark.parametrize("velocity", [-0.5, -0.01, 0.0, 0.01, 0.5])
@pytest.mark.parametrize("wanted", [-0.6, 0.0, 0.6])
def test_between_limits_too_near_for_any_motion_it_only_comes_to_standstill(
    rig_with: RigWith, velocity: float, wanted: float
) -> None:
    limits = Limits.of(rig_with(braking={"low": -5e-4, "high": 5e-4}))
    kept = AxisGuard(limits.axes[0], limits).keep(0.0, velocity, wanted)
    assert kept * velocity <= 0.0
    if velocity == 0.0:
        assert kept == 0.0
