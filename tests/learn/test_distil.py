"""The whole distillation job: files, resuming, stopping, not doing harm, and never looking at the task score."""

from __future__ import annotations

import ast
import json
import subprocess
import sys
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import torch

import nearhand.service.learn as learn_package
from nearhand.service.envelope.novelty import NoveltyScore
from nearhand.service.errors import ConfigError, LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.learn.distil import CLOSED_LOOP_RUNS, run_distil
from nearhand.service.policy.format import read_policy

SMALL: dict[str, Any] = {
    "seed": 3,
    "clone": {"steps": 300, "hidden": [16, 16]},
    "online": {"iterations": 4, "episodes": 6, "transitions": 400, "inner_steps": 8, "first_inner_steps": 8,
               "improvement_steps": 6, "critic_hidden": [16]},
    "offline": {"steps": 60, "transitions": 200},
    "selection": {"every": 2, "episodes": 6},
}  # fmt: skip
SHORT = {"max_steps": 40}


class Told(Reporter):
    """A reporter that keeps what it was told."""

    def __init__(self) -> None:
        super().__init__(1, "")
        self.heard: list[tuple[str, float, dict[str, float], str]] = []

    def report(self, stage: str, fraction: float, figures: Any = None, message: str = "") -> None:
        """Keep it."""
        self.heard.append((stage, fraction, dict(figures or {}), message))
        super().report(stage, fraction, figures, message)


def never() -> bool:
    """Never stop."""
    return False


def comparable(result: dict[str, Any]) -> dict[str, Any]:
    """Return a job's result without what depends on the clock."""
    text = json.loads(json.dumps(result))
    text["result"]["curves"].pop("steps_per_s", None)
    for version in text["versions"]:
        version["provenance"].pop("wall_s")
    return dict(text)


def test_job_writes_two_readable_policies_with_gate_provenance_and_curves(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any
) -> None:
    episodes = recorded("integrator", 7, 10, **SHORT) + recorded("integrator", 4, 90, "calibration", **SHORT)
    folder = job(rigs("integrator", **SHORT), episodes, SMALL, episodes=6)
    told = Told()
    result = run_distil(folder, told, never)
    assert [(one["name"], one["method"]) for one in result["versions"]] == [
        ("clone", "clone"),
        ("proximal", "proximal-online"),
    ]
    for one in result["versions"]:
        file = read_policy(folder.read_bytes(f"output-{one['name']}.policy"))
        assert (file.rig, file.observations, file.actions) == ("integrator", ("position", "velocity"), ("drive",))
        assert NoveltyScore(file.novelty).smallest_epsilon == pytest.approx(1 / (CLOSED_LOOP_RUNS + 1))
        assert "closed-loop runs of this version" in one["provenance"]["confidence_gate"]
        provenance = one["provenance"]
        assert provenance["training_episodes"] == [item.episode for item in episodes[:6]]
        assert len(provenance["training_sha256"]) == 64
        assert provenance["recipe"]["online"]["iterations"] == 4
        assert provenance["libraries"]["torch"] == torch.__version__
        # Four iterations of six episodes, then at least three candidates and the confirming round of two, of six each.
        assert provenance["simulator_steps"] >= (4 * 6 + 5 * 6) * 40
    curves = result["result"]["curves"]
    wanted = {
        "objective", "gradient_cost", "gradient_critic", "dual_gap", "excitation", "ess", "kl_step", "delta_sd",
        "eta", "alpha",
        "feature_distance", "floor", "improvement_kl", "action_sd", "steps_per_s",
    }  # fmt: skip
    assert wanted <= set(curves)
    assert all(len(curves[name]) == 4 for name in wanted)
    assert {"clone", "iterate-2", "iterate-4", "nearest", "average"} == set(result["result"]["chosen"]["distances"])
    assert list(dict.fromkeys(stage for stage, *_ in told.heard)) == ["cloning", "proximal", "selecting", "calibrating"]
    json.dumps(result, allow_nan=False)


def test_interrupted_job_resumes_to_bit_identical_policies(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any
) -> None:
    episodes = recorded("integrator", 6, 10, **SHORT) + recorded("integrator", 3, 90, "calibration", **SHORT)
    rig = rigs("integrator", **SHORT)
    whole, broken = (job(rig, episodes, SMALL, name) for name in ("whole", "broken"))
    wanted = run_distil(whole, Told(), never)
    runs = 0
    while True:
        told = Told()
        first = runs == 0

        def stop(heard: Told = told, first: bool = first) -> bool:
            # Stop after the cloning, then again after each iteration.
            return any(stage == "proximal" and done > 0 for stage, done, *_ in heard.heard) or (
                not broken.has("checkpoint.proximal.safetensors")
                and broken.has("checkpoint.clone.safetensors")
                and first
            )

        try:
            found = run_distil(broken, told, stop if runs < 4 else never)
            break
        except LearningError as error:
            assert error.code == "learn.stopped"
            assert not broken.has("output-clone.policy")
            runs += 1
    assert runs == 4
    for name in ("clone", "proximal"):
        assert broken.read_bytes(f"output-{name}.policy") == whole.read_bytes(f"output-{name}.policy")
    assert comparable(found) == comparable(wanted)


def test_killed_process_resumes_to_the_same_policy(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any, plants: Path
) -> None:
    episodes = recorded("integrator", 3, 10, **SHORT)
    recipe = {**SMALL, "online": {**SMALL["online"], "iterations": 20, "first_inner_steps": 8}}
    rig = rigs("integrator", **SHORT)
    whole, broken = (job(rig, episodes, recipe, name) for name in ("whole", "broken"))
    run_distil(whole, Told(), never)
    code = (
        f"import sys; sys.path[:0] = {[str(plants), str(Path(__file__).parent / 'plants')]!r}\n"
        "from pathlib import Path\nfrom nearhand.service.jobs.worker import main\n"
        f"raise SystemExit(main([{str(broken.path)!r}]))"
    )
    process = subprocess.Popen([sys.executable, "-c", code], stderr=subprocess.DEVNULL)
    try:
        while process.poll() is None and not broken.has("checkpoint.proximal.safetensors"):
            with suppress(subprocess.TimeoutExpired):
                process.wait(0.01)
        assert process.poll() is None, "the job ended before it could be killed"
    finally:
        process.kill()
        process.wait()
    assert not broken.has("result.json")
    run_distil(broken, Told(), never)
    assert broken.read_bytes("output-proximal.policy") == whole.read_bytes("output-proximal.policy")


def test_checkpoint_of_another_recipe_is_not_taken_up(job: Callable[..., JobFolder], rigs: Any, recorded: Any) -> None:
    episodes = recorded("integrator", 3, 10, **SHORT)
    rig = rigs("integrator", **SHORT)
    used = job(rig, episodes, SMALL)
    run_distil(used, Told(), never)
    other = {**SMALL, "seed": 4}
    run_distil(job(rig, episodes, other), Told(), never)
    fresh = job(rig, episodes, other, "fresh")
    run_distil(fresh, Told(), never)
    assert used.read_bytes("output-proximal.policy") == fresh.read_bytes("output-proximal.policy")


def test_rig_without_simulator_is_taught_offline_and_says_so(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any
) -> None:
    folder = job(rigs("integrator", simulator=False), recorded("integrator", 6, 10, **SHORT), SMALL)
    told = Told()
    result = run_distil(folder, told, never)
    assert result["versions"][1]["method"] == "proximal-offline"
    assert any("no simulator" in message for *_, message in told.heard)
    assert any("no simulator" in message for message in result["result"]["messages"])
    nll = result["result"]["chosen"]["held_out_nll"]
    assert result["result"]["chosen"]["name"] == min(nll, key=lambda name: nll[name])


def test_offline_from_few_episodes_is_judged_on_an_episode_it_did_not_see(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any
) -> None:
    recipe = {**SMALL, "method": "proximal-offline"}
    folder = job(rigs("integrator"), recorded("integrator", 3, 10, **SHORT), recipe)
    chosen = run_distil(folder, Told(), never)["result"]["chosen"]
    assert "1 episodes kept out" in chosen["reason"]
    single = job(rigs("integrator"), recorded("integrator", 1, 10, **SHORT), recipe, "single")
    assert run_distil(single, Told(), never)["result"]["chosen"]["name"] == "clone"


def test_clone_recipe_drafts_the_clone_alone_and_few_steps_leave_it_untaught(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any, scored: Any
) -> None:
    rig = rigs("integrator", **SHORT)
    episodes = recorded("integrator", 6, 10, **SHORT)
    scores = {}
    for steps in (3, 1500):
        folder = job(rig, episodes, {"method": "clone", "clone": {"steps": steps}}, f"steps-{steps}")
        result = run_distil(folder, Told(), never)
        assert [one["name"] for one in result["versions"]] == ["clone"]
        scores[steps] = scored(rig, read_policy(folder.read_bytes("output-clone.policy")).policy, 20, 77)
    assert scores[1500] > scores[3] + 10  # negative costs


def test_no_demonstrations_wrong_recipe_and_wrong_episode_are_refused_in_words(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any
) -> None:
    rig = rigs("integrator", **SHORT)
    with pytest.raises(LearningError, match="no training episodes") as none:
        run_distil(job(rig, recorded("integrator", 2, 1, "calibration", **SHORT), SMALL, "none"), Told(), never)
    assert none.value.code == "learn.no_demonstrations"
    with pytest.raises(ConfigError, match=r"online\.iterations"):
        run_distil(job(rig, recorded("integrator", 2, 1, **SHORT), {"online": {"iterations": 0}}, "bad"), Told(), never)
    spoilt = recorded("integrator", 2, 1, **SHORT)
    spoilt[1].observations[3, 0] = np.nan
    with pytest.raises(LearningError, match=r"train-1-1 holds values that are not finite"):
        run_distil(job(rig, spoilt, SMALL, "nan"), Told(), never)
    with pytest.raises(LearningError, match="do not fit rig"):
        run_distil(job(rigs("pendulum"), recorded("integrator", 2, 1, **SHORT), SMALL, "rig"), Told(), never)


def test_swing_up_from_three_demonstrations_gets_no_farther_from_the_expert(
    job: Callable[..., JobFolder], rigs: Any, recorded: Any, scored: Any
) -> None:
    rig = rigs("pendulum")
    recipe = {
        "seed": 2,
        "clone": {"steps": 1500},
        "online": {"iterations": 14, "episodes": 16, "transitions": 2000, "inner_steps": 25},
        "selection": {"every": 7, "episodes": 24},
    }
    folder = job(rig, recorded("pendulum", 3, 1002), recipe)
    result = run_distil(folder, Told(), never)
    chosen = result["result"]["chosen"]
    assert chosen["distances"][chosen["name"]] <= chosen["distances"]["clone"]
    scores = {
        name: scored(rig, read_policy(folder.read_bytes(f"output-{name}.policy")).policy, 24, 4242)
        for name in ("clone", "proximal")
    }
    # Fresh starts; a random policy scores about -190 and the expert 96. The choice itself never saw these scores.
    assert scores["proximal"] >= scores["clone"] - 20
    assert scores["proximal"] > -40


def test_trainer_never_reads_the_task_score_or_the_outcome() -> None:
    for path in Path(learn_package.__path__[0]).glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            name = node.attr if isinstance(node, ast.Attribute) else ""
            assert name not in {"score", "outcomes", "outcome"}, f"{path.name}: .{name}"


def test_trainer_reads_no_pickle() -> None:
    for path in Path(learn_package.__path__[0]).glob("*.py"):
        text = path.read_text(encoding="utf-8")
        assert "torch.load" not in text
        assert "torch.save" not in text
        assert "pickle" not in text
