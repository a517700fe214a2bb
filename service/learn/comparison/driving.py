"""Demonstrations and scores for the benchmark: the one place of the learning code that reads the task score."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode
from nearhand.service.errors import ConfigError
from nearhand.service.learn.demonstrations import rest_action
from nearhand.service.policy.network import Policy, Window
from nearhand.service.rigs import Rig
from nearhand.service.simulators import Expert, Simulator, make_expert, make_simulator

Array = NDArray[np.float64]
#: From observations (B, n) and the actions last applied (B, m), None at the start, to actions (B, m).
Driver = Callable[[Array, Array | None], Array]
#: Start states that scores are measured from; no training or selection uses this seed.
SCORE_SEED, SCORE_EPISODES = 987_654_321, 50


@dataclass(frozen=True)
class Driven:
    """B episodes: observations (T+1, B, n), actions (T, B, m), periods lived, terminal or not, summed score."""

    observations: Array
    actions: Array
    lengths: NDArray[np.int64]
    terminated: NDArray[np.bool_]
    score: Array


def simulator_of(rig: Rig, changes: Mapping[str, Any] | None = None) -> Simulator:
    """Return the rig's simulator, with options changed.

    Raises:
        ConfigError: the rig names none, or an option is wrong.
    """
    if rig.simulator is None:
        raise ConfigError(f"rig {rig.name} names no simulator; the learning benchmark needs one")
    return make_simulator(rig.simulator.name, {**rig.simulator.options, **(changes or {})})


def expert_of(rig: Rig, simulator: Simulator) -> Expert:
    """Return the rig's own expert.

    Raises:
        ConfigError: the rig names none.
    """
    if rig.expert is None:
        raise ConfigError(f"rig {rig.name} names no expert; the learning benchmark needs one")
    named = rig.experts[rig.expert]
    return make_expert(named.name, simulator, named.options)


def drive_scored(rig: Rig, simulator: Simulator, first: Array, driver: Driver) -> Driven:
    """Drive on from first observations (B, n) to the end, within the rig's limits and slew."""
    low = np.asarray([channel.low for channel in rig.actions])
    high = np.asarray([channel.high for channel in rig.actions])
    slew = np.asarray([channel.slew_per_s for channel in rig.actions]) * rig.timing.period_s
    count = len(first)
    last = np.tile(rest_action(rig).astype(np.float64), (count, 1))
    seen, done = [first], list[Array]()
    lengths, score = np.zeros(count, dtype=np.int64), np.zeros(count)
    alive, terminated = np.ones(count, dtype=bool), np.zeros(count, dtype=bool)
    for _ in range(simulator.max_steps):
        wanted = np.clip(driver(seen[-1], done[-1] if done else None), low, high)
        last = np.clip(wanted, last - slew, last + slew)
        step = simulator.step(last)
        score += np.where(alive, step.score, 0.0)
        lengths += alive
        terminated |= alive & step.terminated
        alive &= ~(step.terminated | step.truncated)
        seen.append(step.observations)
        done.append(last)
        if not alive.any():
            break
    return Driven(np.array(seen), np.array(done), lengths, terminated, score)


def record(rig: Rig, count: int, seed: int) -> list[Episode]:
    """Let the rig's expert drive ``count`` training episodes."""
    simulator = simulator_of(rig)
    expert = expert_of(rig, simulator)
    first = simulator.reset(count, seed=seed)
    expert.reset(first, seed=seed + 1)
    driven = drive_scored(rig, simulator, first, lambda seen, _: expert.act(seen))
    return [
        Episode(
            episode=f"{rig.name}-{seed}-{index}",
            rig=rig.name,
            operator="expert",
            times_s=np.arange(length) * rig.timing.period_s,
            observations=driven.observations[: length + 1, index].astype(np.float32),
            actions=driven.actions[:length, index].astype(np.float32),
            terminated=bool(driven.terminated[index]),
        )
        for index, length in enumerate(driven.lengths)
    ]


@dataclass(frozen=True)
class Scale:
    """Mean scores of chance and of the expert from the same start states, under changed options."""

    rig: Rig
    changes: Mapping[str, Any]
    chance: float
    expert: float

    def score(self, policy: Policy, episodes: int = SCORE_EPISODES) -> float:
        """Return a policy's score: 0 is chance, 1 the expert."""
        return (self.raw(policy, episodes) - self.chance) / (self.expert - self.chance)

    def raw(self, policy: Policy, episodes: int = SCORE_EPISODES) -> float:
        """Return the mean summed score of a policy's mean action."""
        simulator = simulator_of(self.rig, self.changes)
        first = simulator.reset(episodes, seed=SCORE_SEED)
        window = Window(policy, episodes, rest_action(self.rig))

        def act(observations: Array, last: Array | None) -> Array:
            if last is None:
                rows = window.start(observations)
            else:
                window.acted(last)
                rows = window.observed(observations)
            return policy.action(rows).astype(np.float64)

        return float(drive_scored(self.rig, simulator, first, act).score.mean())


def scale_of(rig: Rig, changes: Mapping[str, Any] | None = None, episodes: int = SCORE_EPISODES) -> Scale:
    """Return the scale of a rig, measured from the scoring start states."""
    simulator = simulator_of(rig, changes)
    expert = expert_of(rig, simulator)
    first = simulator.reset(episodes, seed=SCORE_SEED)
    expert.reset(first, seed=SCORE_SEED + 1)
    best = drive_scored(rig, simulator, first, lambda seen, _: expert.act(seen)).score.mean()
    generator = np.random.default_rng(SCORE_SEED + 2)
    low, high = [channel.low for channel in rig.actions], [channel.high for channel in rig.actions]
    first = simulator.reset(episodes, seed=SCORE_SEED)
    chance = drive_scored(rig, simulator, first, lambda seen, _: generator.uniform(low, high, (len(seen), len(low))))
    return Scale(rig, changes or {}, float(chance.score.mean()), float(best))


def linear_gain(observations: Array, actions: Array) -> Array:
    """Return the least-squares gain K (m, n) of actions (N, m) ≈ -K·x + offset over observations (N, n)."""
    table = np.column_stack([observations, np.ones(len(observations))])
    solution = np.linalg.lstsq(table, actions, rcond=None)[0]
    return np.asarray(-solution[:-1].T, dtype=np.float64)
