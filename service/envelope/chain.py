"""The chain of limits that every action goes through: magnitude, slew, braking, in this order.

Which limit wins: from a previous action inside the range, magnitude and slew always hold. Braking only ever moves the
action towards its allowed interval as fast as slew lets it; it looks ahead by the time that this takes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.braking import allowed
from nearhand.service.envelope.limits import Float32, Limits


@dataclass(frozen=True, slots=True)
class Limited:
    """An action (m,) after the chain, and which limits changed it."""

    action: Float32
    clipped: bool
    slewed: bool
    braked: bool


def limit(limits: Limits, proposed: Float32, previous: Float32, observation: NDArray[np.floating] | None) -> Limited:
    """Apply magnitude, slew and braking to a finite proposal.

    Args:
        proposed: (m,) finite, in the rig's units.
        previous: (m,) the action in force, inside the range.
        observation: (n,) finite, or None when there is none to brake by.

    Returns:
        The action: inside the range, and at most one slew step from ``previous``.
    """
    inside = np.minimum(np.maximum(proposed, limits.low), limits.high)
    clipped = bool((inside != proposed).any())
    action = slew(limits, inside, previous)
    slewed = bool((action != inside).any())
    braked = False
    if observation is not None:
        for axis in limits.axes:
            index = axis.action
            slew_per_s = float(limits.slew_step[index]) / limits.period_s
            strongest = float(max(abs(limits.low[index]), abs(limits.high[index])))
            down, up = allowed(
                axis, float(observation[axis.position]), float(observation[axis.velocity]), slew_per_s, strongest,
                limits.lease_s,
            )  # fmt: skip
            kept = min(max(float(action[index]), down), up)
            if kept != float(action[index]):
                braked = True
                action[index] = kept
        if braked:
            action = slew(limits, np.minimum(np.maximum(action, limits.low), limits.high), previous)
    return Limited(action, clipped, slewed, braked)


def slew(limits: Limits, wanted: Float32, previous: Float32) -> Float32:
    """Return ``wanted`` moved to within one slew step of ``previous``; both inside the range, so is the result."""
    nearest = np.minimum(np.maximum(wanted, previous - limits.slew_step), previous + limits.slew_step)
    return np.asarray(np.minimum(np.maximum(nearest, limits.low), limits.high), dtype=np.float32)
