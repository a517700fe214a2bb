"""One contest: a rig, some demonstrations, a seed; each method's score from fresh start states."""

from __future__ import annotations

import tempfile
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import torch
from pydantic import Field

from nearhand.service.episodes.episode import Episode
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.comparison.driving import (
    SCORE_SEED,
    Scale,
    expert_of,
    linear_gain,
    record,
    scale_of,
    simulator_of,
)
from nearhand.service.learn.comparison.rivals import RIVALS
from nearhand.service.learn.distil import Lesson, read_lesson, run_distil, scene_of
from nearhand.service.learn.layers import Layers
from nearhand.service.learn.online import OnlineProximalPoint
from nearhand.service.learn.progress import restore_progress
from nearhand.service.learn.rollouts import InProcess, served
from nearhand.service.policy.format import read_policy
from nearhand.service.policy.network import Policy
from nearhand.service.rigs import Frozen, Rig

#: A method has arrived when its score reaches this; its simulator steps until then are reported.
ARRIVED = 0.95
#: Rivals' iterates are scored this often; the scoring counts in no budget.
LOOK_EVERY = 8


class Contest(Frozen):
    """What one worker is asked: the rig, demonstrations, seed, methods, a recipe and changed dynamics to score under.

    Methods are ``clone``, ``proximal-online``, ``proximal-offline`` and the names of ``RIVALS``.
    """

    rig: Rig
    demonstrations: int
    seed: int
    methods: tuple[str, ...] = ("clone", "proximal-online")
    recipe: dict[str, Any] = Field(default_factory=dict)
    shifts: dict[str, dict[str, Any]] = Field(default_factory=dict)
    gains: bool = False


@dataclass
class Scores:
    """Results by ``method`` or ``method@shift``; ``steps`` simulated by method; ``curves`` of (steps, score)."""

    scores: dict[str, float] = field(default_factory=dict)
    cost_ratios: dict[str, float] = field(default_factory=dict)
    gain_errors: dict[str, float] = field(default_factory=dict)
    steps: dict[str, int] = field(default_factory=dict)
    wall_s: dict[str, float] = field(default_factory=dict)
    curves: dict[str, list[tuple[int, float]]] = field(default_factory=dict)
    chosen: dict[str, str] = field(default_factory=dict)
    policies: dict[str, Policy] = field(default_factory=dict)

    def arrivals(self) -> dict[str, int]:
        """Return the first look's steps at which a method's score had arrived; methods that never did are left out."""
        return {
            name: next(steps for steps, score in looks if score >= ARRIVED)
            for name, looks in self.curves.items()
            if any(score >= ARRIVED for _, score in looks)
        }


def hold(contest: Contest) -> Scores:
    """Record demonstrations, train each method, score it.

    Raises:
        ConfigError: rig, expert or recipe cannot be used.
        LearningError: a method failed.
    """
    torch.set_num_threads(1)
    scales = {"": scale_of(contest.rig), **{name: scale_of(contest.rig, one) for name, one in contest.shifts.items()}}
    shown = record(contest.rig, contest.demonstrations, 1000 + contest.seed)
    found = Scores()
    with tempfile.TemporaryDirectory(prefix="nearhand-") as name:
        for method in ("proximal-online", "proximal-offline"):
            if method in contest.methods:
                _distil(contest, method, shown, Path(name) / method, scales, found)
        if "clone" not in found.scores and contest.methods:
            _distil(contest, "clone", shown, Path(name) / "clone", scales, found)
        rivals = [method for method in contest.methods if method in RIVALS]
        if rivals:
            folder = _folder(contest, "clone", shown, Path(name) / "rivals")
            with Reporter(1, "") as reporter:
                run_distil(folder, reporter, lambda: False)
            lesson = read_lesson(folder)
            clone = _clone_of(lesson, read_policy(folder.read_bytes("output-clone.policy")).policy)
            for method in rivals:
                _rival(lesson, method, clone, scales, found)
        if contest.gains:
            _gains(contest, found)
    return found


def _folder(contest: Contest, method: str, shown: Sequence[Episode], path: Path) -> JobFolder:
    folder = JobFolder(path)
    folder.write_episodes(list(shown))
    options = {"recipe": {**contest.recipe, "method": method, "seed": contest.seed}}
    content = {"job": 1, "kind": "distil", "rig": contest.rig.model_dump(mode="json"), "options": options}
    folder.write_json("job.json", content)
    return folder


def _distil(
    contest: Contest, method: str, shown: Sequence[Episode], path: Path, scales: Mapping[str, Scale], found: Scores
) -> None:
    began_s = time.monotonic()
    folder = _folder(contest, method, shown, path)
    with Reporter(1, "") as reporter:
        out = run_distil(folder, reporter, lambda: False)
    found.wall_s[method] = round(time.monotonic() - began_s, 2)
    found.steps[method] = int(out["result"]["simulator_steps"])
    found.chosen[method] = f"{out['result']['chosen']['name']}: {out['result']['chosen']['reason']}"
    for item in out["versions"]:
        name = "clone" if item["name"] == "clone" else method
        _enter(found, name, read_policy(folder.read_bytes(f"output-{item['name']}.policy")).policy, scales)
    if method == "proximal-online":
        lesson = read_lesson(folder)
        clone = _clone_of(lesson, read_policy(folder.read_bytes("output-clone.policy")).policy)
        run = OnlineProximalPoint(scene_of(lesson, InProcess()), clone, lesson.recipe.online)
        restore_progress(folder, run, lesson.identity)
        _enter(found, f"{method}, unselected", served(lesson.blank, run.finish()["average"]), scales)
        each = run.progress.steps / max(run.progress.iteration, 1)
        looks = [(0, found.scores["clone"])]
        for name, actor in run.finish().items():
            if name.startswith("iterate-"):
                steps = round(int(name.removeprefix("iterate-")) * each)
                looks.append((steps, scales[""].score(served(lesson.blank, actor))))
        found.curves[method] = looks


def _clone_of(lesson: Lesson, policy: Policy) -> Actor:
    layers = Layers((lesson.blank.input_size, *lesson.recipe.clone.hidden, lesson.blank.action_size))
    pairs = zip(policy.weights, policy.biases, strict=True)
    flat = np.concatenate([part.ravel() for pair in pairs for part in pair]).astype(np.float32)
    return Actor(layers, torch.from_numpy(flat), policy.log_sd)


def _rival(lesson: Lesson, method: str, clone: Actor, scales: Mapping[str, Scale], found: Scores) -> None:
    began_s, looking_s = time.monotonic(), 0.0
    noise = lesson.recipe.clone.past_action_noise
    run = RIVALS[method](scene_of(lesson, InProcess()), clone, lesson.recipe.online, past_action_noise=noise)
    looks = [(0, found.scores["clone"])]
    while run.progress.iteration < lesson.recipe.online.iterations:
        run.iterate()
        if run.progress.iteration % LOOK_EVERY == 0:
            look_s = time.monotonic()
            looks.append((run.progress.steps, scales[""].score(served(lesson.blank, run.actor))))
            looking_s += time.monotonic() - look_s
    found.wall_s[method] = round(time.monotonic() - began_s - looking_s, 2)
    found.steps[method] = run.progress.steps
    found.curves[method] = looks
    average = replace(run.actor, flat=run.progress.average)
    _enter(found, method, served(lesson.blank, average), scales)


def _enter(found: Scores, method: str, policy: Policy, scales: Mapping[str, Scale]) -> None:
    for shift, scale in scales.items():
        name = f"{method}@{shift}" if shift else method
        raw = scale.raw(policy)
        found.scores[name] = (raw - scale.chance) / (scale.expert - scale.chance)
        found.cost_ratios[name] = raw / scale.expert
    found.policies[method] = policy


def _gains(contest: Contest, found: Scores) -> None:
    """Compare the policies' gains with the expert's, over start states."""
    simulator = simulator_of(contest.rig)
    states = simulator.reset(500, seed=SCORE_SEED + 3)
    expert = expert_of(contest.rig, simulator)
    expert.reset(states, seed=0)
    true = linear_gain(states, expert.act(states))
    for method, policy in found.policies.items():
        rows = ((states - policy.observation_mean) / policy.observation_scale).astype(np.float32)
        gap = linear_gain(states, policy.action(rows).astype(np.float64)) - true
        found.gain_errors[method] = float(np.linalg.norm(gap) / np.linalg.norm(true))
