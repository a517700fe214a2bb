"""An expert for the torque-limited pendulum of Gymnasium: energy shaping, then a linear-quadratic catch."""

from __future__ import annotations

from typing import Annotated

import numpy as np
from numpy.typing import NDArray
from pydantic import Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options, Simulator
from nearhand.sim.gymnasium_rig import GymnasiumRig
from nearhand.sim.lqr import discrete_gain

Array = NDArray[np.float64]


class SwingUpOptions(Frozen):
    """How hard energy is pumped, and where the catch takes over.

    Attributes:
        pump: torque per unit of missing energy and of rate.
        catch: the catch takes over where its own torque is below this many times the limit.
        noise: standard deviation added to the torque, as a fraction of the half range.
    """

    pump: Positive = 3.0
    catch: Positive = 1.0
    noise: Annotated[FiniteFloat, Field(ge=0, le=1)] = 0.03


class SwingUpExpert:
    """A function of the observation (cos θ, sin θ, θ') with θ = 0 upright, and a little noise.

    Rate and angle follow θ'' = 3g/(2l) sin θ + 3/(ml²) u, integrated rate first, as the environment documents it.
    Source: Åström & Furuta, "Swinging up a pendulum by energy control", Automatica 2000.
    """

    def __init__(self, simulator: GymnasiumRig, options: SwingUpOptions) -> None:
        simulator.reset(1, seed=0)
        bare = simulator.environments[0].unwrapped
        names = ("g", "m", "l", "dt", "max_torque")
        if not all(hasattr(bare, name) for name in names):
            raise ConfigError("this expert drives the torque-limited pendulum only", code="config.expert")
        gravity, mass, length, period_s, self._limit = (float(getattr(bare, name)) for name in names)
        self._pull, push = 1.5 * gravity / length, 3.0 / (mass * length**2)
        rate_row = [self._pull * period_s, 1.0]
        a = np.array([[1.0 + period_s * rate_row[0], period_s], rate_row])
        b = np.array([[period_s**2 * push], [period_s * push]])
        self.gain, _ = discrete_gain(a, b, np.diag([1.0, 0.1]), np.array([[0.001]]))
        self._options = options

    def reset(self, observations: Array, *, seed: int) -> None:
        """Begin new episodes; see Expert."""
        self._generator = np.random.default_rng(seed)

    def act(self, observations: Array) -> Array:
        """Return torques (B, 1); see Expert."""
        angle, rate = np.arctan2(observations[:, 1], observations[:, 0]), observations[:, 2]
        catch = -(self.gain[0, 0] * angle + self.gain[0, 1] * rate)
        missing = self._pull * (1.0 - observations[:, 0]) - 0.5 * np.square(rate)
        # From rest at the bottom there is nothing to pump; any push begins the swing.
        pump = self._options.pump * missing * np.where(np.abs(rate) < 1e-3, 1.0, np.sign(rate))
        near = (np.abs(catch) <= self._options.catch * self._limit) & (observations[:, 0] > 0.5)
        torque = np.where(near, catch, pump)
        noise = self._options.noise * self._limit * self._generator.standard_normal(len(torque))
        limited = np.clip(np.clip(torque, -self._limit, self._limit) + noise, -self._limit, self._limit)
        return np.asarray(limited[:, None])


def make_swing_up(simulator: Simulator, options: Options) -> SwingUpExpert:
    """Build the expert.

    Raises:
        ConfigError: the simulator is no such pendulum, or an option is wrong.
    """
    if not isinstance(simulator, GymnasiumRig):
        raise ConfigError("this expert drives Gymnasium's pendulum only; name another one", code="config.expert")
    try:
        return SwingUpExpert(simulator, SwingUpOptions.model_validate(dict(options)))
    except ValidationError as error:
        raise ConfigError(f"swing-up expert: {sentence(error)}", code="config.expert") from error
