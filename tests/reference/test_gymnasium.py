"""Rigs from Gymnasium: registry facts, steps by formula, and an expert on physics that nobody here wrote.

Facts read from the registry of Gymnasium 1.x and its built environments.
"""

from __future__ import annotations

import math
import warnings
from typing import Any

import gymnasium
import numpy as np
import pytest

from nearhand.configs import builtin_text
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import rig_from_toml
from nearhand.service.simulators import make_expert, make_simulator
from nearhand.sim.gymnasium_expert import LqrExpert
from nearhand.sim.gymnasium_rig import GymnasiumRig, checked, make_environment


@pytest.mark.parametrize(
    ("env", "observations", "actions", "period_s", "steps"),
    [
        ("InvertedPendulum-v5", 4, 1, 0.04, 1000),
        ("InvertedDoublePendulum-v5", 9, 1, 0.05, 1000),
        ("Reacher-v5", 10, 2, 0.02, 50),
        ("Swimmer-v5", 8, 2, 0.04, 1000),
        ("Pendulum-v1", 3, 1, 0.05, 200),
    ],
)
def test_sizes_period_and_time_limit(env: str, observations: int, actions: int, period_s: float, steps: int) -> None:
    rig = make_simulator("gymnasium", {"env": env})
    assert (rig.observation_size, rig.action_size, rig.max_steps) == (observations, actions, steps)
    assert rig.period_s == pytest.approx(period_s, abs=1e-12)


@pytest.mark.parametrize(
    ("angle", "rate", "torque", "next_angle", "next_rate", "reward"),
    [
        (0.5, 0.0, 1.0, 0.525478457698, 0.509569153953, -0.251),
        (-2.0, 7.9, -3.0, -1.65409865351, 6.91802692988, -10.245),
    ],
)
def test_one_step_of_the_pendulum_by_its_formula(
    angle: float, rate: float, torque: float, next_angle: float, next_rate: float, reward: float
) -> None:
    """θ'' = 3g/(2l)·sin θ + 3u/(ml²), semi-implicit Euler, g = 10, m = l = 1, dt = 0.05; reward from the old state."""
    rig = make_simulator("gymnasium", {"env": "Pendulum-v1"})
    assert isinstance(rig, GymnasiumRig)
    rig.reset(1, seed=0)
    rig.environments[0].unwrapped.state = np.array([angle, rate])  # type: ignore[attr-defined]
    step = rig.step(np.array([[torque]]))
    assert step.observations[0] == pytest.approx([math.cos(next_angle), math.sin(next_angle), next_rate], abs=1e-6)
    assert step.score[0] == pytest.approx(reward, abs=1e-6)


def test_the_regulator_balances_the_double_pendulum_and_chance_does_not() -> None:
    """A thousand control periods from the environment's own starts; the registry's threshold is a return of 9100."""
    rig = rig_from_toml(builtin_text("rigs", "double-pendulum"))
    assert rig.simulator is not None
    simulator = make_simulator(rig.simulator.name, {**rig.simulator.options, "max_steps": 1000})
    assert (simulator.observation_size, simulator.action_size) == (len(rig.observations), len(rig.actions))
    expert = make_expert("gymnasium-lqr", simulator, {})
    observations = simulator.reset(5, seed=4)
    expert.reset(observations, seed=4)
    for _ in range(simulator.max_steps):
        step = simulator.step(expert.act(observations))
        observations = step.observations
    assert step.truncated.all()
    assert not step.terminated.any()
    outcomes = simulator.outcomes()
    assert outcomes["success"].all()
    assert (outcomes["return"] > 9100).all()
    generator = np.random.default_rng(1)
    simulator.reset(3, seed=4)
    for _ in range(100):
        step = simulator.step(generator.uniform(-1, 1, (3, 1)))
    assert step.terminated.all()
    assert not simulator.outcomes()["success"].any()


def test_the_regulator_acts_on_the_observation_it_is_given() -> None:
    """Not on where the simulator happens to be; near upright it is −K·(q, q') with sines for angles."""
    simulator = make_simulator("gymnasium", {"env": "InvertedDoublePendulum-v5"})
    expert = make_expert("gymnasium-lqr", simulator, {"noise": 0.0})
    assert isinstance(expert, LqrExpert)
    expert.reset(simulator.reset(1, seed=1), seed=1)
    state = np.array([0.02, 0.01, -0.015, 0.05, -0.04, 0.03])
    sines, cosines = np.sin(state[1:3]), np.cos(state[1:3])
    shown = np.concatenate((state[:1], sines, cosines, state[3:], [0.0]))[None]
    # Sine and angle differ by 6e-7 here, central differences by less.
    assert expert.act(shown)[0] == pytest.approx(-expert.gain @ state, abs=1e-4)
    mirrored = np.concatenate((-state[:1], -sines, cosines, -state[3:], [0.0]))[None]
    assert expert.act(mirrored)[0] == pytest.approx(expert.gain @ state, abs=1e-4)


def test_an_expert_that_cannot_be_is_refused() -> None:
    for env, part in (("Pendulum-v1", "no MuJoCo model"), ("Reacher-v5", "no regulator")):
        with pytest.raises(ConfigError, match=part):
            make_expert("gymnasium-lqr", make_simulator("gymnasium", {"env": env}), {})


def test_only_the_note_on_an_older_version_is_silenced() -> None:
    """The rig's TOML names the version; any other warning reaches the operator (and fails this test run)."""
    make_environment(checked({"env": "InvertedPendulum-v4"}))

    def maker(**kwargs: Any) -> gymnasium.Env[Any, Any]:
        warnings.warn("the bearings are worn", UserWarning, stacklevel=2)
        return gymnasium.make("Pendulum-v1").unwrapped

    gymnasium.register("WornPendulum-v0", entry_point=maker)
    try:
        with pytest.warns(UserWarning, match="bearings are worn"):
            make_environment(checked({"env": "WornPendulum-v0"}))
    finally:
        del gymnasium.registry["WornPendulum-v0"]


@pytest.mark.parametrize(("least", "expected"), [(-1e9, 1.0), (1e9, 0.0)])
def test_success_by_return(least: float, expected: float) -> None:
    simulator = make_simulator("gymnasium", {"env": "Pendulum-v1", "max_steps": 3, "success_return": least})
    simulator.reset(2, seed=1)
    for _ in range(3):
        step = simulator.step(np.zeros((2, 1)))
    assert step.truncated.all()
    assert simulator.outcomes()["success"] == pytest.approx([expected] * 2)


def test_an_ended_episode_stays_as_it_was() -> None:
    simulator = make_simulator("gymnasium", {"env": "InvertedPendulum-v5"})
    simulator.reset(2, seed=1)
    for _ in range(200):
        step = simulator.step(np.array([[3.0], [3.0]]))
    assert step.terminated.all()
    after = simulator.step(np.zeros((2, 1)))
    assert (after.observations == step.observations).all()
    assert not after.score.any()
    assert after.terminated.all()


def test_the_same_seed_gives_the_same_starts() -> None:
    simulator = make_simulator("gymnasium", {"env": "InvertedDoublePendulum-v5"})
    first = simulator.reset(4, seed=9)
    assert (simulator.reset(4, seed=9) == first).all()
    assert not (simulator.reset(4, seed=10) == first).all()


@pytest.mark.parametrize(
    ("options", "part"),
    [
        ({"env": "NoSuchThing-v0"}, "NoSuchThing"),
        ({"env": "CartPole-v1", "period_s": 0.02}, "Box"),
        ({}, "env"),
        ({"env": "Pendulum-v1", "surplus": 1}, "surplus"),
    ],
)
def test_what_cannot_be_a_rig_is_said(options: dict[str, object], part: str) -> None:
    with pytest.raises(ConfigError, match=part):
        make_simulator("gymnasium", options)
