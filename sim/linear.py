"""Two carts joined by a spring, each with a drive: a linear plant whose best controller is known exactly."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options, Simulator, Step
from nearhand.sim.lqr import discrete_gain, zero_order_hold

Array = NDArray[np.float64]
#: What the score charges: positions, velocities and forces, per unit squared.
STATE_WEIGHTS, FORCE_WEIGHT = (1.0, 1.0, 0.1, 0.1), 0.1


class LinearOptions(Frozen):
    """The plant, SI units: ``start_m`` is the half width of the start states, ``shake`` the noise on velocities."""

    period_s: Positive = 0.1
    max_steps: Annotated[int, Field(ge=1, le=100_000)] = 100
    first_kg: Positive = 1.0
    second_kg: Positive = 2.0
    spring: Positive = 3.0
    friction: Annotated[FiniteFloat, Field(ge=0)] = 0.1
    start_m: Positive = 1.0
    shake: Annotated[FiniteFloat, Field(ge=0)] = 0.01


class LinearRig:
    """A batch of episodes; observations are the two positions, then the two velocities."""

    observation_size, action_size = 4, 2

    def __init__(self, options: LinearOptions) -> None:
        self.options = options
        self.period_s, self.max_steps = options.period_s, options.max_steps
        force = np.array([[-options.spring, options.spring], [options.spring, -options.spring]])
        masses = np.array([options.first_kg, options.second_kg])
        a, b = np.zeros((4, 4)), np.zeros((4, 2))
        a[:2, 2:] = np.eye(2)
        a[2:, :2] = force / masses[:, None]
        a[2:, 2:] = -np.diag(options.friction / masses)
        b[2:] = np.diag(1 / masses)
        self.a, self.b = zero_order_hold(a, b, options.period_s)
        self.q, self.r = np.diag(STATE_WEIGHTS), FORCE_WEIGHT * np.eye(2)

    def reset(self, count: int, *, seed: int) -> Array:
        """Start ``count`` episodes; see Simulator."""
        self._generator = np.random.default_rng(seed)
        self._state = self._generator.uniform(-self.options.start_m, self.options.start_m, (count, 4))
        self._steps = 0
        self._return = np.zeros(count)
        return self._state.copy()

    def step(self, actions: Array) -> Step:
        """Advance one period; see Simulator."""
        count = len(self._state)
        ended = self._steps >= self.max_steps
        score = np.zeros(count)
        if not ended:
            cost = np.einsum("bi,ij,bj->b", self._state, self.q, self._state)
            score = -cost - np.einsum("bi,ij,bj->b", actions, self.r, actions)
            shake = np.zeros((count, 4))
            shake[:, 2:] = self.options.shake * self._generator.standard_normal((count, 2))
            self._state = self._state @ self.a.T + actions @ self.b.T + shake
            self._steps += 1
        self._return += score
        over = np.full(count, self._steps >= self.max_steps)
        return Step(self._state.copy(), score, np.zeros(count, dtype=bool), over)

    def outcomes(self) -> dict[str, Array]:
        """Return (B,) figures; success is to end near the origin; see Simulator."""
        near = np.abs(self._state[:, :2]).max(axis=1) < 0.1 * self.options.start_m
        return {"success": near.astype(np.float64), "cost": -self._return}


class LinearExpert:
    """u = -K·x with the gain of the Riccati equation, undiscounted."""

    def __init__(self, rig: LinearRig) -> None:
        self.gain, _ = discrete_gain(rig.a, rig.b, rig.q, rig.r)

    def reset(self, observations: Array, *, seed: int) -> None:
        """Begin new episodes; see Expert."""

    def act(self, observations: Array) -> Array:
        """Return actions (B, m); see Expert."""
        return np.asarray(-observations @ self.gain.T)


def make_simulator(options: Options) -> LinearRig:
    """Build the plant.

    Raises:
        ConfigError: an option is unknown or wrong.
    """
    try:
        return LinearRig(LinearOptions.model_validate(dict(options)))
    except ValidationError as error:
        raise ConfigError(f"two carts options: {sentence(error)}", code="config.simulator") from error


def make_expert(simulator: Simulator, options: Options) -> LinearExpert:
    """Build the regulator.

    Raises:
        ConfigError: the simulator is another rig's, or there are options.
    """
    if not isinstance(simulator, LinearRig) or options:
        raise ConfigError("this expert drives the two carts only and has no options", code="config.expert")
    return LinearExpert(simulator)
