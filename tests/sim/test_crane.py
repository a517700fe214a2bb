"""The crane as a rig: batches, seeds, rules of the yard, experts, speed."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Literal

import numpy as np
import pytest

from nearhand.configs import builtin_text
from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.chain import limit
from nearhand.service.envelope.limits import Limits
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import rig_from_toml
from nearhand.service.simulators import make_expert, make_simulator
from nearhand.sim.crane import Crane
from nearhand.sim.crane_dynamics import Array
from nearhand.sim.crane_options import YARD_M, CraneOptions

STILL = {"wind_sd": 0.0, "velocity_noise": 0.0, "swing_noise_rad": 0.0, "swing_rate_noise": 0.0, "position_step_m": 0.0}


def drive(crane: Crane, expert: str, count: int, seed: int, **options: float) -> dict[str, np.ndarray]:
    """Return the outcomes of an expert's episodes."""
    driver = make_expert(expert, crane, options)
    observations = crane.reset(count, seed=seed)
    driver.reset(observations, seed=seed)
    for _ in range(crane.max_steps):
        observations = crane.step(driver.act(observations)).observations
    return crane.outcomes()


def test_the_description_and_the_simulator_fit_each_other() -> None:
    rig = rig_from_toml(builtin_text("rigs", "crane"))
    assert rig.simulator is not None
    crane = make_simulator(rig.simulator.name, rig.simulator.options)
    assert (crane.observation_size, crane.action_size) == (len(rig.observations), len(rig.actions))
    assert crane.period_s == rig.timing.period_s
    assert (rig.actions[0].low, rig.actions[0].high) == (-CraneOptions().strongest, CraneOptions().strongest)


def test_the_same_seed_gives_the_same_episode_and_another_one_another() -> None:
    runs = []
    for seed in (1, 1, 2):
        crane = Crane(CraneOptions())
        crane.reset(4, seed=seed)
        for _ in range(20):
            step = crane.step(np.full((4, 1), 0.3))
        runs.append(step.observations)
    assert (runs[0] == runs[1]).all()
    assert not (runs[0] == runs[2]).any(axis=0).all()


@pytest.mark.parametrize("drive_kind", ["acceleration", "force"])
def test_the_designed_controller_lands_nearly_every_slab(drive_kind: Literal["acceleration", "force"]) -> None:
    found = drive(Crane(CraneOptions(drive=drive_kind)), "crane-designed", 64, 3)
    assert found["success"].mean() >= 0.95
    assert not found["gate_touched"].any()
    assert found["speed_excess_mps"].max() < 0.1


def test_the_designed_controller_needs_neither_clock_nor_memory() -> None:
    """What it does depends on what it sees, so that it can be imitated from what it sees."""
    crane = Crane(CraneOptions())
    driver, other = (make_expert("crane-designed", crane, {}) for _ in range(2))
    seen = [crane.reset(8, seed=4)]
    driver.reset(seen[0], seed=4)
    done = []
    for _ in range(400):
        done.append(driver.act(seen[-1]))
        seen.append(crane.step(done[-1]).observations)
    # Another one, begun in the middle of the way and asked in the opposite order.
    other.reset(seen[250], seed=9)
    for step in reversed(range(0, 400, 7)):
        # The target is the sum of two readings, each rounded: their noise is a rounding of 1e-15 m.
        assert other.act(seen[step]) == pytest.approx(done[step], abs=1e-9)


def test_an_operator_with_skill_mostly_succeeds_and_with_little_breaks_rules() -> None:
    skilled = drive(Crane(CraneOptions()), "crane-operator", 64, 3)
    clumsy = drive(Crane(CraneOptions()), "crane-clumsy", 64, 3)
    assert skilled["success"].mean() >= 0.6
    assert clumsy["success"].mean() < 0.1
    assert skilled["residual_swing_rad"].mean() < clumsy["residual_swing_rad"].mean()
    assert skilled["landing_error_m"].mean() < clumsy["landing_error_m"].mean()
    assert not skilled["gate_touched"].any()
    assert clumsy["gate_touched"].mean() > 0.2
    assert skilled["speed_excess_mps"].max() < 0.1 < clumsy["speed_excess_mps"].mean()


def total_score(crane: Crane, act: Callable[[Array], Array], seed: int) -> float:
    """Return the mean score of 32 episodes."""
    observations, total = crane.reset(32, seed=seed), 0.0
    for _ in range(crane.max_steps):
        step = crane.step(act(observations))
        observations, total = step.observations, total + float(step.score.mean())
    return total


def test_chance_and_a_straight_line_through_three_demonstrations_drive_worse_than_the_designed_controller() -> None:
    """The line is fitted by NumPy's least squares: the task is not one that any imitation solves."""
    crane = Crane(CraneOptions())
    expert = make_expert("crane-designed", crane, {})
    observations = crane.reset(3, seed=50)
    expert.reset(observations, seed=50)
    seen, done = [], []
    for _ in range(crane.max_steps):
        seen.append(observations)
        done.append(expert.act(observations))
        observations = crane.step(done[-1]).observations
    inputs = np.concatenate(seen)
    line, *_ = np.linalg.lstsq(np.column_stack((inputs, np.ones(len(inputs)))), np.concatenate(done), rcond=None)
    generator = np.random.default_rng(1)
    first = crane.reset(32, seed=60)
    expert.reset(first, seed=60)
    designed = total_score(crane, expert.act, 60)
    straight = total_score(crane, lambda now: np.column_stack((now, np.ones(len(now)))) @ line, 60)
    chance = total_score(crane, lambda now: generator.uniform(-0.6, 0.6, (len(now), 1)), 60)
    assert chance < 0.1 * designed
    assert straight < 0.8 * designed


def full_speed(*, enveloped: bool, outward: bool) -> tuple[float, float, dict[str, np.ndarray]]:
    """Drive at full demand for 20 s; return the least and the greatest position, and the outcomes."""
    rig = rig_from_toml(builtin_text("rigs", "crane"))
    crane = Crane(CraneOptions(max_steps=1000, wind_sd=0.05))
    limits = Limits.of(rig)
    guards, held = Guards(limits), limits.rest.copy()
    guards.restart(held)
    observation = crane.reset(1, seed=1)[0]
    proposal = np.full(1, 0.6 if outward else -0.6, dtype=np.float32)
    places = []
    for _ in range(crane.max_steps):
        guards.note(held)
        held = limit(limits, proposal, held, observation.astype(np.float32), guards).action if enveloped else proposal
        observation = crane.step(held[None].astype(np.float64)).observations[0]
        places.append(float(observation[0]))
    return min(places), max(places), crane.outcomes()


@pytest.mark.parametrize("outward", [True, False])
def test_the_declared_braking_keeps_the_simulated_trolley_off_its_buffers(outward: bool) -> None:
    rig, options = rig_from_toml(builtin_text("rigs", "crane")), CraneOptions()
    low, high = rig.braking[0].low, rig.braking[0].high
    assert options.runway_low_m < low < 0
    assert YARD_M < high < options.runway_high_m
    least, greatest, outcomes = full_speed(enveloped=True, outward=outward)
    assert low <= least
    assert greatest <= high
    # It came near: the limits are there to be used.
    assert (greatest > high - 1.0) if outward else (least < low + 1.0)
    assert not outcomes["end_touched"].any()
    least, greatest, outcomes = full_speed(enveloped=False, outward=outward)
    assert (greatest == options.runway_high_m) if outward else (least == options.runway_low_m)
    assert outcomes["end_touched"].all()
    assert not outcomes["success"].any()


def test_a_slab_left_alone_swings_with_its_rope_s_period() -> None:
    """ω = √(g/L): after one period the swing is where it began (small angle, no friction, no wind)."""
    crane = Crane(CraneOptions(**STILL, swing_friction_per_s=0.0, rope_low_m=3.999, rope_high_m=4.001, max_steps=2000))
    first = crane.reset(1, seed=1)
    period_s = 2 * np.pi / np.sqrt(9.81 / first[0, 4])
    seen = [first[0, 2]]
    for _ in range(round(period_s / crane.period_s)):
        seen.append(float(crane.step(np.zeros((1, 1))).observations[0, 2]))
    # A period is no whole number of samples: half a sample of phase is 0.8 % of the amplitude's slope.
    assert seen[-1] == pytest.approx(seen[0], abs=0.02 * max(np.abs(seen)))


def test_a_steady_acceleration_tilts_the_rope_back() -> None:
    """The rope hangs along effective gravity: tan θ = −a/g about which it swings."""
    crane = Crane(CraneOptions(**STILL, lag_s=0.001, substeps=20, swing_friction_per_s=0.0))
    crane.reset(1, seed=1)
    angles = [float(crane.step(np.full((1, 1), 0.3)).observations[0, 2]) for _ in range(700)]
    middle = (max(angles) + min(angles)) / 2
    assert middle == pytest.approx(-np.arctan(0.3 / 9.81), abs=2e-3)


def test_a_force_moves_the_whole_crane() -> None:
    """F = (M + m)·a for the centre of mass: 0.6 of the unit of 1600 N for 0.2 s on 1600 kg of trolley and load."""
    options = CraneOptions(**STILL, drive="force", friction=0.0, lag_s=0.001, substeps=20, swing_friction_per_s=0.0)
    crane = Crane(options)
    crane.reset(1, seed=1)
    for _ in range(10):
        seen = crane.step(np.ones((1, 1)) * 0.6).observations[0]
    momentum = 1600 * seen[1] + 600 * seen[4] * seen[3] * np.cos(seen[2])
    # The drive's lag of 1 ms costs half a percent of the push.
    assert momentum == pytest.approx(0.6 * 1600 * 0.2, rel=0.02)


def test_a_batch_of_256_makes_200_000_periods_a_second_on_one_core() -> None:
    """The best of five runs of processor time, so that a busy machine does not decide."""
    crane = Crane(CraneOptions())
    crane.reset(256, seed=1)
    actions = np.zeros((256, 1))
    best = 0.0
    for _ in range(5):
        begin_s = time.process_time()
        for _ in range(100):
            crane.step(actions)
        best = max(best, 25_600 / (time.process_time() - begin_s))
    assert best > 200_000


def test_after_its_time_an_episode_stays_as_it_was() -> None:
    crane = Crane(CraneOptions(max_steps=3))
    crane.reset(2, seed=1)
    steps = [crane.step(np.ones((2, 1))) for _ in range(5)]
    assert [bool(step.truncated.all()) for step in steps] == [False, False, True, True, True]
    assert (steps[4].observations == steps[2].observations).all()
    assert not steps[4].score.any()


@pytest.mark.parametrize(
    ("options", "part"),
    [
        ({"rope": 3}, "rope"),
        ({"lag_s": -1}, "lag_s"),
        ({"drive": "x"}, "drive"),
        ({"rope_low_m": 7.0}, "rope_low_m = 7.0.*rope_high_m"),
        ({"lag_s": 0.001}, "at least 8 substeps"),
    ],
)
def test_a_wrong_option_is_named(options: dict[str, object], part: str) -> None:
    with pytest.raises(ConfigError, match=part):
        make_simulator("crane", options)
    with pytest.raises(ConfigError, match="crane"):
        make_expert("crane-designed", make_simulator("gymnasium", {"env": "Pendulum-v1"}), {})
