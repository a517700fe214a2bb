"""What may be set of the simulated crane."""

from __future__ import annotations

import math
from typing import Annotated, Literal, Self

from pydantic import Field, FiniteFloat, ValidationError, model_validator

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options

#: Length of the yard: every bay lies within it.
YARD_M = 16.0
#: Longest integration step as a multiple of the drive's lag: the Runge–Kutta method is stable to 2.785.
STABLE_SHARE = 2.7

NotNegative = Annotated[FiniteFloat, Field(ge=0)]


class CraneOptions(Frozen):
    """The yard, the machine and its imperfections; SI units.

    Attributes:
        drive: the trolley follows an acceleration demand, or is pushed by a force.
        runway_low_m, runway_high_m: buffers that stop the trolley dead; beyond every bay.
        rope_scale, mass_scale, gain, lag_s, swing_bias_rad: changed dynamics, for studies.
    """

    drive: Literal["acceleration", "force"] = "acceleration"
    period_s: Positive = 0.02
    max_steps: Annotated[int, Field(ge=1, le=100_000)] = 800
    substeps: Annotated[int, Field(ge=1, le=20)] = 2
    rope_low_m: Positive = 3.0
    rope_high_m: Positive = 6.0
    distance_low_m: Positive = 7.0
    distance_high_m: Positive = 10.0
    trolley_kg: Positive = 1000.0
    load_kg: Positive = 600.0
    friction: NotNegative = 40.0
    swing_friction_per_s: NotNegative = 0.01
    lag_s: Positive = 0.08
    strongest: Positive = 0.6
    wind_sd: NotNegative = 0.01
    wind_time_s: Positive = 2.0
    position_step_m: NotNegative = 0.001
    velocity_noise: NotNegative = 0.002
    swing_noise_rad: NotNegative = 0.0005
    swing_rate_noise: NotNegative = 0.002
    rope_scale: Positive = 1.0
    mass_scale: Positive = 1.0
    gain: Positive = 1.0
    swing_bias_rad: FiniteFloat = 0.0
    zone_low_m: FiniteFloat = 5.5
    zone_high_m: FiniteFloat = 7.0
    zone_speed: Positive = 0.8
    gate_low_m: FiniteFloat = 9.0
    gate_high_m: FiniteFloat = 10.0
    gate_clearance_m: Positive = 0.02
    runway_low_m: FiniteFloat = -3.0
    runway_high_m: FiniteFloat = 19.0
    top_speed: Positive = 2.0
    landing_tolerance_m: Positive = 0.08
    swing_tolerance_rad: Positive = 0.02

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        for low, high in (
            ("rope_low_m", "rope_high_m"), ("distance_low_m", "distance_high_m"), ("zone_low_m", "zone_high_m"),
            ("gate_low_m", "gate_high_m"), ("runway_low_m", "runway_high_m"),
        ):  # fmt: skip
            if getattr(self, low) > getattr(self, high):
                raise ValueError(f"{low} = {getattr(self, low)} must not be above {high} = {getattr(self, high)}")
        substep_s = self.period_s / self.substeps
        if substep_s > STABLE_SHARE * self.lag_s:
            raise ValueError(
                f"lag_s = {self.lag_s} is too short for substeps = {self.substeps} of a period of {self.period_s} s; "
                f"give at least {math.ceil(self.period_s / (STABLE_SHARE * self.lag_s))} substeps or a longer lag"
            )
        return self

    @property
    def force_unit(self) -> float:
        """Force of an action of 1 when ``drive = "force"``, N: it accelerates trolley and load as one by 1 m/s²."""
        return self.trolley_kg + self.load_kg


def crane_options(options: Options) -> CraneOptions:
    """Check the options of a rig's ``[simulator.options]``.

    Raises:
        ConfigError: one is unknown or wrong.
    """
    try:
        return CraneOptions.model_validate(dict(options))
    except ValidationError as error:
        raise ConfigError(f"crane options: {sentence(error)}", code="config.simulator") from error
