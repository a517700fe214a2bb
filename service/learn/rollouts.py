"""Roll-outs: a policy drives the rig's simulator, through the same clip and slew limits that it is served with."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from concurrent.futures import Executor, Future
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.errors import LearningError
from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.demonstrations import rest_action
from nearhand.service.learn.starts import Wanted, nearest_seed
from nearhand.service.policy.network import Float32, Policy, Window
from nearhand.service.rigs import Rig
from nearhand.service.simulators import Simulator, make_simulator

MakeSimulator = Callable[[], Simulator]


@dataclass(frozen=True)
class Rollouts:
    """B episodes of at most T periods.

    Attributes:
        windows: (B, T+1, d) float32; after an episode's end its last window is repeated.
        asked: (B, T, m) what the policy asked for, in half ranges.
        applied: (B, T, m) what passed the limits.
        lengths: (B,) periods lived.
        terminated: (B,) ended in a true terminal state.
        shares: (B,) weight of each episode, summing to one.
    """

    windows: Float32
    asked: Float32
    applied: Float32
    lengths: NDArray[np.int64]
    terminated: NDArray[np.bool_]
    shares: NDArray[np.float64]

    @property
    def steps(self) -> int:
        """Simulated control periods, all episodes together."""
        return int(self.lengths.sum())


class InProcess(Executor):
    """An executor that does the work at once, in this process: the default on one core."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Call ``fn`` now and return a finished future."""
        future: Future[Any] = Future()
        try:
            future.set_result(fn(*args, **kwargs))
        except Exception as error:
            future.set_exception(error)
        return future


@dataclass(frozen=True)
class RigSimulator:
    """Makes the simulator that a rig names; can be sent to another process."""

    rig: Rig

    def __call__(self) -> Simulator:
        """Return a new simulator.

        Raises:
            LearningError: the rig names none.
            ConfigError: it is not installed or its options are wrong.
        """
        if self.rig.simulator is None:
            raise LearningError(f"rig {self.rig.name} names no simulator", code="learn.no_simulator")
        return make_simulator(self.rig.simulator.name, self.rig.simulator.options)


@dataclass(frozen=True)
class OneSimulator:
    """Hands out one simulator again and again, for work in this process."""

    simulator: Simulator

    def __call__(self) -> Simulator:
        """Return it."""
        return self.simulator


def served(blank: Policy, actor: Actor) -> Policy:
    """Return the actor as a NumPy policy with the normalisation of ``blank``."""
    weights, biases = actor.layers.arrays(actor.flat)
    return replace(blank, weights=weights, biases=biases, log_sd=actor.log_sd.astype(np.float32))


def drive(
    make: MakeSimulator,
    rig: Rig,
    policy: Policy,
    count: int,
    horizon: int,
    sim_seed: int,
    noise_seed: Sequence[int] | None,
    wanted: Wanted | None = None,
) -> Rollouts:
    """Drive ``count`` episodes.

    Args:
        make: makes the simulator.
        rig: limits and rest of its actions.
        policy: who drives; its mean alone if ``noise_seed`` is None, else with its standard deviation.
        count: episodes B.
        horizon: at most so many periods T.
        sim_seed: seed of start states and disturbances.
        noise_seed: seed of the action noise.
        wanted: where to start; anywhere if None.

    Raises:
        LearningError: the simulator returned observations that are not finite.
    """
    simulator = make()
    generator = None if noise_seed is None else np.random.default_rng(noise_seed)
    low = np.asarray([channel.low for channel in rig.actions])
    high = np.asarray([channel.high for channel in rig.actions])
    slew = np.asarray([channel.slew_per_s for channel in rig.actions]) * rig.timing.period_s
    rest = rest_action(rig)
    sd = np.exp(policy.log_sd)
    m = policy.action_size
    windows = np.empty((count, horizon + 1, policy.input_size), dtype=np.float32)
    asked = np.zeros((count, horizon, m), dtype=np.float32)
    applied = np.zeros((count, horizon, m), dtype=np.float32)
    lengths = np.zeros(count, dtype=np.int64)
    alive = np.ones(count, dtype=bool)
    terminated = np.zeros(count, dtype=bool)
    window = Window(policy, count, rest)
    if wanted is not None:
        sim_seed = nearest_seed(simulator, count, sim_seed, wanted)
    windows[:, 0] = window.start(simulator.reset(count, seed=sim_seed))
    last = np.tile(rest.astype(np.float64), (count, 1))
    for t in range(horizon):
        u = policy.mean(windows[:, t])
        if generator is not None:
            u = u + sd * generator.standard_normal((count, m)).astype(np.float32)
        action = np.clip(policy.action_middle + policy.action_half * u.astype(np.float64), low, high)
        action = np.clip(action, last - slew, last + slew)
        last = action
        asked[:, t] = u
        applied[:, t] = (action - policy.action_middle) / policy.action_half
        step = simulator.step(action)
        if not np.isfinite(step.observations).all():
            raise LearningError(
                f"the simulator of rig {rig.name} returned observations that are not finite after {t + 1} periods",
                code="learn.simulator",
            )
        lengths += alive
        terminated |= alive & step.terminated
        alive = alive & ~(step.terminated | step.truncated)
        window.acted(action)
        windows[:, t + 1] = window.observed(step.observations)
        if not alive.any():
            windows, asked, applied = windows[:, : t + 2], asked[:, : t + 1], applied[:, : t + 1]
            break
    return Rollouts(windows, asked, applied, lengths, terminated, np.full(count, 1 / count))


def roll_out(
    executor: Executor,
    make: MakeSimulator,
    rig: Rig,
    policy: Policy,
    count: int,
    horizon: int,
    seed: Sequence[int],
    *,
    noisy: bool,
    wanted: Wanted | None = None,
    parts: int = 1,
) -> Rollouts:
    """Drive ``count`` episodes in ``parts`` equal pieces of work; the result depends on ``parts``, not on who works.

    Args:
        executor: where the pieces run.
        make, rig, policy, count, horizon: see ``drive``.
        seed: root of all seeds of these roll-outs.
        noisy: explore with the policy's standard deviation.
        wanted: where to start; anywhere if None.
        parts: pieces of work.
    """
    sizes = [len(piece) for piece in np.array_split(np.arange(count), parts)]
    futures = []
    for index, size in enumerate(sizes):
        sim_seed = int(np.random.default_rng((*seed, index)).integers(2**31))
        noise_seed = (*seed, index, 1) if noisy else None
        futures.append(executor.submit(drive, make, rig, policy, size, horizon, sim_seed, noise_seed, wanted))
    try:
        pieces: list[Rollouts] = [future.result() for future in futures]
    finally:
        for future in futures:
            future.cancel()
    return pieces[0] if len(pieces) == 1 else join(pieces)


def join(pieces: Sequence[Rollouts]) -> Rollouts:
    """Return roll-outs one after the other, padded to the longest by repeating last windows."""
    periods = max(piece.asked.shape[1] for piece in pieces)

    def padded(array: Float32, length: int, mode: Any) -> Float32:
        return np.pad(array, ((0, 0), (0, length - array.shape[1]), (0, 0)), mode=mode)

    return Rollouts(
        windows=np.concatenate([padded(piece.windows, periods + 1, "edge") for piece in pieces]),
        asked=np.concatenate([padded(piece.asked, periods, "constant") for piece in pieces]),
        applied=np.concatenate([padded(piece.applied, periods, "constant") for piece in pieces]),
        lengths=np.concatenate([piece.lengths for piece in pieces]),
        terminated=np.concatenate([piece.terminated for piece in pieces]),
        shares=np.full(sum(len(piece.lengths) for piece in pieces), 1 / sum(len(piece.lengths) for piece in pieces)),
    )
