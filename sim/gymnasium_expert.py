"""A linear-quadratic expert for a MuJoCo environment, from finite differences of its own model."""

from __future__ import annotations

from typing import Annotated, Any

import gymnasium
import mujoco
import numpy as np
from numpy.typing import NDArray
from pydantic import Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options, Simulator
from nearhand.sim.gymnasium_rig import GymnasiumRig, make_environment
from nearhand.sim.lqr import discrete_gain

Array = NDArray[np.float64]
#: Step of the finite differences, in coordinates, speeds and controls.
DIFFERENCE = 1e-5
#: What is smaller than this in the observation's slope is rounding.
RANK_TOLERANCE = 1e-6


class LqrOptions(Frozen):
    """Weights of the regulator about the model's initial pose, and a noise that makes demonstrations informative.

    Attributes:
        position_weight, velocity_weight: on each generalised coordinate and speed.
        action_weight: on each actuator.
        noise: standard deviation added to the action, as a fraction of the half range.
    """

    position_weight: Positive = 10.0
    velocity_weight: Positive = 1.0
    action_weight: Positive = 1.0
    noise: Annotated[FiniteFloat, Field(ge=0, le=1)] = 0.05


def linearise(model: mujoco.MjModel, steps: int) -> tuple[Array, Array]:
    """Return (A, B) over ``steps`` model steps about the initial pose at rest, by central differences.

    The state is (q, q'); for models whose coordinates are as many as their speeds.

    Raises:
        ConfigError: the model has ball or free joints.
    """
    if model.nq != model.nv:
        raise ConfigError("this expert needs a model of hinges and slides only", code="config.expert")
    data = mujoco.MjData(model)
    nv, nu = model.nv, model.nu

    def advance(state: Array, control: Array) -> Array:
        mujoco.mj_resetData(model, data)
        data.qpos[:] = model.qpos0 + state[:nv]
        data.qvel[:] = state[nv:]
        data.ctrl[:] = control
        mujoco.mj_step(model, data, steps)
        return np.concatenate((data.qpos - model.qpos0, data.qvel))

    point = np.zeros(2 * nv + nu)
    columns = []
    for index in range(len(point)):
        ends = []
        for sign in (1.0, -1.0):
            moved = point.copy()
            moved[index] += sign * DIFFERENCE
            ends.append(advance(moved[: 2 * nv], moved[2 * nv :]))
        columns.append((ends[0] - ends[1]) / (2 * DIFFERENCE))
    jacobian = np.array(columns).T
    return jacobian[:, : 2 * nv], jacobian[:, 2 * nv :]


def observation_slope(bare: gymnasium.Env[Any, Any], model: mujoco.MjModel, a: Array) -> tuple[Array, Array]:
    """Return (o₀, C): the observation near the initial pose at rest is o₀ + C·(q, q').

    What an environment shows after one step from a set state is o₀ + C·A·(q, q'), so A is divided out; a sine of an
    angle thus counts as the angle, and a cosine as nothing.

    Args:
        a: A of one control period, from :func:`linearise`.
    """
    bare.reset(seed=0)
    nv, idle = model.nv, np.zeros(model.nu)

    def seen(state: Array) -> Array:
        bare.set_state(model.qpos0 + state[:nv], state[nv:])  # type: ignore[attr-defined]
        return np.asarray(bare.step(idle)[0], dtype=np.float64)

    moves = DIFFERENCE * np.eye(2 * nv)
    after = np.array([(seen(move) - seen(-move)) / (2 * DIFFERENCE) for move in moves]).T
    return seen(np.zeros(2 * nv)), np.linalg.solve(a.T, after.T).T


class LqrExpert:
    """u = −K·(q, q'), with the state told from the observation by its slope about the initial pose."""

    def __init__(self, simulator: GymnasiumRig, options: LqrOptions) -> None:
        self._noise = options.noise
        bare = make_environment(simulator.options).unwrapped
        model = getattr(bare, "model", None)
        if not isinstance(model, mujoco.MjModel):
            raise ConfigError(
                f"environment {simulator.options.env} is no MuJoCo model; this expert needs one", code="config.expert"
            )
        a, b = linearise(model, int(getattr(bare, "frame_skip", 1)))
        nv = model.nv
        q = np.diag([options.position_weight] * nv + [options.velocity_weight] * nv)
        try:
            self.gain, _ = discrete_gain(a, b, q, options.action_weight * np.eye(model.nu))
        except ValueError as error:  # LinAlgError among them
            raise ConfigError(
                f"environment {simulator.options.env} has no regulator about its initial pose: {error}",
                code="config.expert",
            ) from error
        self.closed_loop = a - b @ self.gain
        self._rest, slope = observation_slope(bare, model, a)
        bare.close()
        if np.linalg.matrix_rank(slope, tol=RANK_TOLERANCE) < 2 * nv:
            raise ConfigError(
                f"environment {simulator.options.env}: its observation does not tell all {nv} coordinates and speeds; "
                "this expert needs them",
                code="config.expert",
            )
        self._observed_gain = self.gain @ np.linalg.pinv(slope, rcond=RANK_TOLERANCE)
        limits = model.actuator_ctrlrange
        self._low, self._high = limits[:, 0].copy(), limits[:, 1].copy()

    def reset(self, observations: Array, *, seed: int) -> None:
        """Begin new episodes; see Expert."""
        self._generator = np.random.default_rng(seed)

    def act(self, observations: Array) -> Array:
        """Return actions (B, m); see Expert."""
        wanted = -(observations - self._rest) @ self._observed_gain.T
        half = (self._high - self._low) / 2
        noise = self._noise * half * self._generator.standard_normal(wanted.shape)
        return np.asarray(np.clip(wanted + noise, self._low, self._high))


def make_lqr(simulator: Simulator, options: Options) -> LqrExpert:
    """Build the regulator.

    Raises:
        ConfigError: the simulator is no MuJoCo environment, or an option is wrong.
    """
    if not isinstance(simulator, GymnasiumRig):
        raise ConfigError("this expert drives Gymnasium rigs only; name another one", code="config.expert")
    try:
        return LqrExpert(simulator, LqrOptions.model_validate(dict(options)))
    except ValidationError as error:
        raise ConfigError(f"lqr expert: {sentence(error)}", code="config.expert") from error
