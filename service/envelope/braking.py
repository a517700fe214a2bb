"""Braking: no action may leave the set from which the axis can still stop before its limit.

With h the time until braking can begin (lease + drive reaction + slew ramp) and d the deceleration:

* axis driven by speed u:         u·h + u²/(2d) ≤ D                    ⇔ u ≤ −d·h + √(d²h² + 2dD)
* axis driven by acceleration a:  v·h + a·h²/2 + (v + a·h)²/(2d) ≤ D   a quadratic in a

D is the distance left, v the speed towards the limit. Source: stopping distance d = v·t + v²/(2a) of elementary
kinematics; derived here for held actions.
"""

from __future__ import annotations

import math

from nearhand.service.envelope.limits import Axis


def highest_speed(distance: float, deceleration: float, delay_s: float) -> float:
    """Return the highest speed from which the axis stops within ``distance`` after ``delay_s``."""
    if distance <= 0.0:
        return 0.0
    swing = deceleration * delay_s
    return -swing + math.sqrt(swing * swing + 2.0 * deceleration * distance)


def highest_acceleration(distance: float, speed: float, deceleration: float, delay_s: float) -> float:
    """Return the highest acceleration that may be held for ``delay_s``; ``-deceleration`` when it must brake fully."""
    a2 = delay_s * delay_s / (2.0 * deceleration)
    a1 = delay_s * delay_s / 2.0 + speed * delay_s / deceleration
    a0 = speed * delay_s + speed * abs(speed) / (2.0 * deceleration) - distance
    inside = a1 * a1 - 4.0 * a2 * a0
    if inside < 0.0:
        return -deceleration
    root = (-a1 + math.sqrt(inside)) / (2.0 * a2)
    return max(root, -deceleration)


def allowed(
    axis: Axis, position: float, velocity: float, slew_per_s: float, strongest: float, lease_s: float
) -> tuple[float, float]:
    """Return the lowest and the highest action that the axis may be given now.

    Args:
        position, velocity: as observed, in the axis' units.
        slew_per_s: fastest change of the action.
        strongest: largest magnitude of the action.
        lease_s: how long an action may be held without a new one.
    """
    delay_s = lease_s + axis.reaction_s
    if axis.accelerates:
        delay_s += (strongest + axis.deceleration) / slew_per_s
        up = highest_acceleration(axis.high - position, velocity, axis.deceleration, delay_s)
        down = -highest_acceleration(position - axis.low, -velocity, axis.deceleration, delay_s)
    else:
        up = highest_speed(axis.high - position, axis.deceleration, delay_s)
        down = -highest_speed(position - axis.low, axis.deceleration, delay_s)
    return (down, up) if down <= up else ((down + up) / 2, (down + up) / 2)


def towards_standstill(axis: Axis, velocity: float, period_s: float) -> float:
    """Return the action that brings the axis to standstill: deceleration, eased so as not to reverse."""
    if not axis.accelerates:
        return 0.0
    return -math.copysign(min(axis.deceleration, abs(velocity) / (2.0 * period_s)), velocity)
