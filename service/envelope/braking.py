"""Braking: no action may leave the set from which the axis can still stop before its limit.

The worst that may follow an action is looked at, towards either limit:

1. for the drive's reaction and one period of transit, the axis may still follow any of the actions of that past;
2. the action is held for a lease, for one more period until its end is noticed, and for as long as the fallback holds;
3. it then falls as fast as slew and the fallback's ramp let it, down to full braking;
4. the axis brakes to standstill.

How far that carries must not exceed the distance left. Whatever action keeps this now, in the next period the action
that slew lets it be lowered to keeps it again: its course is nowhere above the one looked at. From inside the set,
braking and slew therefore never conflict; from outside, slew wins and braking moves the action as fast as slew lets it.

For an axis driven by speed, without past, this is the soft limit u ≤ −d·h + √(d²h² + 2·d·D).
Source: stopping distance v·t + v²/(2d) of elementary kinematics; the invariance is derived here, and tested with an
exactly sampled double integrator.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.limits import Axis, Float32, Limits

#: Bisections for the highest action; the result errs towards the limit's safe side by range / 2**HALVINGS.
HALVINGS = 20
#: Easing out begins this many reaction times before standstill; a loop with that much delay does not swing about it.
EASING = 3.0


def easing_s(axis: Axis, period_s: float) -> float:
    """Return the time constant with which the last of an accelerated axis' speed is taken away."""
    return EASING * (period_s + axis.reaction_s)


def towards_standstill(axis: Axis, velocity: float, period_s: float) -> float:
    """Return the action that brings the axis to standstill: full braking, eased out so that it does not reverse.

    Args:
        velocity: in the axis' units per second.
    """
    if not axis.accelerates:
        return 0.0
    return -math.copysign(min(axis.deceleration, abs(velocity) / easing_s(axis, period_s)), velocity)


@dataclass(frozen=True, slots=True)
class Brake:
    """Braking towards one limit; speeds and accelerations count positive towards it.

    Attributes:
        accelerates: whether the action is an acceleration, else a speed.
        strongest: the highest action there is.
        deceleration: what the axis brakes with.
        ramp_per_s: how fast the action can be lowered.
        hold_s: how long an action may be held without a new one.
        period_s: length of each pending action.
        easing_s: see :func:`easing_s`; 0 for none.
        most_pending: how many actions may be pending.
        margin: how much farther than v²/(2d) easing out carries the axis, at most: d·τ²/2.
        ahead_s, gain, half_per_deceleration: how long the highest action may go on, the speed that it brings, 1/(2d).
    """

    accelerates: bool
    strongest: float
    deceleration: float
    ramp_per_s: float
    hold_s: float
    period_s: float
    easing_s: float = 0.0
    most_pending: int = 0
    margin: float = field(init=False)
    ahead_s: float = field(init=False)
    gain: float = field(init=False)
    half_per_deceleration: float = field(init=False)

    def __post_init__(self) -> None:
        ahead_s, strongest, d = (
            self.hold_s + self.most_pending * self.period_s,
            max(self.strongest, 0.0),
            self.deceleration,
        )
        if self.accelerates:
            ahead_s += (strongest + d) / self.ramp_per_s
            gain = strongest * ahead_s
        else:
            gain, d = strongest, min(d, self.ramp_per_s)
        object.__setattr__(self, "margin", self.deceleration * self.easing_s * self.easing_s / 2.0)
        object.__setattr__(self, "ahead_s", ahead_s)
        object.__setattr__(self, "gain", gain)
        object.__setattr__(self, "half_per_deceleration", 0.5 / d)

    def furthest(self, speed: float, action: float, pending: Sequence[float] = ()) -> float:
        """Return how far the axis may come from here.

        Args:
            speed: towards the limit.
            action: the action considered.
            pending: upper bounds, period by period, of what the drive may still follow before the action.
        """
        if self.accelerates:
            return self._furthest_accelerated(speed, action, pending)
        return self._furthest_at_speed(speed, action, pending)

    def _furthest_accelerated(self, speed: float, action: float, pending: Sequence[float]) -> float:
        # The accelerations never rise along the way, so the speed changes from towards to away at most once.
        place, d = 0.0, self.deceleration
        for acceleration, time_s in (*((max(one, action), self.period_s) for one in pending), (action, self.hold_s)):
            after = speed + acceleration * time_s
            if speed > 0.0 >= after:
                return place - speed * speed / (2.0 * acceleration)
            place += (speed + after) / 2.0 * time_s
            speed = after
        if action > -d:
            time_s = (action + d) / self.ramp_per_s
            after = speed + (action - d) / 2.0 * time_s
            if after <= 0.0:
                inside = action * action + 2.0 * self.ramp_per_s * speed
                turn_s = (action + math.sqrt(inside)) / self.ramp_per_s if inside > 0.0 else 0.0
                turn_s = max(turn_s, 0.0)
                return max(place + turn_s * (speed + turn_s * (action / 2.0 - self.ramp_per_s * turn_s / 6.0)), 0.0)
            place += time_s * (speed + time_s * (action / 2.0 - (action + d) / 6.0))
            speed = after
        return max(place + (speed * speed / (2.0 * d) if speed > 0.0 else 0.0), 0.0)

    def _furthest_at_speed(self, speed: float, action: float, pending: Sequence[float]) -> float:
        place, d = 0.0, min(self.deceleration, self.ramp_per_s)
        for command in pending:
            place += max(command, action, speed, 0.0) * self.period_s
            speed = max(command, action, speed - d * self.period_s)
        if speed > action:
            slowing_s = (speed - action) / d
            if slowing_s >= self.hold_s or action <= 0.0:
                return place + max(speed, 0.0) ** 2 / (2.0 * d)
            place += (speed + action) / 2.0 * slowing_s
            return place + action * (self.hold_s - slowing_s) + action * action / (2.0 * d)
        return place + max(action, 0.0) * self.hold_s + max(action, 0.0) ** 2 / (2.0 * d)

    def highest(self, room: float, speed: float, wanted: float, floor: float, pending: Sequence[float] = ()) -> float:
        """Return ``wanted``, lowered as far as the room needs it, but not below ``floor``.

        Args:
            room: distance left to the limit, less the margin.
            floor: what brings the axis to standstill.
        """
        if wanted <= floor or self.furthest(speed, wanted, pending) <= room:
            return wanted
        if not self.furthest(speed, floor, pending) <= room:
            return floor
        good, bad = floor, wanted
        for _ in range(HALVINGS):
            middle = (good + bad) / 2.0
            if self.furthest(speed, middle, pending) <= room:
                good = middle
            else:
                bad = middle
        return good

    def is_far(self, room: float, speed: float) -> bool:
        """Tell, quickly, whether even the highest action all along would not use up the room."""
        if self.accelerates:
            top = (speed if speed > 0.0 else 0.0) + self.gain
        else:
            top = speed if speed > self.gain else self.gain
        return top * (self.ahead_s + top * self.half_per_deceleration) <= room


class AxisGuard:
    """Keeps one axis' action inside the braking set; remembers the actions that the drive may still follow.

    Args:
        axis: the axis.
        limits: of the rig that it belongs to.
    """

    def __init__(self, axis: Axis, limits: Limits) -> None:
        self.axis = axis
        self._period_s = limits.period_s
        low, high = float(limits.low[axis.action]), float(limits.high[axis.action])
        step = limits.slew_step if limits.at_once else limits.ramp_step
        ramp_per_s = max(float(step[axis.action]) / limits.period_s, 1e-9)
        hold_s = limits.lease_s + limits.period_s + limits.hold_s
        eased = easing_s(axis, limits.period_s) if axis.accelerates else 0.0

        pending = 1 + math.ceil(axis.reaction_s / limits.period_s - 1e-9)

        def brake(strongest: float, weakest: float) -> Brake:
            reach = min(axis.deceleration, max(-weakest, 1e-9)) if axis.accelerates else axis.deceleration
            return Brake(axis.accelerates, strongest, reach, ramp_per_s, hold_s, limits.period_s, eased, pending)

        self._up, self._down = brake(high, low), brake(-low, -high)
        self._recent: deque[float] = deque(maxlen=pending)

    def restart(self, action: float) -> None:
        """Forget the past: the drive has long been following ``action``."""
        self._recent.extend([action] * (self._recent.maxlen or 1))

    def note(self, action: float) -> None:
        """Note the action that was in force for the last period."""
        self._recent.appendleft(action)

    def keep(self, position: float, velocity: float, wanted: float) -> float:
        """Return ``wanted``, or the nearest action from which the axis can still stop before both limits.

        Args:
            position, velocity: as observed, in the axis' units.
        """
        up_room = self.axis.high - position - self._up.margin
        down_room = position - self.axis.low - self._down.margin
        if self._up.is_far(up_room, velocity) and self._down.is_far(down_room, -velocity):
            return wanted
        still = towards_standstill(self.axis, velocity, self._period_s)
        up_pending, down_pending = _bounds(self._recent), _bounds([-one for one in self._recent])
        # Neither side asks for more than standstill, and neither refuses what brings it: the two never conflict.
        lowered = self._up.highest(up_room, velocity, wanted, still, up_pending)
        return -self._down.highest(down_room, -velocity, -lowered, -still, down_pending)


def _bounds(recent: Sequence[float] | deque[float]) -> list[float]:
    """Return, period by period, the highest of the past actions that a late drive may still follow.

    Args:
        recent: actions of the past periods, newest first.
    """
    highest: list[float] = []
    top = -math.inf
    for one in recent:
        top = max(top, one)
        highest.append(top)
    highest.reverse()
    return highest


class Guards:
    """The guards of all of a rig's axes."""

    def __init__(self, limits: Limits) -> None:
        self._guards = tuple(AxisGuard(axis, limits) for axis in limits.axes)
        self.restart(limits.rest)

    def restart(self, action: Float32) -> None:
        """Forget the past: the machine has long been following ``action`` (m,)."""
        for guard in self._guards:
            guard.restart(float(action[guard.axis.action]))

    def note(self, action: Float32) -> None:
        """Note the action (m,) that was in force for the last period."""
        for guard in self._guards:
            guard.note(float(action[guard.axis.action]))

    def keep(self, action: list[float], observation: Sequence[float] | NDArray[np.floating]) -> bool:
        """Change ``action``, m numbers, in place where braking asks for it; tell whether it did.

        Args:
            observation: (n,) finite.
        """
        changed = False
        for guard in self._guards:
            axis = guard.axis
            wanted = action[axis.action]
            kept = guard.keep(float(observation[axis.position]), float(observation[axis.velocity]), wanted)
            if kept != wanted:
                action[axis.action] = kept
                changed = True
        return changed
