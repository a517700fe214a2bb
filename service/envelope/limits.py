"""The limits that the envelope keeps, as arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.envelope.zones import Zones
from nearhand.service.rigs import Rig

Float32 = NDArray[np.float32]
#: Limits beyond this count as this much, so that sums of them stay finite in float32.
LARGEST = 1e37
#: A change by less than this fraction of the range is rounding, not an intervention.
ROUNDING = 1e-6
#: A speed beyond so many times its declared range is a sensor's fault.
BELIEVABLE = 1.5


@dataclass(frozen=True, slots=True)
class Axis:
    """One braking axis, by channel index; see :class:`nearhand.service.rigs.Braking` for units.

    ``fastest`` is half as much again as the declared range of its velocity: a reading beyond is no speed.
    """

    position: int
    velocity: int
    action: int
    accelerates: bool
    low: float
    high: float
    deceleration: float
    reaction_s: float
    fastest: float = float("inf")


@dataclass(frozen=True, slots=True)
class Limits:
    """What a rig's actions keep within.

    Attributes:
        low, high: (m,) range per action channel; float32 values that do not lie outside the declared ones.
        rest: (m,) the action at rest.
        rounding: (m,) what is no change worth telling.
        slew_step: (m,) greatest change per control period.
        ramp_step: (m,) the fallback's change per control period, at most ``slew_step``.
        at_once: the fallback commands rest at once, whatever the slew.
        hold_s: how long the fallback first holds the last action.
        channels: low, high, slew step and rounding of each action channel, as plain numbers.
        zones: the forbidden zones, None where there are none.
        period_s, lease_s: see :class:`nearhand.service.rigs.Timing`.
        axes: the braking axes.
    """

    low: Float32
    high: Float32
    rest: Float32
    rounding: Float32
    slew_step: Float32
    ramp_step: Float32
    at_once: bool
    hold_s: float
    period_s: float
    lease_s: float
    axes: tuple[Axis, ...]
    channels: tuple[tuple[float, float, float, float], ...]
    zones: Zones | None = None

    @classmethod
    def of(cls, rig: Rig) -> Limits:
        """Return a rig's limits."""
        observed = [channel.name for channel in rig.observations]
        acted = [channel.name for channel in rig.actions]

        def column(name: str) -> NDArray[np.float64]:
            values = np.array([getattr(channel, name) for channel in rig.actions], dtype=np.float64)
            return np.asarray(np.clip(values, -LARGEST, LARGEST), dtype=np.float64)

        axes = tuple(
            Axis(
                observed.index(axis.position), observed.index(axis.velocity), acted.index(axis.action),
                axis.drives == "acceleration", axis.low, axis.high, axis.deceleration, axis.reaction_s,
                BELIEVABLE * max(abs(rig.observations[observed.index(axis.velocity)].low),
                                 abs(rig.observations[observed.index(axis.velocity)].high)),
            )
            for axis in rig.braking
        )  # fmt: skip
        period_s, fallback = rig.timing.period_s, rig.fallback
        low, high = _inwards(column("low"), up=True), _inwards(column("high"), up=False)
        # Two limits within one float32 step of each other leave no value between them: the lower one then serves.
        high = np.maximum(low, high)
        reach = np.minimum(column("high") - column("low"), LARGEST)
        slew_step = _inwards(np.minimum(column("slew_per_s") * period_s, LARGEST), up=False)
        ramp_step = _inwards(np.minimum(reach * min(fallback.ramp_per_s * period_s, 1.0), slew_step), up=False)
        rounding = np.asarray(ROUNDING * reach, dtype=np.float32)
        columns = np.stack((low, high, slew_step, rounding), axis=1).tolist()
        return cls(
            low=low,
            high=high,
            rest=np.clip(column("rest").astype(np.float32), low, high),
            rounding=rounding,
            slew_step=slew_step,
            ramp_step=ramp_step,
            at_once=fallback.kind == "rest",
            hold_s=fallback.hold_s if fallback.kind == "hold" else 0.0,
            period_s=period_s,
            lease_s=rig.timing.lease_s,
            axes=axes,
            channels=tuple((one[0], one[1], one[2], one[3]) for one in columns),
            zones=Zones(rig) if rig.zones else None,
        )


def _inwards(values: NDArray[np.float64], *, up: bool) -> Float32:
    """Round to float32 towards the inside: up for lower limits, down for upper ones."""
    nearest = values.astype(np.float32)
    outside = nearest < values if up else nearest > values
    towards = np.float32(np.inf if up else -np.inf)
    return np.where(outside, np.nextafter(nearest, towards), nearest).astype(np.float32)
