"""Judges every action that a plant receives, by rules of its own: nothing here is taken from the envelope's code.

Lengths of time are wall-clock of the process that drives the plant. An action stands for one control period.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from nearhand.service.rigs import Braking, Rig

#: float32 rounding of an action in the rig's units.
ROUNDING = 1e-5
#: A fallback that has ramped for so long must not drive any more.
SETTLING_SHARE = 1.5
#: Product of acceleration and speed (m²/s³) that counts as driving on.
DRIVING_ON = 0.02
STANDING = 0.05
STEP_S = 0.002


class Oracle:
    """Keeps the rules for one rig whose braking axes are accelerated.

    Args:
        rig: its description.

    Attributes:
        violations: what was broken, in words.
        judged: actions looked at.
        trips: how often the policy's permission has ended.
        arms: how often the policy has begun to act.
    """

    def __init__(self, rig: Rig) -> None:
        self._rig = rig
        self._low = np.array([channel.low for channel in rig.actions])
        self._high = np.array([channel.high for channel in rig.actions])
        self._step = np.array([channel.slew_per_s for channel in rig.actions]) * rig.timing.period_s
        self._observed = [channel.name for channel in rig.observations]
        self._acted = [channel.name for channel in rig.actions]
        self.violations: list[str] = []
        self.judged = self.trips = self.arms = 0
        self._acting = False
        self._permits = self._permits_at_trip = 0
        self._fallen_periods = 0
        self._past: list[NDArray[np.float64]] = []
        self.begin()

    def begin(self) -> None:
        """A new episode: the machine is at rest and holds its rest action."""
        self._held = np.array([channel.rest for channel in self._rig.actions])
        self._past = [self._held] * 50
        self._fallen_periods = 0

    def permit(self) -> None:
        """An operator is about to re-arm."""
        self._permits += 1

    def judge(
        self, action: Sequence[float], mode: str, told: Sequence[float], speeds: Sequence[float], note: str
    ) -> None:
        """Look at one action.

        Args:
            action: (m,) what the plant is about to receive.
            mode: what the rig's end says of who acts.
            told: (n,) what the rig observed, as it told it.
            speeds: true speed of each braking axis.
            note: what was going on, for the record.
        """
        self.judged += 1
        now = np.asarray(action, dtype=np.float64)
        if not np.isfinite(now).all():
            self._break(note, f"action {action} is not finite")
            return
        if (now < self._low - ROUNDING).any() or (now > self._high + ROUNDING).any():
            self._break(note, f"action {action} is out of range")
        if (np.abs(now - self._held) > self._step + ROUNDING).any():
            self._break(note, f"action {action} is not within slew of {self._held.tolist()}")
        self._judge_permission(mode, note)
        for axis, speed in zip(self._rig.braking, speeds, strict=True):
            if mode == "armed":
                self._judge_braking(axis, now, told, note)
            else:
                self._judge_fallback(axis, float(now[self._acted.index(axis.action)]), speed, note)
        self._held = now
        self._past = [now, *self._past[:49]]

    def _judge_permission(self, mode: str, note: str) -> None:
        if mode == "armed" and not self._acting:
            if self._permits <= self._permits_at_trip:
                self._break(note, "the policy acts, and nobody has re-armed")
            self.arms += 1
        if mode != "armed" and self._acting:
            self.trips += 1
            self._permits_at_trip = self._permits
        self._acting = mode == "armed"
        self._fallen_periods = 0 if self._acting else self._fallen_periods + 1

    def _judge_fallback(self, axis: Braking, action: float, speed: float, note: str) -> None:
        """Nobody permits action: the machine must be coming to rest, and then stand."""
        fallen_s = self._fallen_periods * self._rig.timing.period_s
        reach = self._high[self._acted.index(axis.action)] - self._low[self._acted.index(axis.action)]
        ramp_s = SETTLING_SHARE * (self._rig.timing.lease_s + 1.0 / self._rig.fallback.ramp_per_s)
        if fallen_s > ramp_s and action * speed > DRIVING_ON:
            self._break(
                note, f"{axis.action} = {action:.3f} drives on at {speed:.3f} after {fallen_s:.2f} s of fallback"
            )
        top = max(abs(channel.high) for channel in self._rig.observations if channel.name == axis.velocity)
        if fallen_s > ramp_s + SETTLING_SHARE * (top / axis.deceleration + reach) and abs(speed) > STANDING:
            self._break(note, f"{axis.velocity} is still {speed:.3f} after {fallen_s:.2f} s of fallback")

    def _judge_braking(self, axis: Braking, now: NDArray[np.float64], told: Sequence[float], note: str) -> None:
        """From where the rig said it is, the axis can still stop, or it brakes as fast as slew lets it."""
        place = float(told[self._observed.index(axis.position)])
        speed = float(told[self._observed.index(axis.velocity)])
        if not (math.isfinite(place) and math.isfinite(speed)):
            return
        index = self._acted.index(axis.action)
        step = float(self._step[index])
        for sign, room in ((1.0, axis.high - place), (-1.0, place - axis.low)):
            action = sign * float(now[index])
            gentlest = sign * float(self._held[index]) - step
            if action <= gentlest + ROUNDING:
                continue
            if furthest(sign * speed, action, self._rig, axis) > room + ROUNDING and action > -axis.deceleration:
                # The rule asks for no more than standstill: an action that takes the speed away by itself is enough.
                eased = 3.0 * (self._rig.timing.period_s + axis.reaction_s)
                if action > -min(axis.deceleration, max(sign * speed, 0.0) / eased) + ROUNDING:
                    self._break(
                        note, f"{axis.action} = {sign * action:.3f} at {place:.3f}, {sign * speed:.3f} cannot stop"
                    )

    def _break(self, note: str, what: str) -> None:
        if len(self.violations) < 100:
            self.violations.append(f"{note}: {what}")


def furthest(speed: float, action: float, rig: Rig, axis: Braking) -> float:
    """Return how far the axis runs if the action is held for its lease and it then brakes, by small steps.

    The drive takes ``reaction_s`` to follow; until then what it does is taken to be the action itself.
    """
    channel = next(one for one in rig.actions if one.name == axis.action)
    ramp_per_s = min(rig.fallback.ramp_per_s * (channel.high - channel.low), channel.slew_per_s)
    held_s = axis.reaction_s + rig.timing.lease_s
    place = passed_s = most = 0.0
    acceleration = action
    while passed_s < 60.0:
        place += speed * STEP_S + acceleration * STEP_S * STEP_S / 2
        speed += acceleration * STEP_S
        passed_s += STEP_S
        most = max(most, place)
        if passed_s >= held_s:
            acceleration = max(acceleration - ramp_per_s * STEP_S, -axis.deceleration)
        if speed <= 0.0 and acceleration <= 0.0:
            break
    return most
