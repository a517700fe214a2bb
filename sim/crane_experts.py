"""Who drives the crane: a designed controller, a human-operator model, a clumsy operator."""

from __future__ import annotations

import math
from typing import Annotated

import numpy as np
from pydantic import Field, FiniteFloat, ValidationError
from scipy.ndimage import uniform_filter1d

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options, Simulator
from nearhand.sim.crane import Crane
from nearhand.sim.crane_dynamics import GRAVITY, Array
from nearhand.sim.crane_options import CraneOptions
from nearhand.sim.disturbances import ColouredNoise
from nearhand.sim.lqr import discrete_gain, zero_order_hold
from nearhand.sim.operator import Delay, Lag
from nearhand.sim.shaping import zero_vibration

#: Rope lengths are rounded to this before a gain is computed, so that few are.
ROPE_STEP_M = 0.05
SMOOTHING_S = 0.4


class DesignedOptions(Frozen):
    """Weights and margins of the designed controller."""

    feed_forward: Positive = 0.45
    position_weight: Positive = 20.0
    velocity_weight: Positive = 10.0
    swing_weight: Positive = 40.0
    swing_rate_weight: Positive = 1.0
    action_weight: Positive = 8.0
    zone_margin: Annotated[FiniteFloat, Field(gt=0, le=1)] = 0.9


class OperatorOptions(Frozen):
    """A human operator: effective delay, limb lag, crossover frequency, noise, and how well they know the crane."""

    delay_s: Positive = 0.2
    limb_s: Positive = 0.1
    crossover: Positive = 1.5
    remnant: Annotated[FiniteFloat, Field(ge=0)] = 0.01
    skill: Annotated[FiniteFloat, Field(ge=0, le=1)] = 0.9


def allowed_speed(
    o: CraneOptions, position: Array, target: Array, *, braking: float, margin_m: Array, share: float
) -> Array:
    """Return the signed speed towards the target that respects the top speed, the zone and the landing, m/s.

    Ahead of the zone and the target it is the speed from which ``braking`` (m/s²) still gets down in time,
    v² = v₁² + 2·a·s; the zone is taken larger by ``margin_m`` on either side.
    """
    sign = np.sign(target - position)
    left = np.abs(target - position)
    speed = np.minimum(o.top_speed, np.sqrt(2 * braking * left))
    speed = np.minimum(speed, 1.5 * left)
    low, high = o.zone_low_m - margin_m, o.zone_high_m + margin_m
    ahead = np.where(sign > 0, low - position, position - high)
    past = np.where(sign > 0, position > high, position < low)
    zone = np.sqrt((share * o.zone_speed) ** 2 + 2 * braking * np.maximum(ahead, 0.0))
    return np.asarray(sign * np.where(past, speed, np.minimum(speed, zone)))


class DesignedExpert:
    """Feed-forward along a shaped reference, with a linear-quadratic regulator about it.

    At the beginning of an episode it plans a speed profile, convolves it with the zero-vibration shaper of the rope's
    frequency, and computes the load's motion along it; then it adds the feed-forward acceleration to the regulator's
    correction of trolley and swing.
    """

    def __init__(self, simulator: Crane, options: DesignedOptions) -> None:
        self._o = simulator.options
        self._options = options
        self._gains: dict[int, Array] = {}

    def reset(self, observations: Array, *, seed: int) -> None:
        """Plan the episodes; see Expert."""
        start, rope = observations[:, 0], observations[:, 4]
        target = start + observations[:, 5]
        position, velocity, acceleration = self._shaped(*self._profile(start, target, rope), rope)
        theta, rate = self._swing(acceleration, rope)
        lead = np.gradient(acceleration, self._o.period_s, axis=0) * self._o.lag_s
        self._feed = acceleration + lead
        self._reference = np.stack((position, velocity, theta, rate), axis=2)
        self._gain = np.stack([self._regulator(float(length)) for length in rope])
        self._step = 0

    def act(self, observations: Array) -> Array:
        """Return the acceleration demand (B, 1); see Expert."""
        row = min(self._step, len(self._feed) - 1)
        self._step += 1
        deviation = observations[:, :4] - self._reference[row]
        demand = self._feed[row] - np.einsum("bi,bi->b", self._gain, deviation)
        return np.asarray(np.clip(demand, -self._o.strongest, self._o.strongest)[:, None])

    def _profile(self, start: Array, target: Array, rope: Array) -> tuple[Array, Array]:
        """Return unshaped positions and velocities (steps, B)."""
        o, p = self._o, self._options
        half_s = math.pi / np.sqrt(GRAVITY / rope)
        margin_m = o.zone_speed * half_s / 2 + 0.2
        position, velocity = start.copy(), np.zeros_like(start)
        rows = []
        for _ in range(o.max_steps):
            wanted = allowed_speed(
                o, position, target, braking=0.8 * p.feed_forward, margin_m=margin_m, share=p.zone_margin
            )
            change = np.clip(wanted - velocity, -p.feed_forward * o.period_s, p.feed_forward * o.period_s)
            position = position + (velocity + change / 2) * o.period_s
            velocity = velocity + change
            rows.append((position.copy(), velocity.copy()))
        positions, velocities = (self._smoothed(np.array(part)) for part in zip(*rows, strict=True))
        return positions, velocities

    def _smoothed(self, values: Array) -> Array:
        """Return the running mean of the last SMOOTHING_S: it bounds the jerk, which a lagging drive cannot follow."""
        size = max(1, round(SMOOTHING_S / self._o.period_s))
        return np.asarray(uniform_filter1d(values, size, axis=0, mode="nearest", origin=(size - 1) // 2))

    def _shaped(self, position: Array, velocity: Array, rope: Array) -> tuple[Array, Array, Array]:
        """Return position, velocity and acceleration (steps, B) after the shaper."""
        period_s = self._o.period_s
        shaped = [np.zeros_like(position) for _ in range(2)]
        steps = np.arange(len(position))[:, None]
        for column, length in enumerate(rope):
            amplitudes, times = zero_vibration(math.sqrt(GRAVITY / length))
            for amplitude, time_s in zip(amplitudes, times, strict=True):
                at = np.maximum(steps[:, 0] - time_s / period_s, 0.0)
                for out, values in zip(shaped, (position, velocity), strict=True):
                    out[:, column] += amplitude * np.interp(at, steps[:, 0], values[:, column])
        acceleration = np.gradient(shaped[1], period_s, axis=0)
        return shaped[0], shaped[1], acceleration

    def _swing(self, acceleration: Array, rope: Array) -> tuple[Array, Array]:
        """Return the linear swing (steps, B) that the reference acceleration causes; symplectic Euler suffices."""
        period_s = self._o.period_s
        theta, rate = np.zeros_like(rope), np.zeros_like(rope)
        thetas, rates = np.empty_like(acceleration), np.empty_like(acceleration)
        for row, push in enumerate(acceleration):
            thetas[row], rates[row] = theta, rate
            rate = rate - period_s * (GRAVITY * theta + push) / rope
            theta = theta + period_s * rate
        return thetas, rates

    def _regulator(self, rope: float) -> Array:
        key = round(rope / ROPE_STEP_M)
        if key not in self._gains:
            length, p = key * ROPE_STEP_M, self._options
            a = np.array([[0, 1, 0, 0], [0, 0, 0, 0], [0, 0, 0, 1], [0, 0, -GRAVITY / length, 0]], dtype=np.float64)
            b = np.array([[0.0], [1.0], [0.0], [-1.0 / length]])
            q = np.diag([p.position_weight, p.velocity_weight, p.swing_weight, p.swing_rate_weight])
            gain, _ = discrete_gain(*zero_order_hold(a, b, self._o.period_s), q, np.array([[p.action_weight]]))
            self._gains[key] = gain[0]
        return self._gains[key]


class OperatorExpert:
    """A human-operator model: sees late, aims at a safe speed, damps the swing as skill allows, moves a sluggish hand.

    Closing the speed error with gain ω_c through a delay, on a trolley that integrates acceleration, is the crossover
    model itself.
    """

    def __init__(self, simulator: Crane, options: OperatorOptions) -> None:
        self._o = simulator.options
        self._options = options
        self._delay = Delay(options.delay_s, self._o.period_s)
        self._limb = Lag(options.limb_s, self._o.period_s)
        self._remnant = ColouredNoise(options.remnant, 0.3, self._o.period_s)

    def reset(self, observations: Array, *, seed: int) -> None:
        """Begin new episodes; see Expert."""
        self._generator = np.random.default_rng(seed)
        count = len(observations)
        self._delay.reset(observations)
        self._limb.reset(count)
        self._remnant.reset(count, self._generator)

    def act(self, observations: Array) -> Array:
        """Return the acceleration demand (B, 1); see Expert."""
        o, p = self._o, self._options
        seen = self._delay.pass_on(observations)
        position, velocity, _, rate, rope, left = seen.T
        caution = 0.55 + 0.25 * p.skill
        margin_m = np.full_like(position, 0.2 + 1.2 * p.skill)
        share = 0.85 if p.skill > 0.5 else 1.3
        wanted = caution * allowed_speed(
            o, position, position + left, braking=0.15, margin_m=margin_m, share=share / caution
        )
        frequency = np.sqrt(GRAVITY / rope)
        # An acceleration of 2ζωL·θ' adds the damping ratio ζ to the swing.
        damping = 2 * (0.22 * p.skill) * frequency * rope * rate
        demand = p.crossover * (wanted - velocity) + damping
        hand = self._limb.follow(np.clip(demand, -o.strongest, o.strongest))
        noisy = hand + self._remnant.next(self._generator)
        return np.asarray(np.clip(noisy, -o.strongest, o.strongest)[:, None])


def _crane(simulator: Simulator) -> Crane:
    if not isinstance(simulator, Crane):
        raise ConfigError("this expert drives the crane only; name another one for this rig", code="config.expert")
    return simulator


def make_designed(simulator: Simulator, options: Options) -> DesignedExpert:
    """Build the designed controller.

    Raises:
        ConfigError: wrong simulator or options.
    """
    try:
        return DesignedExpert(_crane(simulator), DesignedOptions.model_validate(dict(options)))
    except ValidationError as error:
        raise ConfigError(f"designed expert: {sentence(error)}", code="config.expert") from error


def make_operator(simulator: Simulator, options: Options) -> OperatorExpert:
    """Build the human-operator model.

    Raises:
        ConfigError: wrong simulator or options.
    """
    try:
        return OperatorExpert(_crane(simulator), OperatorOptions.model_validate(dict(options)))
    except ValidationError as error:
        raise ConfigError(f"operator: {sentence(error)}", code="config.expert") from error


def make_clumsy(simulator: Simulator, options: Options) -> OperatorExpert:
    """Build an operator with little skill, a longer delay and a restless hand, unless the options say otherwise.

    Raises:
        ConfigError: wrong simulator or options.
    """
    return make_operator(simulator, {"skill": 0.1, "delay_s": 0.35, "remnant": 0.08, **options})
