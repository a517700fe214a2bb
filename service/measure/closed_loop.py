"""Closed-loop episodes in the simulator: bare, for distances, and served, through the governor, for what counts."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from nearhand.service.action.governor import Governor
from nearhand.service.policy.format import PolicyFile
from nearhand.service.policy.network import Policy, Window
from nearhand.service.rigs import Rig
from nearhand.service.simulators import Expert, Simulator

Array = NDArray[np.float64]
Tick = Callable[[float], None]


@dataclass
class Rollouts:
    """A batch of B closed-loop episodes of at most T periods.

    Attributes:
        observations: (T+1, B, n); actions: (T, B, m); rows beyond an episode's length repeat its end.
        lengths: (B,) control periods.
        terminated: (B,) ended in a true terminal state.
        score: (B,) sum of the task score.
        outcomes: the simulator's figures, (B,) each.
        counts: what governors counted, per episode (served only).
    """

    observations: Array
    actions: Array
    lengths: NDArray[np.int64]
    terminated: NDArray[np.bool_]
    score: Array
    outcomes: dict[str, Array]
    counts: list[Counter[str]] = field(default_factory=list)

    def episode(self, index: int) -> tuple[Array, Array]:
        """Return one episode's observations (T+1, n) and actions (T, m)."""
        length = int(self.lengths[index])
        return self.observations[: length + 1, index], self.actions[:length, index]


def roll(simulator: Simulator, driver: Callable[[Array, int], Array], count: int, seed: int, tick: Tick) -> Rollouts:
    """Let a driver, a function of (observations (B, n), step), drive ``count`` episodes from ``seed``."""
    observations = simulator.reset(count, seed=seed)
    seen, done = [observations], []
    score = np.zeros(count)
    lengths = np.zeros(count, dtype=np.int64)
    running = np.ones(count, dtype=bool)
    terminated = np.zeros(count, dtype=bool)
    for step in range(simulator.max_steps):
        actions = driver(observations, step)
        result = simulator.step(actions)
        observations = result.observations
        seen.append(observations)
        done.append(actions)
        score += np.where(running, result.score, 0.0)
        lengths += running
        terminated |= running & result.terminated
        running &= ~(result.terminated | result.truncated)
        if step % 50 == 0:
            tick(step / simulator.max_steps)
        if not running.any():
            break
    return Rollouts(
        np.array(seen),
        np.array(done),
        lengths,
        terminated,
        score,
        {k: v.copy() for k, v in simulator.outcomes().items()},
    )


def roll_expert(simulator: Simulator, expert: Expert, rig: Rig, count: int, seed: int, tick: Tick) -> Rollouts:
    """Let the expert drive."""
    low, high = action_range(rig)

    def driver(observations: Array, step: int) -> Array:
        if step == 0:
            expert.reset(observations, seed=seed)
        return np.clip(expert.act(observations), low, high)

    return roll(simulator, driver, count, seed, tick)


def roll_random(simulator: Simulator, rig: Rig, count: int, seed: int, tick: Tick) -> Rollouts:
    """Let chance drive: uniform in each channel's range, anew each period."""
    low, high = action_range(rig)
    generator = np.random.default_rng([seed, 1])
    return roll(simulator, lambda obs, _: generator.uniform(low, high, (len(obs), len(low))), count, seed, tick)


def roll_policy(simulator: Simulator, policy: Policy, rig: Rig, count: int, seed: int, tick: Tick) -> Rollouts:
    """Let the bare policy drive: its mean action, limited to the range and by nothing else."""
    low, high = action_range(rig)
    rest = np.array([channel.rest for channel in rig.actions], dtype=np.float32)
    window = Window(policy, count, rest)
    last: list[Array] = []

    def driver(observations: Array, step: int) -> Array:
        if step == 0:
            rows = window.start(observations)
        else:
            window.acted(last[-1])
            rows = window.observed(observations)
        actions = np.clip(np.nan_to_num(policy.action(rows).astype(np.float64)), low, high)
        last[:] = [actions]
        return actions

    return roll(simulator, driver, count, seed, tick)


def roll_served(simulator: Simulator, file: PolicyFile, rig: Rig, count: int, seed: int, tick: Tick) -> Rollouts:
    """Drive as the action server would: governor and envelope per episode; the confidence gate only watches."""
    governors = []
    for _ in range(count):
        governor = Governor(rig, gate_trips=False)
        governor.load(1, file)
        governor.arm()
        governor.begin_session("measure", 0)
        governors.append(governor)
    period_ns = round(rig.timing.period_s * 1e9)

    def driver(observations: Array, step: int) -> Array:
        now_ns = step * period_ns
        rows = observations.astype(np.float32)
        with np.errstate(over="ignore", invalid="ignore"):
            return np.array([g.act(row, step, now_ns, now_ns).action for g, row in zip(governors, rows, strict=True)])

    result = roll(simulator, driver, count, seed, tick)
    result.counts = [governor.counts for governor in governors]
    return result


def action_range(rig: Rig) -> tuple[Array, Array]:
    """Return the action channels' limits, (m,) each."""
    return np.array([c.low for c in rig.actions]), np.array([c.high for c in rig.actions])
