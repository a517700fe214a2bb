"""The learning benchmark: its plants and experts against other sources, its methods on one budget, its arithmetic."""

from __future__ import annotations

from typing import Any

import gymnasium
import numpy as np
import pytest
from scipy.linalg import solve_discrete_are
from scipy.optimize import minimize

from nearhand.client.bench_learning import Row, enter
from nearhand.configs import builtin_text
from nearhand.service.learn.comparison.contest import Contest, hold
from nearhand.service.learn.comparison.driving import expert_of, linear_gain, record, scale_of, simulator_of
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.sim.linear import LinearRig

QUICK: dict[str, Any] = {
    "clone": {"steps": 200, "hidden": [16]},
    "online": {
        "iterations": 2, "episodes": 4, "inner_steps": 5, "first_inner_steps": 10, "transitions": 300,
        "critic_hidden": [16], "improvement_steps": 3,
    },
    "selection": {"every": 1, "episodes": 4},
}  # fmt: skip


@pytest.fixture(scope="module")
def carts() -> Rig:
    """The two carts."""
    return rig_from_toml(builtin_text("rigs", "two-carts"))


def test_the_carts_expert_is_the_riccati_gain_and_no_other_gain_costs_less(carts: Rig) -> None:
    simulator = simulator_of(carts, {"shake": 0.0, "max_steps": 200})
    assert isinstance(simulator, LinearRig)
    # scipy.linalg.solve_discrete_are, put together by the textbook's u = -(R + B'PB)^-1 B'PA x.
    p = solve_discrete_are(simulator.a, simulator.b, simulator.q, simulator.r)
    gain = np.linalg.solve(simulator.r + simulator.b.T @ p @ simulator.b, simulator.b.T @ p @ simulator.a)
    states = simulator.reset(20, seed=3)
    found = linear_gain(states, expert_of(carts, simulator).act(states))
    np.testing.assert_allclose(found, gain, atol=1e-9)

    def cost(flat: np.ndarray[tuple[int], np.dtype[np.float64]]) -> float:
        rows = simulator.reset(20, seed=3)
        for _ in range(simulator.max_steps):
            rows = simulator.step(-rows @ flat.reshape(2, 4).T).observations
        return float(simulator.outcomes()["cost"].mean())

    # The quadratic value of the start states is the least cost; a general-purpose minimiser finds no lower one.
    least = float(np.einsum("bi,ij,bj->b", states, p, states).mean())
    assert cost(gain.ravel()) == pytest.approx(least, rel=1e-6)
    sought = minimize(cost, gain.ravel() + 0.05, method="Nelder-Mead", options={"maxfev": 60})
    assert sought.fun >= least * (1 - 1e-6)


def test_the_swing_up_expert_brings_gymnasiums_pendulum_upright() -> None:
    rig = rig_from_toml(builtin_text("rigs", "pendulum"))
    episodes = record(rig, 20, 5)
    ends = np.stack([item.observations[-20:] for item in episodes])
    assert (ends[:, :, 0] > np.cos(0.2)).all()
    # The environment itself, driven by the recorded torques, arrives where the recording says.
    bare = gymnasium.make("Pendulum-v1").unwrapped
    bare.reset(seed=0)
    first = episodes[0].observations[0]
    bare.state = np.array([np.arctan2(first[1], first[0]), first[2]])  # type: ignore[attr-defined]
    for torque in episodes[0].actions[:30]:
        seen = bare.step(torque)[0]
    np.testing.assert_allclose(seen, episodes[0].observations[30], atol=1e-2)
    bare.close()


def test_the_scale_puts_chance_at_zero_and_the_expert_at_one(carts: Rig) -> None:
    scale = scale_of(carts, {}, 50)
    farther = scale_of(carts, {"start_m": 2.0, "shake": 0.0}, 50)
    assert scale.expert > scale.chance
    # Cost is quadratic in the start state.
    nearer = scale_of(carts, {"start_m": 1.0, "shake": 0.0}, 50)
    assert farther.expert == pytest.approx(4 * nearer.expert, rel=1e-3)


def test_every_method_trains_from_one_clone_on_one_budget_and_repeats(carts: Rig) -> None:
    methods = ("clone", "proximal-online", "feature-matching", "adversarial", "inverse-soft-q")
    contest = Contest(rig=carts, demonstrations=2, seed=3, methods=methods, recipe=QUICK, gains=True)
    found, again = hold(contest), hold(contest)
    assert found.scores == again.scores
    assert set(methods) <= found.scores.keys() and set(methods) <= found.gain_errors.keys()
    assert all(np.isfinite(value) for value in found.scores.values())
    rivals = [found.steps[name] for name in methods[2:]]
    assert rivals == [2 * 4 * 100] * 3
    # The rivals differ from the clone and from each other: each has learned something of its own.
    assert len({found.cost_ratios[name] for name in ("clone", *methods[2:])}) == 4


def test_means_worst_seeds_and_goals() -> None:
    def result(ours: float, clone: float, arrived: int) -> dict[str, Any]:
        return {
            "scores": {"clone": clone, "proximal-online": ours}, "cost_ratios": {}, "gain_errors": {}, "steps": {},
            "wall_s": {}, "arrivals": {"proximal-online": arrived, "adversarial": 400},
        }  # fmt: skip

    figures: dict[str, float] = {}
    ratios: dict[str, float] = {}
    targets: dict[str, dict[str, Any]] = {}
    enter(Row("crane", 3, 0.9, 0.8), [result(0.99, 0.9, 100), result(0.85, 0.9, 300)], figures, ratios, targets)
    assert figures["crane/3 proximal-online scores mean"] == pytest.approx(0.92)
    assert figures["crane/3 proximal-online scores worst"] == pytest.approx(0.85)
    assert ratios["crane/3 steps to .95, ours to the best other"] == pytest.approx(0.5)
    assert targets["crane/3 mean"]["met"] and targets["crane/3 worst seed"]["met"]
    assert not targets["crane/3 never below the clone"]["met"]
