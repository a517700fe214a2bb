"""The designed controller's reference: a swing-free run to the target, told by distance left and not by time.

A speed profile is planned from the far end of the yard, convolved with the zero-vibration shaper of the rope's
frequency, and the swing along it is computed. The run is then tabulated over the distance left to the target. What the
reference wants thus follows from what is observed (position, distance, rope): whoever imitates it needs no clock.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.ndimage import uniform_filter1d

from nearhand.sim.crane_dynamics import GRAVITY, Array
from nearhand.sim.crane_options import YARD_M, CraneOptions
from nearhand.sim.shaping import zero_vibration

#: Running mean over the profile: it bounds the jerk, which a lagging drive cannot follow.
SMOOTHING_S = 0.4
#: Spacing of the tabulated reference.
TABLE_STEP_M = 0.01
#: Beyond the target the reference comes back as it would over this distance; what lies further is no part of a plan.
RETURN_M = 0.3
#: Rate of the last, exponential part of the approach.
APPROACH_PER_S = 1.5
#: A planned run is long enough when it takes no longer than this; the slowest allowed takes half of it.
LONGEST_S = 60.0
#: Share of the planned acceleration that the planned braking uses: feedback keeps the rest.
BRAKING_SHARE = 0.8


def allowed_speed(
    o: CraneOptions,
    position: Array,
    target: Array,
    *,
    braking: float,
    margin_m: Array,
    share: float,
) -> Array:
    """Return the signed speed towards the target that respects the top speed, the zone and the landing, m/s.

    Ahead of the zone and the target it is the speed from which ``braking`` (m/s²) still gets down in time,
    v² = v₁² + 2·a·s; the zone is taken larger by ``margin_m`` on either side. The last part falls in proportion to the
    distance left.
    """
    sign = np.sign(target - position)
    left = np.abs(target - position)
    speed = np.minimum(o.top_speed, np.sqrt(2 * braking * left))
    speed = np.minimum(speed, APPROACH_PER_S * left)
    low, high = o.zone_low_m - margin_m, o.zone_high_m + margin_m
    ahead = np.where(sign > 0, low - position, position - high)
    past = np.where(sign > 0, position > high, position < low)
    zone = np.sqrt((share * o.zone_speed) ** 2 + 2 * braking * np.maximum(ahead, 0.0))
    return np.asarray(sign * np.where(past, speed, np.minimum(speed, zone)))


class Reference:
    """Speed, feed-forward, swing and swing rate over the distance left, for a batch of targets.

    Args:
        target, rope: (B,) m.
        direction: (B,) +1 or −1, the way towards the target.
        acceleration: that the plan uses, m/s².
        share: of the zone's speed limit that the plan uses.
    """

    def __init__(
        self, o: CraneOptions, target: Array, rope: Array, direction: Array, *, acceleration: float, share: float
    ) -> None:
        self._o = o
        self._direction = direction
        start = np.where(direction > 0, 0.0, YARD_M)
        position, velocity = self._profile(start, target, rope, acceleration, share)
        position, velocity = self._shaped(position, rope), self._shaped(velocity, rope)
        push = np.gradient(velocity, o.period_s, axis=0)
        theta, rate = _swing(push, rope, o.period_s)
        # The drive lags: what it is told runs ahead of what it shall do.
        feed = push + o.lag_s * np.gradient(push, o.period_s, axis=0)
        left = np.abs(target - position)
        size = math.ceil(YARD_M / TABLE_STEP_M) + 1
        places = TABLE_STEP_M * np.arange(size)
        self._table = np.empty((len(target), size, 4))
        for column, sign in enumerate(direction):
            for part, values in enumerate((velocity, feed, theta, rate)):
                # Stored as if the way went in the positive direction, and by distance left, which falls with time.
                self._table[column, :, part] = np.interp(places, left[::-1, column], sign * values[::-1, column])
            self._table[column, 0] = 0.0
        self._furthest = (np.abs(target - start) / TABLE_STEP_M).astype(np.int64)

    def at(self, left: Array) -> Array:
        """Return (B, 4): speed, feed-forward acceleration, swing and swing rate with ``left`` (signed) metres to go."""
        ahead = self._direction * left
        place = np.where(ahead >= 0, ahead, np.minimum(-ahead, RETURN_M)) / TABLE_STEP_M
        place = np.minimum(place, self._furthest)
        below = np.minimum(place.astype(np.int64), self._table.shape[1] - 2)
        share = (place - below)[:, None]
        rows = np.arange(len(left))
        between = (1 - share) * self._table[rows, below] + share * self._table[rows, below + 1]
        return np.asarray(np.where(left >= 0, 1.0, -1.0)[:, None] * between)

    def _profile(
        self, start: Array, target: Array, rope: Array, acceleration: float, share: float
    ) -> tuple[Array, Array]:
        """Return unshaped positions and velocities (steps, B), until every load has arrived."""
        o = self._o
        half_s = math.pi / np.sqrt(GRAVITY / rope)
        # The shaper spreads each change of speed over half a swing.
        margin_m = o.zone_speed * half_s / 2 + 0.2
        position, velocity = start.copy(), np.zeros_like(start)
        change = acceleration * o.period_s
        positions, velocities = [position], [velocity]
        settle = math.ceil((float(half_s.max()) + SMOOTHING_S) / o.period_s)
        after = 0
        while after < settle and len(positions) < LONGEST_S / o.period_s:
            wanted = allowed_speed(
                o, position, target, braking=BRAKING_SHARE * acceleration, margin_m=margin_m, share=share
            )
            step = np.clip(wanted - velocity, -change, change)
            position = position + (velocity + step / 2) * o.period_s
            velocity = velocity + step
            positions.append(position)
            velocities.append(velocity)
            after += bool((np.abs(target - position) < TABLE_STEP_M / 10).all())
        return self._smoothed(np.array(positions)), self._smoothed(np.array(velocities))

    def _smoothed(self, values: Array) -> Array:
        """Return the running mean of the last SMOOTHING_S."""
        size = max(1, round(SMOOTHING_S / self._o.period_s))
        return np.asarray(uniform_filter1d(values, size, axis=0, mode="nearest", origin=(size - 1) // 2))

    def _shaped(self, values: Array, rope: Array) -> Array:
        """Return the values (steps, B) after the shaper of each rope."""
        steps = np.arange(len(values), dtype=np.float64)
        shaped = np.zeros_like(values)
        for column, length in enumerate(rope):
            for amplitude, time_s in zip(*zero_vibration(math.sqrt(GRAVITY / length)), strict=True):
                at = np.maximum(steps - time_s / self._o.period_s, 0.0)
                shaped[:, column] += amplitude * np.interp(at, steps, values[:, column])
        return shaped


def _swing(push: Array, rope: Array, period_s: float) -> tuple[Array, Array]:
    """Return the linear swing (steps, B) that the reference acceleration causes; symplectic Euler suffices."""
    theta, rate = np.zeros_like(rope), np.zeros_like(rope)
    thetas, rates = np.empty_like(push), np.empty_like(push)
    for row, acceleration in enumerate(push):
        thetas[row], rates[row] = theta, rate
        rate = rate - period_s * (GRAVITY * theta + acceleration) / rope
        theta = theta + period_s * rate
    return thetas, rates
