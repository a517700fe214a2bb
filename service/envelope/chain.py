"""The chain of limits that every action goes through: magnitude, slew, zones, braking, in this order.

Which limit wins: from a previous action inside the range, magnitude and slew always hold. Zones and braking only ever
move the action towards what they allow as fast as slew lets it; they look ahead. Braking has the last word over zones.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.limits import Float32, Limits
from nearhand.service.envelope.zones import Zones


class Limited(NamedTuple):
    """An action (m,) after the chain, and which limits changed it."""

    action: Float32
    clipped: bool
    slewed: bool
    braked: bool
    zoned: bool = False


def limit(
    limits: Limits,
    proposed: list[float] | Float32,
    previous: Float32,
    observation: Sequence[float] | NDArray[np.floating] | None,
    guards: Guards | None = None,
) -> Limited:
    """Apply magnitude, slew, zones and braking to a finite proposal.

    Args:
        proposed: (m,) finite, in the rig's units.
        previous: (m,) the action in force, inside the range.
        observation: (n,) finite, or None when there is none to go by.
        guards: of the rig's axes, with their past; None leaves zones and braking out.

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
    braked = zoned = False
    if limits.zones is not None and guards is not None and observation is not None:
        zoned = _keep_out(limits.zones, limits, action, previous, observation)
    if limits.axes and guards is not None and observation is not None:
        braked = guards.keep(action, observation)
        if braked:
            for index, (low, high, step, _) in enumerate(limits.channels):
                before = float(previous[index])
                action[index] = min(max(action[index], low, before - step), high, before + step)
    return Limited(np.array(action, dtype=np.float32), clipped, slewed, braked, zoned)


def _keep_out(
    zones: Zones,
    limits: Limits,
    action: list[float],
    previous: Float32,
    observation: Sequence[float] | NDArray[np.floating],
) -> bool:
    """Let the zones change ``action`` in place within magnitude and slew; tell whether they did."""
    before = previous.tolist()
    low = [max(least, one - step) for one, (least, _, step, _) in zip(before, limits.channels, strict=True)]
    high = [min(most, one + step) for one, (_, most, step, _) in zip(before, limits.channels, strict=True)]
    return zones.keep(action, [float(value) for value in observation], low, high)


def slew(limits: Limits, wanted: Float32, previous: Float32, step: Float32 | None = None) -> Float32:
    """Return ``wanted`` moved to within one step of ``previous``; ``previous`` inside the range, so is the result.

    Args:
        step: (m,) greatest change; the slew step when left out.
    """
    step = limits.slew_step if step is None else step
    nearest = np.minimum(np.maximum(wanted, previous - step), previous + step)
    return np.asarray(np.minimum(np.maximum(nearest, limits.low), limits.high), dtype=np.float32)
