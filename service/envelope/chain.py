"""The chain of limits that every action goes through: magnitude, slew, braking, in this order.

Which limit wins: from a previous action inside the range, magnitude and slew always hold. Braking only ever moves the
action towards what it allows as fast as slew lets it; it looks ahead by the time that this takes.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.limits import Float32, Limits


class Limited(NamedTuple):
    """An action (m,) after the chain, and which limits changed it."""

    action: Float32
    clipped: bool
    slewed: bool
    braked: bool


def limit(
    limits: Limits,
    proposed: list[float] | Float32,
    previous: Float32,
    observation: Sequence[float] | NDArray[np.floating] | None,
    guards: Guards | None = None,
) -> Limited:
    """Apply magnitude, slew and braking to a finite proposal.

    Args:
        proposed: (m,) finite, in the rig's units.
        previous: (m,) the action in force, inside the range.
        observation: (n,) finite, or None when there is none to brake by.
        guards: of the rig's axes, with their past; None leaves braking out.

    Returns:
        The action: inside the range, and at most one slew step from ``previous``.
    """
    # Plain numbers: for the few channels of a machine this is several times faster than array operations.
    action: list[float] = []
    clipped = slewed = False
    for wanted, before, (low, high, step, rounding) in zip(
        proposed if isinstance(proposed, list) else proposed.tolist(), previous.tolist(), limits.channels, strict=True
    ):
        least, most = before - step, before + step
        if least < low:
            least = low
        if most > high:
            most = high
        if not least <= wanted <= most:
            inside = low if wanted < low else high if wanted > high else wanted
            clipped = clipped or abs(inside - wanted) > rounding
            wanted = least if inside < least else most if inside > most else inside
            slewed = slewed or abs(wanted - inside) > rounding
        action.append(wanted)
    braked = False
    if limits.axes and guards is not None and observation is not None:
        braked = guards.keep(action, observation)
        if braked:
            for index, (low, high, step, _) in enumerate(limits.channels):
                before = float(previous[index])
                action[index] = min(max(action[index], low, before - step), high, before + step)
    return Limited(np.array(action, dtype=np.float32), clipped, slewed, braked)


def slew(limits: Limits, wanted: Float32, previous: Float32, step: Float32 | None = None) -> Float32:
    """Return ``wanted`` moved to within one step of ``previous``; ``previous`` inside the range, so is the result.

    Args:
        step: (m,) greatest change; the slew step when left out.
    """
    step = limits.slew_step if step is None else step
    nearest = np.minimum(np.maximum(wanted, previous - step), previous + step)
    return np.asarray(np.minimum(np.maximum(nearest, limits.low), limits.high), dtype=np.float32)
