"""What a simulator and an expert must offer, and how one is found by name.

A rig's TOML names them; the names are entry points (groups ``nearhand.simulators`` and ``nearhand.experts``), so the
service never imports a rig by itself and a request can never name code to import.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from importlib.metadata import entry_points
from typing import Any, Protocol, cast

import numpy as np
from numpy.typing import NDArray

from nearhand.service.errors import ConfigError

Options = Mapping[str, Any]
SIMULATOR_GROUP = "nearhand.simulators"
EXPERT_GROUP = "nearhand.experts"


@dataclass(frozen=True, slots=True)
class Step:
    """What one control period brought, for a batch of B episodes.

    Attributes:
        observations: (B, n) float64, in the rig's units.
        score: (B,) task score of the period; for measurement only, it never enters training.
        terminated: (B,) bool; the task ended in a true terminal state (a fall): nothing follows it.
        truncated: (B,) bool; the time limit ended the episode: the machine would have gone on.
    """

    observations: NDArray[np.float64]
    score: NDArray[np.float64]
    terminated: NDArray[np.bool_]
    truncated: NDArray[np.bool_]


class Simulator(Protocol):
    """A batch of episodes of one rig, advanced together.

    An episode that has ended stays as it was (same observation, score 0, same flags) until the next ``reset``, so a
    batch always has one shape. The same ``(count, seed)`` gives the same start states and the same disturbances.
    """

    period_s: float
    max_steps: int
    observation_size: int
    action_size: int

    def reset(self, count: int, *, seed: int) -> NDArray[np.float64]:
        """Start ``count`` episodes and return their first observations, (B, n)."""
        ...

    def step(self, actions: NDArray[np.float64]) -> Step:
        """Hold ``actions`` (B, m), in the rig's units, for one control period."""
        ...

    def outcomes(self) -> dict[str, NDArray[np.float64]]:
        """Return (B,) figures of the episodes so far; ``success`` (0 or 1) is always among them."""
        ...


class Expert(Protocol):
    """Whatever drives during a demonstration, for a batch of episodes; it may keep memory between periods."""

    def reset(self, observations: NDArray[np.float64], *, seed: int) -> None:
        """Begin new episodes at these first observations, (B, n)."""
        ...

    def act(self, observations: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return actions (B, m) in the rig's units."""
        ...


def _load(group: str, name: str) -> Any:
    found = {point.name: point for point in entry_points(group=group)}
    if name not in found:
        known = ", ".join(sorted(found)) or "none"
        raise ConfigError(
            f"no {group.split('.')[-1][:-1]} named {name!r} is installed here; known: {known}",
            code="config.entry_point",
        )
    try:
        return found[name].load()
    except ImportError as error:
        raise ConfigError(
            f"{group.split('.')[-1][:-1]} {name!r} needs a package that is not installed: {error}. "
            "Install the extra that brings it (for Gymnasium rigs: pip install -e '.[gym]').",
            code="config.missing_package",
        ) from error


def make_simulator(name: str, options: Options) -> Simulator:
    """Build the simulator that a rig names.

    Raises:
        ConfigError: the name is not installed, or an option is wrong.
    """
    return cast(Simulator, _load(SIMULATOR_GROUP, name)(options))


def make_expert(name: str, simulator: Simulator, options: Options) -> Expert:
    """Build an expert for ``simulator``.

    Raises:
        ConfigError: the name is not installed, or an option is wrong.
    """
    return cast(Expert, _load(EXPERT_GROUP, name)(simulator, options))
