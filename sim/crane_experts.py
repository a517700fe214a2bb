"""Who drives the crane: a designed controller, a human-operator model, a clumsy operator."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from pydantic import Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options, Simulator
from nearhand.sim.crane import Crane
from nearhand.sim.crane_dynamics import GRAVITY, Array, driving_force
from nearhand.sim.crane_reference import Reference
from nearhand.sim.disturbances import ColouredNoise
from nearhand.sim.lqr import discrete_gain, zero_order_hold
from nearhand.sim.operator import Delay, Lag

#: Rope lengths are rounded to this before a gain is computed, so that few are.
ROPE_STEP_M = 0.05
#: A trolley at rest is set moving with this acceleration, which then grows with the speed reached: without memory of
#: its last demand the controller keeps within what the drive may change in a period.
GENTLE = 0.1
GENTLE_TIME_S = 0.07
#: Time constant of the operator's remnant.
REMNANT_TIME_S = 0.3


class DesignedOptions(Frozen):
    """Weights and margins of the designed controller.

    Attributes:
        feed_forward: the acceleration that is planned with, m/s².
        velocity_weight, swing_weight, swing_rate_weight, action_weight: of the regulator, per unit squared.
        zone_margin: share of the zone's speed limit that is planned with.
    """

    feed_forward: Positive = 0.4
    velocity_weight: Positive = 10.0
    swing_weight: Positive = 200.0
    swing_rate_weight: Positive = 20.0
    action_weight: Positive = 8.0
    zone_margin: Annotated[FiniteFloat, Field(gt=0, le=1)] = 0.9


class OperatorOptions(Frozen):
    """A human operator: effective delay, limb lag, crossover frequency, noise, and how well they know the crane."""

    delay_s: Positive = 0.2
    limb_s: Positive = 0.1
    crossover: Positive = 1.5
    remnant: Annotated[FiniteFloat, Field(ge=0)] = 0.01
    skill: Annotated[FiniteFloat, Field(ge=0, le=1)] = 0.9


class DesignedExpert:
    """Feed-forward along a shaped reference, with a linear-quadratic regulator of speed and swing about it.

    The reference is told by the distance left, so the demand is a function of the present observation alone; the plan
    that ``reset`` makes follows from target and rope, which are observed. Away from the reference's speed it catches up
    with no more than the planned acceleration, and expects the rope to hang accordingly.
    """

    def __init__(self, simulator: Crane, options: DesignedOptions) -> None:
        self._o = simulator.options
        self._options = options
        self._gains: dict[int, Array] = {}

    def reset(self, observations: Array, *, seed: int) -> None:
        """Plan the episodes; see Expert."""
        rope, left = observations[:, 4], observations[:, 5]
        direction = np.where(left >= 0, 1.0, -1.0)
        p = self._options
        self._reference = Reference(
            self._o, observations[:, 0] + left, rope, direction, acceleration=self._acceleration, share=p.zone_margin
        )
        self._gain = np.stack([self._regulator(float(length)) for length in rope])

    def act(self, observations: Array) -> Array:
        """Return the demand (B, 1); see Expert."""
        _, velocity, theta, rate, rope, left = observations.T
        wanted, feed, expected, expected_rate = self._reference.at(left).T
        most = self._acceleration
        base = np.clip(feed - self._gain[:, 0] * (velocity - wanted), -most, most)
        # Whoever accelerates otherwise than planned hangs otherwise: tan θ = −a/g.
        hanging = expected - (base - feed) / GRAVITY
        demand = base - self._gain[:, 1] * (theta - hanging) - self._gain[:, 2] * (rate - expected_rate)
        gentle = GENTLE + np.abs(velocity) / GENTLE_TIME_S
        demand = np.clip(demand, -gentle, gentle)
        if self._o.drive == "force":
            o = self._o
            force = driving_force(
                theta, velocity, rate, demand, trolley=np.full_like(rope, o.trolley_kg),
                load=np.full_like(rope, o.load_kg), rope=rope, friction=np.full_like(rope, o.friction),
            )  # fmt: skip
            demand = force / o.force_unit
        return np.asarray(np.clip(demand, -self._o.strongest, self._o.strongest)[:, None])

    @property
    def _acceleration(self) -> float:
        return min(self._options.feed_forward, self._o.strongest)

    def _regulator(self, rope: float) -> Array:
        """Return the gains (3,) of speed, swing and swing rate."""
        key = max(1, round(rope / ROPE_STEP_M))
        if key not in self._gains:
            length, p = key * ROPE_STEP_M, self._options
            a = np.array([[0, 0, 0], [0, 0, 1], [0, -GRAVITY / length, 0]], dtype=np.float64)
            b = np.array([[1.0], [0.0], [-1.0 / length]])
            q = np.diag([p.velocity_weight, p.swing_weight, p.swing_rate_weight])
            gain, _ = discrete_gain(*zero_order_hold(a, b, self._o.period_s), q, np.array([[p.action_weight]]))
            self._gains[key] = gain[0]
        return self._gains[key]


class OperatorExpert:
    """A human-operator model: sees late, closes the speed error, catches the swing, moves a sluggish and restless hand.

    Closing the speed error with gain ω_c through a delay, on a trolley that integrates acceleration, is the crossover
    model itself. Skill is what the operator knows by heart: how much of the way's accelerations comes ahead of the
    error, how gently the way is planned, and how far the speed limit near people is kept.
    """

    def __init__(self, simulator: Crane, options: OperatorOptions) -> None:
        self._o = simulator.options
        self._options = options
        self._delay = Delay(options.delay_s, self._o.period_s)
        self._limb = Lag(options.limb_s, self._o.period_s)
        self._remnant = ColouredNoise(options.remnant, REMNANT_TIME_S, self._o.period_s)

    def reset(self, observations: Array, *, seed: int) -> None:
        """Begin new episodes; see Expert."""
        self._generator = np.random.default_rng(seed)
        count = len(observations)
        self._delay.reset(observations)
        self._limb.reset(count)
        self._remnant.reset(count, self._generator)
        left, skill = observations[:, 5], self._options.skill
        self._planned = min(0.5 - 0.2 * skill, self._o.strongest)
        self._way = Reference(
            self._o, observations[:, 0] + left, observations[:, 4], np.where(left >= 0, 1.0, -1.0),
            acceleration=self._planned, share=1.35 - 0.5 * skill,
        )  # fmt: skip

    def act(self, observations: Array) -> Array:
        """Return the demand (B, 1); see Expert."""
        o, p = self._o, self._options
        _, velocity, _, rate, rope, left = self._delay.pass_on(observations).T
        wanted, _, _, expected_rate = self._way.at(left).T
        # What is known by heart is begun as early as it takes to be felt.
        late_s = p.delay_s + p.limb_s + o.lag_s
        known = p.skill * self._way.at(left - late_s * velocity)[:, 1]
        steady = np.clip(known + p.crossover * (wanted - velocity), -self._planned, self._planned)
        # An acceleration of 2ζωL·θ' adds the damping ratio ζ to the swing.
        damping = 2 * (0.11 * p.skill) * np.sqrt(GRAVITY / rope) * rope * (rate - p.skill * expected_rate)
        hand = self._limb.follow(np.clip(steady + damping, -o.strongest, o.strongest))
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
