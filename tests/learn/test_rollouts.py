"""Roll-outs: limits, seeds, terminals, executors; and the served network against the trained one."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Future, ThreadPoolExecutor
from multiprocessing.reduction import ForkingPickler
from typing import Any

import numpy as np
import pytest
import torch
from torch.optim import AdamW

from nearhand.service.errors import LearningError
from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.demonstrations import blank_policy
from nearhand.service.learn.layers import Adam, Layers
from nearhand.service.learn.rollouts import InProcess, RigSimulator, Rollouts, drive, roll_out, served
from nearhand.service.learn.starts import Wanted
from nearhand.service.policy.network import Policy, episode_windows
from nearhand.service.rigs import Rig


def noisy_policy(rig: Rig, recorded: Callable[..., Any], scale: float = 1.0) -> Policy:
    """Return a random policy with the normalisation of a few demonstrations."""
    blank = blank_policy(rig, recorded(rig.name, 2, 3))
    layers = Layers((blank.input_size, 8, blank.action_size))
    flat = scale * layers.draw(np.random.default_rng(1))
    return served(blank, Actor(layers, flat, np.full(1, -1.0, dtype=np.float32)))


def roll(rig: Rig, policy: Policy, executor: Any, parts: int = 1, *, noisy: bool = True) -> Rollouts:
    """Roll out six episodes."""
    return roll_out(executor, RigSimulator(rig), rig, policy, 6, 50, (1, 2), noisy=noisy, parts=parts)


def test_served_network_agrees_with_the_trained_one(generator: np.random.Generator, rigs: Any, recorded: Any) -> None:
    # float32 sums of 64 terms, of values of order one.
    blank = blank_policy(rigs("pendulum"), recorded("pendulum", 2, 3))
    layers = Layers((3, 64, 64, 1))
    actor = Actor(layers, layers.draw(generator), np.zeros(1, dtype=np.float32))
    windows = generator.standard_normal((500, 3)).astype(np.float32)
    assert np.abs(served(blank, actor).mean(windows) - actor.mean(windows)).max() <= 1e-5


def test_optimiser_takes_the_steps_of_the_library(generator: np.random.Generator) -> None:
    start = torch.from_numpy(generator.standard_normal(30).astype(np.float32))
    target = torch.from_numpy(generator.standard_normal(30).astype(np.float32))
    ours = Adam(start.clone(), decay=torch.full((30,), 0.05))
    theirs = torch.nn.Parameter(start.clone())
    library = AdamW([theirs], lr=0.01, weight_decay=0.05)
    for _ in range(50):
        ours.step(2 * (ours.values - target), 0.01)
        library.zero_grad()
        (theirs - target).square().sum().backward()  # type: ignore[no-untyped-call]
        library.step()
    np.testing.assert_allclose(ours.values, theirs.detach(), atol=1e-5)


def test_actions_keep_within_limits_and_slew(rigs: Any, recorded: Any) -> None:
    rig = rigs("integrator")
    slow = rig.model_copy(update={"actions": (rig.actions[0].model_copy(update={"slew_per_s": 10.0}),)})
    done = roll(slow, noisy_policy(slow, recorded, 20.0), InProcess())
    actions = done.applied[:, :, 0] * 8.0
    assert np.abs(done.asked).max() > 1
    assert np.abs(actions).max() <= 8.0 + 1e-5
    before = np.concatenate([np.zeros((6, 1), dtype=np.float32), actions[:, :-1]], axis=1)
    assert np.abs(actions - before).max() <= 10.0 * 0.1 + 1e-5


def test_windows_are_those_of_the_recorded_episode(rigs: Any, recorded: Any) -> None:
    rig = rigs("integrator").model_copy(
        update={"history": rigs("integrator").history.model_copy(update={"observations": 2, "actions": 2})}
    )
    policy = noisy_policy(rig, recorded)
    done = roll(rig, policy, InProcess())
    seen = done.windows[0, :, :2] * policy.observation_scale + policy.observation_mean
    actions = done.applied[0] * policy.action_half + policy.action_middle
    again = episode_windows(policy, seen, actions, np.zeros(1, dtype=np.float32))
    np.testing.assert_allclose(again, done.windows[0], atol=2e-4)


def test_terminal_ends_an_episode_and_the_time_limit_does_not_count_as_one(rigs: Any, recorded: Any) -> None:
    rig = rigs("integrator", fall=1.5)
    done = roll(rig, noisy_policy(rig, recorded, 20.0), InProcess(), noisy=False)
    assert done.terminated.any()
    assert (done.lengths[done.terminated] <= 50).all()
    assert (done.lengths[~done.terminated] == done.asked.shape[1]).all()
    for row in np.flatnonzero(done.terminated):
        last = done.windows[row, done.lengths[row]]
        assert (done.windows[row, done.lengths[row] :] == last).all()


def test_who_does_the_work_changes_nothing(rigs: Any, recorded: Any) -> None:
    rig = rigs("integrator")
    policy = noisy_policy(rig, recorded)
    here = roll(rig, policy, InProcess(), 3)
    with ThreadPoolExecutor(2) as pool:
        there = roll(rig, policy, pool, 3)
    for name in ("windows", "asked", "applied", "lengths", "terminated", "shares"):
        np.testing.assert_array_equal(getattr(here, name), getattr(there, name))
    assert here.steps == 6 * 50


def test_work_can_be_sent_to_another_process(rigs: Any, recorded: Any) -> None:
    rig = rigs("integrator")
    work = (drive, RigSimulator(rig), rig, noisy_policy(rig, recorded), Wanted(np.zeros((1, 2)), np.ones(1)))
    assert len(ForkingPickler.dumps(work)) > 0


def test_in_process_executor_hands_errors_to_the_future() -> None:
    def fail() -> None:
        raise KeyError("lost")

    future: Future[Any] = InProcess().submit(fail)
    assert future.done()
    with pytest.raises(KeyError, match="lost"):
        future.result()


def test_simulator_that_blows_up_is_named(rigs: Any, recorded: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    rig = rigs("integrator")
    make = RigSimulator(rig)
    simulator = make()
    plain = simulator.step

    def broken(actions: Any) -> Any:
        step = plain(actions)
        step.observations[0, 0] = np.nan
        return step

    monkeypatch.setattr(simulator, "step", broken)
    with pytest.raises(LearningError, match="simulator of rig integrator") as error:
        roll_out(InProcess(), lambda: simulator, rig, noisy_policy(rig, recorded), 2, 5, (1,), noisy=False)
    assert error.value.code == "learn.simulator"
