"""What acts when the policy may not: bring the machine to rest, at once, by a ramp, or after holding for a while.

These correspond to the idea of stop categories in IEC 60204-1 and are not a safety function. For an axis whose action
is an acceleration, rest is standstill, not the action zero: the fallback decelerates it until its speed is gone.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.braking import towards_standstill
from nearhand.service.envelope.chain import slew
from nearhand.service.envelope.limits import Float32, Limits


class FallbackAction:
    """The fallback of one rig, with its memory of time and speeds.

    ``rest`` commands the rest action at once, whatever the slew limit. ``ramp`` goes there at ``ramp_per_s`` of the
    range per second, never faster than slew. ``hold`` keeps the last action for ``hold_s``, then ramps.

    Args:
        limits: the rig's limits.
        kind: ``rest``, ``ramp`` or ``hold``.
        ramp_per_s: fraction of each channel's range per second.
        hold_s: for ``hold``.
    """

    def __init__(self, limits: Limits, *, kind: str, ramp_per_s: float, hold_s: float) -> None:
        self._limits = limits
        self._kind = kind
        self._hold_s = hold_s if kind == "hold" else 0.0
        ramp = (limits.high - limits.low) * np.float32(ramp_per_s * limits.period_s)
        self._step = np.asarray(np.minimum(ramp, limits.slew_step), dtype=np.float32)
        self._speeds = [0.0] * len(limits.axes)
        self._since_ns: int | None = None
        self._last_ns = 0

    def see(self, observation: NDArray[np.floating]) -> None:
        """Note the axes' speeds from a finite observation (n,)."""
        for index, axis in enumerate(self._limits.axes):
            self._speeds[index] = float(observation[axis.velocity])

    def end(self) -> None:
        """The fallback no longer acts; the next time it begins anew."""
        self._since_ns = None

    def act(self, previous: Float32, now_ns: int, *, seen: bool) -> Float32:
        """Return the next action (m,).

        Args:
            previous: (m,) the action in force.
            now_ns: monotonic time.
            seen: the speeds are fresh; otherwise they are estimated forward from the actions since.
        """
        if self._since_ns is None:
            self._since_ns = self._last_ns = now_ns
        elapsed_s = (now_ns - self._since_ns) * 1e-9
        passed_s = min(max((now_ns - self._last_ns) * 1e-9, 0.0), 1.0)
        self._last_ns = now_ns
        if not seen:
            self._estimate(previous, passed_s)
        if elapsed_s < self._hold_s:
            return previous.copy()
        target = self._limits.rest.copy()
        for speed, axis in zip(self._speeds, self._limits.axes, strict=True):
            if axis.accelerates:
                target[axis.action] = towards_standstill(axis, speed, self._limits.period_s)
        target = np.minimum(np.maximum(target, self._limits.low), self._limits.high)
        if self._kind == "rest":
            return target
        stepped = np.minimum(np.maximum(target, previous - self._step), previous + self._step)
        return slew(self._limits, np.asarray(stepped, dtype=np.float32), previous)

    def _estimate(self, previous: Float32, passed_s: float) -> None:
        for index, axis in enumerate(self._limits.axes):
            if axis.accelerates:
                before = self._speeds[index]
                after = before + float(previous[axis.action]) * passed_s
                # Braking must not be estimated into motion the other way.
                crossed = before != 0.0 and math.copysign(1.0, after) != math.copysign(1.0, before)
                self._speeds[index] = 0.0 if crossed else after
