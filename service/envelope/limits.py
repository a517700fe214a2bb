"""The limits that the envelope keeps, as arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.rigs import Rig

Float32 = NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Axis:
    """One braking axis, by channel index; see :class:`nearhand.service.rigs.Braking` for units."""

    position: int
    velocity: int
    action: int
    accelerates: bool
    low: float
    high: float
    deceleration: float
    reaction_s: float


@dataclass(frozen=True, slots=True)
class Limits:
    """Per action channel: range, rest, greatest change per control period; and the braking axes."""

    low: Float32
    high: Float32
    rest: Float32
    slew_step: Float32
    period_s: float
    lease_s: float
    axes: tuple[Axis, ...]

    @classmethod
    def of(cls, rig: Rig) -> Limits:
        """Return a rig's limits."""
        observed = [channel.name for channel in rig.observations]
        acted = [channel.name for channel in rig.actions]

        def column(name: str) -> Float32:
            return np.array([getattr(channel, name) for channel in rig.actions], dtype=np.float32)

        axes = tuple(
            Axis(
                observed.index(axis.position), observed.index(axis.velocity), acted.index(axis.action),
                axis.drives == "acceleration", axis.low, axis.high, axis.deceleration, axis.reaction_s,
            )
            for axis in rig.braking
        )  # fmt: skip
        period_s = rig.timing.period_s
        return cls(
            column("low"), column("high"), column("rest"),
            np.asarray(column("slew_per_s") * period_s, dtype=np.float32), period_s, rig.timing.lease_s, axes,
        )  # fmt: skip
