"""What acts when the policy may not: bring the machine to rest, at once, by a ramp, or after holding for a while.

These correspond to the idea of stop categories in IEC 60204-1 and are not a safety function. For an axis whose action
is an acceleration, rest is standstill, not the action zero: the fallback decelerates it until its speed is gone.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.braking import towards_standstill
from nearhand.service.envelope.chain import slew
from nearhand.service.envelope.limits import Float32, Limits

#: A speed is estimated forward over at most this long at once; a longer silence tells nothing of what was applied.
LONGEST_ESTIMATE_S = 1.0
#: A speed is doubted after so many reaction times of braking, if it shows less than this share of the effect.
DOUBT, ANSWER = 4.0, 0.3


class FallbackAction:
    """The fallback of one rig, with its memory of time and speeds.

    ``rest`` commands the rest action at once: the slew limit does not apply to it, the range does. ``ramp`` goes there
    at the fallback's rate, never faster than slew, one step per call: call it once per control period. ``hold`` keeps
    the last action for a bounded time, then ramps. Braking axes are brought to standstill in place of ``rest``; a speed
    that does not answer to the braking is not believed.

    Args:
        limits: the rig's limits.
    """

    def __init__(self, limits: Limits) -> None:
        self._limits = limits
        self._speeds = [0.0] * len(limits.axes)
        self._speeds_ns: list[int | None] = [None] * len(limits.axes)
        self._since_ns: int | None = None
        self._begun_speeds, self._reckoned = list(self._speeds), list(self._speeds)
        self._reckoned_ns = 0

    def see(self, observation: Sequence[float] | NDArray[np.floating], now_ns: int) -> None:
        """Note the axes' speeds from a finite observation (n,); a reading that can be no speed is left out."""
        for index, axis in enumerate(self._limits.axes):
            speed = float(observation[axis.velocity])
            if -axis.fastest <= speed <= axis.fastest:
                self._speeds[index], self._speeds_ns[index] = speed, now_ns

    def end(self) -> None:
        """The fallback no longer acts; the next time it begins anew."""
        self._since_ns = None

    def act(self, previous: Float32, now_ns: int) -> Float32:
        """Return the next action (m,).

        The axes' speeds are those last seen, estimated forward as if ``previous`` had been in force since. Without
        new observations, what a late drive still had to follow at the last one stays unknown: a residual speed of at
        most its acceleration times its delay remains.

        Args:
            previous: (m,) the action in force, inside the range.
            now_ns: monotonic time.
        """
        begins = self._since_ns is None
        if self._since_ns is None or now_ns < self._since_ns:
            # A clock that was set back must not prolong the hold.
            self._since_ns = now_ns if self._since_ns is None else now_ns - round(self._limits.hold_s * 1e9)
        self._estimate(previous, now_ns)
        self._reckon(previous, now_ns, begins=begins)
        if (now_ns - self._since_ns) * 1e-9 < self._limits.hold_s:
            return previous.copy()
        target = self._limits.rest.copy()
        for index, axis in enumerate(self._limits.axes):
            target[axis.action] = towards_standstill(axis, self._believed_speed(index), self._limits.period_s)
        if self._limits.at_once:
            return np.minimum(np.maximum(target, self._limits.low), self._limits.high)
        return slew(self._limits, target, previous, self._limits.ramp_step)

    def _reckon(self, previous: Float32, now_ns: int, *, begins: bool) -> None:
        """Keep an account of the speeds that the actions since the fallback's begin should have brought."""
        if begins:
            self._begun_speeds, self._reckoned = list(self._speeds), list(self._speeds)
        elif now_ns > self._reckoned_ns:
            passed_s = min((now_ns - self._reckoned_ns) * 1e-9, LONGEST_ESTIMATE_S)
            for index, axis in enumerate(self._limits.axes):
                self._reckoned[index] += float(previous[axis.action]) * passed_s
        self._reckoned_ns = now_ns

    def _believed_speed(self, index: int) -> float:
        """Return an axis' speed as observed, or as reckoned where the observed one does not answer to the braking.

        A sensor that is stuck would else have the axis driven backwards for ever.
        """
        axis, speed = self._limits.axes[index], self._speeds[index]
        expected = self._reckoned[index] - self._begun_speeds[index]
        doubtful = abs(expected) > axis.deceleration * DOUBT * (self._limits.period_s + axis.reaction_s)
        # The answer must also go the same way: a sensor that reads more the longer one brakes is not to be followed.
        answer = (speed - self._begun_speeds[index]) * np.sign(expected)
        if axis.accelerates and doubtful and answer < ANSWER * abs(expected):
            return self._reckoned[index]
        return speed

    def _estimate(self, previous: Float32, now_ns: int) -> None:
        """Advance the accelerated axes' speeds to now."""
        for index, axis in enumerate(self._limits.axes):
            since_ns = self._speeds_ns[index]
            if since_ns is not None and now_ns > since_ns:
                passed_s = min((now_ns - since_ns) * 1e-9, LONGEST_ESTIMATE_S)
                if axis.accelerates:
                    self._speeds[index] += float(previous[axis.action]) * passed_s
                self._speeds_ns[index] = now_ns
