"""A whole measurement on the crane: the expert's imitation by a perfect copy, by chance, and stopped half-way."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from nearhand.configs import builtin_text
from nearhand.service.episodes.episode import Episode
from nearhand.service.errors import LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.measure.closed_loop import roll_expert, roll_policy, roll_served
from nearhand.service.measure.run import run_measure
from nearhand.service.policy.format import PolicyFile, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.service.simulators import make_expert, make_simulator


@pytest.fixture(scope="module")
def rig() -> Rig:
    """The crane, with short episodes."""
    crane = rig_from_toml(builtin_text("rigs", "crane"))
    assert crane.simulator is not None
    plant = crane.simulator.model_copy(update={"options": {**crane.simulator.options, "max_steps": 120}})
    return crane.model_copy(update={"simulator": plant})


@pytest.fixture(scope="module")
def demonstrations(rig: Rig) -> list[Episode]:
    """Eighteen of the designed controller's episodes, a third held out."""
    assert rig.simulator is not None
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    expert = make_expert("crane-designed", simulator, {})
    done = roll_expert(simulator, expert, rig, 18, 5, lambda _: None)
    return [
        Episode(
            f"e{index}", rig.name, "designed", 0.02 * np.arange(120.0), observations.astype("f4"), actions.astype("f4"),
            split="held-out" if index % 3 == 0 else "train",
        )
        for index, (observations, actions) in enumerate(done.episode(index) for index in range(18))
    ]  # fmt: skip


def linear_policy(rig: Rig, gains: list[float]) -> PolicyFile:
    """Return a policy u = gains · observation, in half ranges."""
    n = len(rig.observations)
    one = np.ones(1, dtype=np.float32)
    policy = Policy(
        weights=(np.array(gains, dtype=np.float32)[:, None],), biases=(0 * one,),
        observation_mean=np.zeros(n, dtype=np.float32), observation_scale=np.ones(n, dtype=np.float32),
        action_middle=0 * one, action_half=np.array([0.6], dtype=np.float32), log_sd=-one,
    )  # fmt: skip
    names = tuple(c.name for c in rig.observations), tuple(c.name for c in rig.actions)
    return PolicyFile(policy, rig.name, *names, method="clone", novelty={}, extra={})


def make_folder(path: Path, rig: Rig, episodes: list[Episode], file: PolicyFile, **more: PolicyFile) -> JobFolder:
    """Return a measuring job's folder."""
    folder = JobFolder(path)
    options = {"version": 1, "clone": 0, "in_service": 0, "closed_loop_episodes": 6, "seed": 3}
    folder.write_json(
        "job.json",
        {"job": 1, "kind": "measure", "rig": rig.model_dump(mode="json"), "options": options, "progress": ""},
    )
    folder.write_episodes(episodes)
    for name, one in {"version": file, **more}.items():
        folder.write_bytes(f"input-{name.replace('_', '-')}.policy", write_policy(one))
    return folder


SENSIBLE = [0.0, -1.0, 0.0, 1.0, 0.0, 0.25]
IDLE = [0.0] * 6


def test_a_whole_measurement(rig: Rig, demonstrations: list[Episode], tmp_path: Path) -> None:
    version, idle = linear_policy(rig, SENSIBLE), linear_policy(rig, IDLE)
    folder = make_folder(tmp_path, rig, demonstrations, version, clone=idle, in_service=idle)
    with Reporter(1, "") as reporter:
        result = run_measure(folder, reporter, lambda: False)["result"]
    json.dumps(result, allow_nan=False)
    figures = result["figures"]
    assert figures["action_error.rmse.trolley-acceleration"]["unit"] == "m/s²"
    for name in ("action_error.rmse_fraction", "feature_distance.l2", "mmd2", "closed_loop.score"):
        figure = figures[name]
        assert figure["low"] <= figure["value"] <= figure["high"], name
        assert figure["clone"]["value"] is not None, name
    assert figures["feature_distance.l2"]["floor"]["value"] < figures["feature_distance.l2"]["clone"]["value"]
    assert figures["closed_loop.score"]["value"] > figures["closed_loop.score"]["clone"]["value"]
    assert figures["closed_loop.score_minus_in_service"]["low"] > 0
    assert 0 < figures["truncation_mass"]["value"] < 1
    assert {"expert", "policy", "differ_most_at_s"} <= set(result["traces"])
    assert result["settings"]["held_out_episodes"] == 6


def test_served_without_limits_in_the_way_is_the_bare_policy(rig: Rig) -> None:
    """Gentle gains, so that nothing is limited: the governor must then change nothing at all."""
    assert rig.simulator is not None
    file = linear_policy(rig, [0.0, -0.05, 0.0, 0.0, 0.0, 0.004])
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    bare = roll_policy(simulator, file.policy, rig, 3, 8, lambda _: None)
    served = roll_served(simulator, file, rig, 3, 8, lambda _: None)
    assert [counts["interventions"] for counts in served.counts] == [0, 0, 0]
    assert served.actions == pytest.approx(bare.actions, abs=1e-6)
    assert served.score == pytest.approx(bare.score, abs=1e-4)


def test_without_a_simulator_only_held_out_figures_remain(
    rig: Rig, demonstrations: list[Episode], tmp_path: Path
) -> None:
    bare = rig.model_copy(update={"simulator": None})
    folder = make_folder(tmp_path, bare, demonstrations, linear_policy(rig, SENSIBLE))
    with Reporter(1, "") as reporter:
        result = run_measure(folder, reporter, lambda: False)["result"]
    assert "closed_loop.score" not in result["figures"]
    assert "action_error.nll" in result["figures"]
    assert any("simulator" in note for note in result["notes"])


def test_a_stopped_measurement_says_so(rig: Rig, demonstrations: list[Episode], tmp_path: Path) -> None:
    folder = make_folder(tmp_path, rig, demonstrations, linear_policy(rig, SENSIBLE))
    with Reporter(1, "") as reporter, pytest.raises(LearningError) as caught:
        run_measure(folder, reporter, lambda: True)
    assert caught.value.code == "learn.stopped"


def test_without_demonstrations_there_is_nothing_to_measure_against(rig: Rig, tmp_path: Path) -> None:
    folder = make_folder(tmp_path, rig, [], linear_policy(rig, SENSIBLE))
    with Reporter(1, "") as reporter, pytest.raises(LearningError, match="no demonstrations"):
        run_measure(folder, reporter, lambda: False)
