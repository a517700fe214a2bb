"""The stone yard's travelling crane: carry a slab between bays, past people and a low gate, and land it still.

The yard is a line. Near people (``zone``) the trolley must be slow; in the height-limited gate (``gate``) the slab must
not rise, so its swing is limited; at the target the slab must hang still. Buffers end the runway beyond the bays. An
episode lasts until its time is up.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from nearhand.service.simulators import Options, Step
from nearhand.sim.crane_dynamics import GRAVITY, Array, free_accelerations, rk4, swing_acceleration
from nearhand.sim.crane_options import YARD_M, CraneOptions, crane_options
from nearhand.sim.disturbances import ColouredNoise, quantise

#: Where the trolley stands at the beginning, m from the yard's end, for either direction of travel.
START_LOW_M = 1.0
START_HIGH_M = 2.5
#: Speed over the zone's limit that is no breach yet, and speed that counts as standing, m/s.
SPEED_TOLERANCE = 0.1
STANDING_SPEED = 0.05


class Crane:
    """A batch of crane episodes; see :class:`nearhand.service.simulators.Simulator`.

    Observations: trolley position m, trolley velocity m/s, swing angle rad, swing rate rad/s, rope length m, distance
    to the target m (signed). Action: acceleration demand m/s²; with ``drive = "force"`` a driving force, in the unit
    that would accelerate trolley and load as one by 1 m/s².
    """

    observation_size = 6
    action_size = 1

    def __init__(self, options: CraneOptions) -> None:
        self.options = options
        self.period_s = options.period_s
        self.max_steps = options.max_steps
        self._wind = ColouredNoise(options.wind_sd, options.wind_time_s, options.period_s)

    def reset(self, count: int, *, seed: int) -> Array:
        """Start ``count`` episodes; see Simulator."""
        o = self.options
        self._generator = np.random.default_rng(seed)
        draw = self._generator.uniform
        self._rope = draw(o.rope_low_m, o.rope_high_m, count)
        outward = self._generator.random(count) < 0.5
        start = draw(START_LOW_M, START_HIGH_M, count)
        distance = draw(o.distance_low_m, o.distance_high_m, count)
        self._start = np.where(outward, start, YARD_M - start)
        self._target = np.where(outward, start + distance, YARD_M - start - distance)
        self._distance = distance
        # Rows: position, swing, velocity, swing rate, drive's state.
        self._state = np.zeros((5, count))
        self._state[0] = self._start
        self._state[1] = 0.01 * self._generator.standard_normal(count)
        self._wind.reset(count, self._generator)
        self._steps = 0
        self._gate_touched = np.zeros(count, dtype=bool)
        self._end_touched = np.zeros(count, dtype=bool)
        self._speed_excess = np.zeros(count)
        self._peak_swing = np.abs(self._state[1])
        self._landed_at_s = np.full(count, np.nan)
        return self._observe()

    def step(self, actions: Array) -> Step:
        """Hold ``actions`` (B, 1) for one period; see Simulator."""
        o = self.options
        count = self._state.shape[1]
        if self._steps >= self.max_steps:
            never = np.zeros(count, dtype=bool)
            return Step(self._observed, np.zeros(count), never, ~never)
        demand = o.gain * np.clip(np.asarray(actions, dtype=np.float64)[:, 0], -o.strongest, o.strongest)
        wind = self._wind.next(self._generator)
        rope = self._rope * o.rope_scale

        def derivative(state: Array) -> Array:
            _, theta, velocity, rate, drive = state
            out = np.empty_like(state)
            out[0], out[1] = velocity, rate
            if o.drive == "acceleration":
                out[2] = drive
                out[3] = swing_acceleration(theta, rate, drive, rope, np.float64(o.swing_friction_per_s), wind)  # type: ignore[arg-type]
            else:
                load = o.load_kg * o.mass_scale
                out[2], out[3] = free_accelerations(
                    theta, velocity, rate, o.force_unit * drive, trolley=np.full(count, o.trolley_kg),
                    load=np.full(count, load), rope=rope, friction=np.full(count, o.friction),
                    swing_friction=o.swing_friction_per_s * load * rope**2, wind=wind,
                )  # fmt: skip
            out[4] = (demand - drive) / o.lag_s
            return out

        for _ in range(o.substeps):
            self._state = rk4(derivative, self._state, o.period_s / o.substeps)
        self._stop_at_buffers()
        self._steps += 1
        score = self._judge()
        over = self._steps >= self.max_steps
        return Step(self._observe(), score, np.zeros(count, dtype=bool), np.full(count, over))

    def _stop_at_buffers(self) -> None:
        """Stop a trolley that has run into a buffer; the load swings on."""
        o = self.options
        position = self._state[0]
        hit = (position <= o.runway_low_m) | (position >= o.runway_high_m)
        if hit.any():
            self._state[0] = np.clip(position, o.runway_low_m, o.runway_high_m)
            self._state[2] = np.where(hit, 0.0, self._state[2])
            self._end_touched |= hit

    def _observe(self) -> Array:
        o = self.options
        position, theta, velocity, rate, _ = self._state
        noise = self._generator.standard_normal((3, len(position)))
        seen = quantise(position, o.position_step_m)
        self._observed: Array = np.stack(
            (
                seen,
                velocity + o.velocity_noise * noise[0],
                theta + o.swing_noise_rad * noise[1] + o.swing_bias_rad,
                rate + o.swing_rate_noise * noise[2],
                self._rope * o.rope_scale,
                self._target - seen,
            ),
            axis=1,
        )
        return self._observed

    def _judge(self) -> Array:
        """Note rule breaches and return the score of this period, 0 to 1: progress, and calm at the target."""
        o = self.options
        position, theta, velocity, _, _ = self._state
        rope = self._rope * o.rope_scale
        load = position + rope * np.sin(theta)
        in_zone = (position > o.zone_low_m) & (position < o.zone_high_m)
        excess = np.where(in_zone, np.maximum(np.abs(velocity) - o.zone_speed, 0.0), 0.0)
        self._speed_excess = np.maximum(self._speed_excess, excess)
        in_gate = (load > o.gate_low_m) & (load < o.gate_high_m)
        self._gate_touched |= in_gate & (rope * (1 - np.cos(theta)) > o.gate_clearance_m)
        self._peak_swing = np.maximum(self._peak_swing, np.abs(theta))
        landed = self._is_landed()
        self._landed_at_s = np.where(
            landed, np.where(np.isnan(self._landed_at_s), self._steps * o.period_s, self._landed_at_s), np.nan
        )
        progress = np.clip(1 - np.abs(load - self._target) / self._distance, 0.0, 1.0)
        return np.asarray((0.5 * progress + 0.5 * landed) * np.where(self._is_clean(), 1.0, 0.5))

    def _is_clean(self) -> NDArray[np.bool_]:
        """Tell which episodes have kept the yard's rules so far."""
        return ~self._gate_touched & ~self._end_touched & (self._speed_excess < SPEED_TOLERANCE)

    def _is_landed(self) -> NDArray[np.bool_]:
        o = self.options
        return np.asarray(
            (np.abs(self._state[0] - self._target) < o.landing_tolerance_m)
            & (self._residual_swing() < o.swing_tolerance_rad)
            & (np.abs(self._state[2]) < STANDING_SPEED)
        )

    def _residual_swing(self) -> Array:
        """Return the amplitude of the swing that would remain, rad."""
        frequency = np.sqrt(GRAVITY / (self._rope * self.options.rope_scale))
        return np.asarray(np.hypot(self._state[1], self._state[3] / frequency))

    def outcomes(self) -> dict[str, Array]:
        """Return (B,) figures of the episodes so far; see Simulator."""
        success = self._is_landed() & self._is_clean()
        time_s = np.where(np.isnan(self._landed_at_s), self.max_steps * self.period_s, self._landed_at_s)
        return {
            "success": success.astype(np.float64),
            "time_s": time_s,
            "peak_swing_rad": self._peak_swing,
            "residual_swing_rad": self._residual_swing(),
            "landing_error_m": np.abs(self._state[0] - self._target),
            "gate_touched": self._gate_touched.astype(np.float64),
            "end_touched": self._end_touched.astype(np.float64),
            "speed_excess_mps": self._speed_excess,
        }


def make_simulator(options: Options) -> Crane:
    """Build the crane of a rig's TOML.

    Raises:
        ConfigError: an option is unknown or wrong.
    """
    return Crane(crane_options(options))
