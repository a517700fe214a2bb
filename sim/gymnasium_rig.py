"""Any Gymnasium environment with Box spaces as a rig, from a TOML file alone."""

from __future__ import annotations

import warnings
from typing import Annotated, Any

import gymnasium
import numpy as np
from numpy.typing import NDArray
from pydantic import Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence
from nearhand.service.simulators import Options, Step

Array = NDArray[np.float64]


class GymnasiumOptions(Frozen):
    """Which environment, and what counts as success.

    Attributes:
        env: its registered name.
        period_s: control period, when the environment does not tell its own ``dt``.
        max_steps: time limit in control periods; the registered one when 0.
        success_return: an episode succeeded when its summed reward reaches this; when absent, when it did not
            terminate before its time was up.
        kwargs: passed to the environment's constructor.
    """

    env: str = Field(max_length=100)
    period_s: Positive | None = None
    max_steps: Annotated[int, Field(ge=0, le=1_000_000)] = 0
    success_return: FiniteFloat | None = None
    kwargs: dict[str, Any] = Field(default_factory=dict)


def make_environment(options: GymnasiumOptions) -> gymnasium.Env[Any, Any]:
    """Build one environment, without its own time limit: that is the rig's.

    Raises:
        ConfigError: unknown name, wrong arguments, or spaces that are no Box of one dimension.
    """
    try:
        with warnings.catch_warnings():
            # The rig's description names a version on purpose: that there is a newer one is no news.
            warnings.filterwarnings("ignore", message=".*is out of date", category=DeprecationWarning)
            made = gymnasium.make(options.env, disable_env_checker=True, **options.kwargs)
    except (gymnasium.error.Error, TypeError, ValueError, AssertionError, ImportError, AttributeError) as error:
        raise ConfigError(
            f"cannot make the environment {options.env!r}: {error}; give a registered name with its package installed",
            code="config.environment",
        ) from error
    for what, space in (("observation", made.observation_space), ("action", made.action_space)):
        if not isinstance(space, gymnasium.spaces.Box) or len(space.shape) != 1:
            raise ConfigError(
                f"environment {options.env}: its {what} space is {space}; a rig needs a Box of one dimension",
                code="config.environment",
            )
    return made


class GymnasiumRig:
    """A batch of episodes, each in an environment of its own; see :class:`nearhand.service.simulators.Simulator`."""

    def __init__(self, options: GymnasiumOptions) -> None:
        self.options = options
        self._spare: list[gymnasium.Env[Any, Any]] = [make_environment(options)]
        first = self._spare[0]
        self.observation_size = int(first.observation_space.shape[0])  # type: ignore[index]
        self.action_size = int(first.action_space.shape[0])  # type: ignore[index]
        limit = None if first.spec is None else first.spec.max_episode_steps
        self.max_steps = options.max_steps or limit or 1000
        told = options.period_s or getattr(first.unwrapped, "dt", None)
        if told is None:
            raise ConfigError(f"environment {options.env} tells no control period; set period_s in its options")
        self.period_s = float(told)
        self._low = np.asarray(first.action_space.low, dtype=np.float64)  # type: ignore[attr-defined]
        self._high = np.asarray(first.action_space.high, dtype=np.float64)  # type: ignore[attr-defined]
        self._dtype = first.action_space.dtype

    @property
    def environments(self) -> list[gymnasium.Env[Any, Any]]:
        """The environments of the present batch."""
        return self._spare[: self._count]

    def reset(self, count: int, *, seed: int) -> Array:
        """Start ``count`` episodes; see Simulator."""
        while len(self._spare) < count:
            self._spare.append(make_environment(self.options))
        self._count = count
        seeds = np.random.SeedSequence(seed).generate_state(count)
        rows = [env.unwrapped.reset(seed=int(one))[0] for env, one in zip(self.environments, seeds, strict=True)]
        self._seen: Array = np.array(rows, dtype=np.float64)
        self._steps = 0
        self._return = np.zeros(count)
        self._terminated = np.zeros(count, dtype=bool)
        self._truncated = np.zeros(count, dtype=bool)
        self._lengths = np.zeros(count)
        return self._seen.copy()

    def step(self, actions: Array) -> Step:
        """Hold ``actions`` (B, m) for one control period; see Simulator."""
        self._steps += 1
        score = np.zeros(self._count)
        limited = np.clip(np.asarray(actions, dtype=np.float64), self._low, self._high).astype(self._dtype)
        for index, env in enumerate(self.environments):
            if self._terminated[index] or self._truncated[index]:
                continue
            # The bare environment: its wrappers only keep the registered time limit, and ours is kept here.
            seen, reward, terminated, truncated, _ = env.unwrapped.step(limited[index])
            self._seen[index] = seen
            score[index] = float(reward)
            self._lengths[index] += 1
            self._terminated[index] = bool(terminated)
            self._truncated[index] = not terminated and (bool(truncated) or self._steps >= self.max_steps)
        self._return += score
        return Step(self._seen.copy(), score, self._terminated.copy(), self._truncated.copy())

    def outcomes(self) -> dict[str, Array]:
        """Return (B,) figures of the episodes so far; see Simulator."""
        if self.options.success_return is None:
            success = ~self._terminated
        else:
            success = self._return >= self.options.success_return
        return {
            "success": success.astype(np.float64),
            "return": self._return.copy(),
            "time_s": self._lengths * self.period_s,
        }


def checked(options: Options) -> GymnasiumOptions:
    """Check the options of a rig's ``[simulator.options]``.

    Raises:
        ConfigError: one is unknown, missing or wrong.
    """
    try:
        return GymnasiumOptions.model_validate(dict(options))
    except ValidationError as error:
        raise ConfigError(f"gymnasium options: {sentence(error)}", code="config.simulator") from error


def make_simulator(options: Options) -> GymnasiumRig:
    """Build the rig of a Gymnasium environment.

    Raises:
        ConfigError: options or environment cannot be used.
    """
    return GymnasiumRig(checked(options))
