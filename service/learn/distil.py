"""The distillation job: clone, improve by proximal-point steps, choose, calibrate, write the policy files."""

from __future__ import annotations

import hashlib
import json
import time
from collections.abc import Callable, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from importlib.metadata import version
from typing import Any

import numpy as np
import torch

from nearhand.service.envelope.novelty import calibrate
from nearhand.service.episodes.episode import Episode
from nearhand.service.errors import LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.learn.checkpoints import read_checkpoint, write_checkpoint
from nearhand.service.learn.cloning import Actor, Clone, clone
from nearhand.service.learn.cost_job import run_from_cost
from nearhand.service.learn.demonstrations import (
    Demonstration,
    blank_policy,
    data_digest,
    read_demonstrations,
    rest_action,
)
from nearhand.service.learn.features import effective_discount, fit_features
from nearhand.service.learn.layers import Layers
from nearhand.service.learn.offline import fit_offline
from nearhand.service.learn.online import OnlineProximalPoint, Scene
from nearhand.service.learn.progress import restore_progress, save_progress
from nearhand.service.learn.recovered_cost import RecoveredCost
from nearhand.service.learn.rollouts import InProcess, OneSimulator, RigSimulator, roll_out, served
from nearhand.service.learn.selection import Selector
from nearhand.service.learn.starts import Wanted
from nearhand.service.policy.format import PolicyFile, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.recipes import Recipe, recipe_from_map
from nearhand.service.rigs import Rig

Stopped = Callable[[], bool]
#: Closed-loop runs of a version that its confidence gate is calibrated on; 1/129 is then its finest false-alarm rate.
CLOSED_LOOP_RUNS = 128
#: Most windows that the confidence gate is fitted on.
MAX_REFERENCE = 20_000


@dataclass(frozen=True)
class Lesson:
    """What a distillation works with.

    Attributes:
        rig, recipe: checked.
        train: the training episodes, after the limit on their number.
        calibration: the episodes reserved for the confidence gate.
        blank: normalisation and history, without layers.
        demonstrations: ``train`` as the trainer sees them.
        identity: SHA-256 over recipe, rig and data; a checkpoint of another identity is not taken.
    """

    rig: Rig
    recipe: Recipe
    train: list[Episode]
    calibration: list[Episode]
    blank: Policy
    demonstrations: list[Demonstration]
    identity: str


@dataclass(frozen=True)
class Improved:
    """The proximal-point version: its actor, method, why it was chosen, curves, messages, simulated periods."""

    actor: Actor
    method: str
    chosen: dict[str, Any]
    curves: dict[str, list[float]]
    messages: list[str]
    steps: int
    cost: RecoveredCost | None = None


def read_lesson(folder: JobFolder) -> Lesson:
    """Read and check a job's folder.

    Raises:
        ConfigError: the recipe is wrong.
        LearningError: there is no training episode, or one cannot be used.
    """
    job = folder.read_json("job.json")
    rig = Rig.model_validate(job["rig"])
    options = job.get("options", {})
    recipe = recipe_from_map(options.get("recipe", {}))
    episodes = folder.read_episodes()
    train = [item for item in episodes if item.split == "train" and item.length > 0]
    limit = int(options.get("episodes", 0))
    train = train[:limit] if limit > 0 else train
    if not train:
        raise LearningError("no training episodes; collect demonstrations first", code="learn.no_demonstrations")
    blank = blank_policy(rig, train)
    content = {"rig": rig.digest(), "recipe": recipe.model_dump(mode="json"), "data": data_digest(train)}
    return Lesson(
        rig=rig,
        recipe=recipe,
        train=train,
        calibration=[item for item in episodes if item.split == "calibration" and item.length > 0],
        blank=blank,
        demonstrations=read_demonstrations(blank, rest_action(rig), train),
        identity=hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest(),
    )


def run_distil(
    folder: JobFolder, reporter: Reporter, stopped: Stopped, *, executor: Executor | None = None
) -> dict[str, Any]:
    """Do a distillation job; policy files are written, the content of ``result.json`` is returned.

    Args:
        folder: with ``job.json`` and the demonstrations; checkpoints are kept here.
        reporter: told of every stage: cloning, proximal, selecting, calibrating.
        stopped: asked often; when true the job ends with LearningError ``learn.stopped`` and can be taken up again.
        executor: where roll-outs run; this process by default.

    Raises:
        ConfigError: the recipe or the simulator cannot be used.
        LearningError: nothing to learn from, diverged, or stopped.
    """
    if folder.read_json("job.json").get("options", {}).get("from_version"):
        return run_from_cost(folder, reporter, stopped, executor=executor)
    began_s = time.monotonic()
    torch.set_num_threads(1)
    lesson = read_lesson(folder)
    cloned = _clone(folder, lesson, reporter, stopped)
    improved = _improve(folder, lesson, cloned, reporter, stopped, executor or InProcess())
    reporter.report("calibrating", 0.0)
    files = {"clone": ("clone", cloned.actor)}
    if improved is not None:
        files["proximal"] = (improved.method, improved.actor)
    chosen = improved.chosen if improved else {"name": "clone", "reason": "the recipe asks for the clone alone"}
    provenance = {
        "seed": lesson.recipe.seed,
        "recipe": lesson.recipe.model_dump(mode="json"),
        "training_episodes": [item.episode for item in lesson.train],
        "training_sha256": data_digest(lesson.train),
        "calibration_episodes": [item.episode for item in lesson.calibration],
        "libraries": {name: version(name) for name in ("nearhand", "numpy", "torch", "safetensors")},
        "simulator_steps": improved.steps if improved else 0,
        "chosen": chosen,
        "cloning": {"steps": cloned.steps, "held_out": list(cloned.held_out), "note": cloned.note},
    }
    versions = []
    for number, (name, (method, actor)) in enumerate(files.items()):
        policy = served(lesson.blank, actor)
        novelty, calibrated_on = calibrated(lesson, policy, stopped)
        file = PolicyFile(
            policy=policy,
            rig=lesson.rig.name,
            observations=tuple(channel.name for channel in lesson.rig.observations),
            actions=tuple(channel.name for channel in lesson.rig.actions),
            method=method,
            novelty=novelty,
            extra={"seed": lesson.recipe.seed},
        )
        folder.write_bytes(f"output-{name}.policy", write_policy(file))
        wall_s = round(time.monotonic() - began_s, 3)
        own: dict[str, Any] = {"method": method, "wall_s": wall_s, "confidence_gate": calibrated_on}
        if name != "clone" and improved is not None and improved.cost is not None:
            own["recovered_cost"] = improved.cost.to_map()
        versions.append({"name": name, "method": method, "provenance": {**provenance, **own}})
        reporter.report("calibrating", (number + 1) / len(files))
    curves = {
        **{f"cloning_{key}": values for key, values in cloned.curves.items()},
        **(improved.curves if improved else {}),
    }
    result = {
        "chosen": chosen,
        "curves": {
            name: [value if np.isfinite(value) else None for value in values] for name, values in curves.items()
        },
        "messages": improved.messages if improved else [],
        "simulator_steps": provenance["simulator_steps"],
    }
    return {"state": "done", "versions": versions, "result": result}


def _clone(folder: JobFolder, lesson: Lesson, reporter: Reporter, stopped: Stopped) -> Clone:
    found = read_checkpoint(folder, "clone", lesson.identity)
    d, m = lesson.blank.input_size, lesson.blank.action_size
    if found is not None:
        arrays, facts = found
        layers = Layers((d, *lesson.recipe.clone.hidden, m))
        actor, probe = (
            Actor(layers, torch.from_numpy(arrays[f"{name}.flat"]), arrays[f"{name}.log_sd"])
            if f"{name}.flat" in arrays
            else None
            for name in ("actor", "probe")
        )
        if actor is not None:
            out = tuple(facts["held_out"])
            return Clone(actor, probe, facts["steps"], out, facts["spared"], facts["curves"], facts["note"])
    made = clone(
        lesson.demonstrations, lesson.recipe.clone, lesson.recipe.seed,
        lambda done, figures: reporter.report("cloning", done, figures), stopped,
        history=lesson.blank.past_actions * m,
        probing=lesson.recipe.method == "proximal-offline" or lesson.rig.simulator is None,
    )  # fmt: skip
    facts = {
        "identity": lesson.identity, "steps": made.steps, "held_out": made.held_out, "curves": made.curves,
        "note": made.note, "spared": made.spared,
    }  # fmt: skip
    arrays = {"actor.flat": made.actor.flat.numpy(), "actor.log_sd": made.actor.log_sd}
    if made.probe is not None:
        arrays |= {"probe.flat": made.probe.flat.numpy(), "probe.log_sd": made.probe.log_sd}
    write_checkpoint(folder, "clone", arrays, facts)
    return made


def _improve(
    folder: JobFolder, lesson: Lesson, cloned: Clone, reporter: Reporter, stopped: Stopped, executor: Executor
) -> Improved | None:
    method = lesson.recipe.method
    if method == "clone":
        return None
    message = ""
    if method == "proximal-online" and lesson.rig.simulator is None:
        method = "proximal-offline"
        message = f"rig {lesson.rig.name} names no simulator, so there are no roll-outs: offline instead of online"
        reporter.report("proximal", 0.0, message=message)
    kept = [item for index, item in enumerate(lesson.demonstrations) if index not in cloned.held_out]
    held = [lesson.demonstrations[index] for index in cloned.held_out]
    if method == "proximal-offline":
        return _offline(lesson, cloned, kept, held, reporter, stopped, [message] if message else [])
    return _online(
        folder, lesson, cloned, held if cloned.spared else lesson.demonstrations, reporter, stopped, executor
    )


def _offline(
    lesson: Lesson,
    cloned: Clone,
    kept: Sequence[Demonstration],
    held: Sequence[Demonstration],
    reporter: Reporter,
    stopped: Stopped,
    messages: list[str],
) -> Improved:
    if cloned.probe is None:
        reason = "from one demonstration nothing can be kept out to compare the offline fit on; the clone is kept"
        return Improved(cloned.actor, "proximal-offline", {"name": "clone", "reason": reason}, {}, messages, 0)
    recipe, n = lesson.recipe, len(lesson.rig.observations)
    part = 1.0 if cloned.spared else 0.5
    fitted = fit_offline(
        n, kept, held, cloned.probe, recipe.offline, recipe.clone.sd_floor, recipe.seed,
        lambda done, figures: reporter.report("proximal", part * done, figures), stopped,
    )  # fmt: skip
    better = fitted.held_out_nll < fitted.clone_nll
    actor = fitted.actor if better else cloned.actor
    if better and not cloned.spared:
        actor = fit_offline(
            n, lesson.demonstrations, (), cloned.actor, recipe.offline, recipe.clone.sd_floor, recipe.seed,
            lambda done, figures: reporter.report("proximal", 0.5 + 0.5 * done, figures), stopped, stop_at=fitted.steps,
        ).actor  # fmt: skip
    reason = (
        f"negative log-likelihood on {len(held)} episodes kept out: {fitted.held_out_nll:.4g} against the clone's "
        f"{fitted.clone_nll:.4g} nats" + ("" if better else "; the clone is kept")
    )
    reporter.report("selecting", 1.0, message=reason)
    chosen = {
        "name": "offline" if better else "clone",
        "reason": reason,
        "held_out_nll": {"offline": fitted.held_out_nll, "clone": fitted.clone_nll},
    }
    return Improved(actor, "proximal-offline", chosen, fitted.curves, messages, 0)


def scene_of(lesson: Lesson, executor: Executor) -> Scene:
    """Return what roll-outs and evaluations of a lesson share.

    Raises:
        ConfigError: the rig's simulator is not installed or its options are wrong.
        LearningError: the rig names none.
    """
    make = RigSimulator(lesson.rig)
    simulator = make()
    # Fragments were cloned; of the whole task, its starts and the expert's expectations they say nothing.
    whole = [index for index, item in enumerate(lesson.train) if not item.fragment] or [*range(len(lesson.train))]
    demonstrations = [lesson.demonstrations[index] for index in whole]
    lengths = [item.length for item in demonstrations]
    return Scene(
        rig=lesson.rig,
        blank=lesson.blank,
        demonstrations=demonstrations,
        features=fit_features(len(lesson.rig.observations), demonstrations),
        discount=effective_discount(lesson.recipe.online.discount, lengths),
        horizon=min(int(simulator.max_steps), max(lengths)),
        make=OneSimulator(simulator) if isinstance(executor, InProcess) else make,
        executor=executor,
        seed=lesson.recipe.seed,
        pieces=lesson.recipe.online.pieces,
        wanted=Wanted(
            shown=np.stack([lesson.train[index].observations[0] for index in whole]).astype(np.float64),
            weights=np.asarray([lesson.train[index].weight for index in whole], dtype=np.float64),
        ),
    )


def _online(
    folder: JobFolder,
    lesson: Lesson,
    cloned: Clone,
    held: Sequence[Demonstration],
    reporter: Reporter,
    stopped: Stopped,
    executor: Executor,
) -> Improved:
    recipe = lesson.recipe
    scene = scene_of(lesson, executor)
    run = OnlineProximalPoint(scene, cloned.actor, recipe.online, past_action_noise=recipe.clone.past_action_noise)
    restore_progress(folder, run, lesson.identity)
    total = recipe.online.iterations
    while run.progress.iteration < total:
        if stopped():
            raise LearningError("stopped; the folder can be taken up again", code="learn.stopped")
        figures, message = run.iterate()
        done = run.progress.iteration
        if done % recipe.selection.every == 0 or done == total:
            run.keep_candidate(f"iterate-{done}")
        save_progress(folder, run, lesson.identity)
        reporter.report("proximal", done / total, figures, message)
    candidates = {"clone": cloned.actor, **run.finish()}
    selector = Selector(scene, held, recipe.selection.episodes, recipe.selection.segments, recipe.clone.sd_floor)
    trials = {}
    for index, (name, actor) in enumerate(candidates.items()):
        if stopped():
            raise LearningError("stopped; the folder can be taken up again", code="learn.stopped")
        trials[name] = selector.trial(actor, 0)
        reporter.report("selecting", index / len(candidates), {"feature_distance": trials[name].distance})
    choice = selector.choose(trials, candidates)
    reporter.report("selecting", 1.0, message=f"chosen: {choice.name}; {choice.reason}")
    chosen = {
        "name": choice.name, "reason": choice.reason, "distances": choice.distances, "held_out_nll": choice.nlls,
        "floor": choice.floor,
        "likelihood_of": "episodes kept out" if cloned.spared else "the training episodes, too few to spare one",
    }  # fmt: skip
    progress = run.progress
    return Improved(
        candidates[choice.name], "proximal-online", chosen, progress.curves, progress.messages,
        progress.steps + choice.steps, recovered(scene, run),
    )  # fmt: skip


def recovered(scene: Scene, run: OnlineProximalPoint) -> RecoveredCost:
    """Return a run's cost: the mean of the cost weights over its iterations."""
    return RecoveredCost(
        rig=scene.rig.name,
        observations=tuple(channel.name for channel in scene.rig.observations),
        actions=tuple(channel.name for channel in scene.rig.actions),
        features=scene.features,
        weights=run.progress.cost_sum / max(run.progress.iteration, 1),
        discount=scene.discount,
    )


def calibrated(lesson: Lesson, policy: Policy, stopped: Stopped) -> tuple[dict[str, Any], str]:
    """Return a version's confidence gate, fitted on the training windows, and the words for what it is calibrated on.

    Where the rig has a simulator the calibration episodes are closed-loop runs of this very version: a policy's own
    closed loop is not exchangeable with the demonstrations. Otherwise they are the demonstrations set aside.
    """
    reference = np.concatenate([item.windows for item in lesson.demonstrations])
    if len(reference) > MAX_REFERENCE:
        rows = np.random.default_rng((lesson.recipe.seed, 4)).permutation(len(reference))[:MAX_REFERENCE]
        reference = reference[np.sort(rows)]
    shown = [item.windows for item in read_demonstrations(lesson.blank, rest_action(lesson.rig), lesson.calibration)]
    if lesson.rig.simulator is None:
        return (dict(calibrate(reference, shown)) if shown else {}), f"{len(shown)} demonstrations"
    if stopped():
        raise LearningError("stopped before calibrating; the folder can be taken up again", code="learn.stopped")
    make = RigSimulator(lesson.rig)
    rolled = roll_out(
        InProcess(), make, lesson.rig, policy, CLOSED_LOOP_RUNS, make().max_steps, (lesson.recipe.seed, 5), noisy=False
    )
    # A run that fell is none that a supervisor would have accepted.
    kept = [rolled.windows[index, : rolled.lengths[index]] for index in np.flatnonzero(~rolled.terminated)]
    if len(kept) < len(shown):
        return dict(calibrate(reference, shown)), f"{len(shown)} demonstrations; only {len(kept)} runs did not fall"
    return dict(calibrate(reference, kept)), f"{len(kept)} closed-loop runs of this version in the simulator"
