"""The job that distils again from a version's recovered cost, in a simulator that may have changed."""

from __future__ import annotations

import hashlib
import json
import time
from collections.abc import Callable
from concurrent.futures import Executor
from importlib.metadata import version
from typing import Any

import numpy as np
import torch

from nearhand.service.envelope.novelty import calibrate
from nearhand.service.errors import LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.learn.from_cost import Task, distil_from_cost
from nearhand.service.learn.recovered_cost import read_cost
from nearhand.service.learn.rollouts import InProcess, OneSimulator, RigSimulator, roll_out
from nearhand.service.policy.format import PolicyFile, read_policy, sha256, write_policy
from nearhand.service.recipes import recipe_from_map
from nearhand.service.rigs import Rig

#: Closed-loop runs that the confidence gate is fitted on, and as many again that it is calibrated on.
GATE_RUNS = 128


def changed_rig(rig: Rig, changes: dict[str, Any]) -> Rig:
    """Return the rig with some of its simulator's options replaced.

    Raises:
        LearningError: the rig names no simulator.
    """
    if rig.simulator is None:
        raise LearningError(
            f"rig {rig.name} names no simulator to roll out in; a cost alone cannot be distilled without one",
            code="learn.no_simulator",
        )
    options = {**rig.simulator.options, **changes}
    return rig.model_copy(update={"simulator": rig.simulator.model_copy(update={"options": options})})


def run_from_cost(
    folder: JobFolder, reporter: Reporter, stopped: Callable[[], bool], *, executor: Executor | None = None
) -> dict[str, Any]:
    """Do the job; ``output-from-cost.policy`` is written, the content of ``result.json`` is returned.

    Raises:
        ConfigError: the recipe or a simulator option is wrong.
        LearningError: the cost cannot be used, diverged, or stopped.
    """
    began_s = time.monotonic()
    torch.set_num_threads(1)
    job = folder.read_json("job.json")
    options = job["options"]
    recipe = recipe_from_map(options.get("recipe", {}))
    rig = changed_rig(Rig.model_validate(job["rig"]), dict(options.get("simulator", {})))
    data = folder.read_bytes("input-version.policy")
    content = folder.read_json("input-cost.json")
    begin, cost = read_policy(data), read_cost(content)
    make = RigSimulator(rig)
    simulator = make()
    identity = {"rig": rig.model_dump(mode="json"), "recipe": recipe.model_dump(mode="json"), "start": sha256(data)}
    text = json.dumps([identity, content], sort_keys=True)
    work = executor or InProcess()
    task = Task(
        rig=rig, cost=cost, start=begin.policy, make=OneSimulator(simulator) if executor is None else make,
        executor=work, recipe=recipe, identity=hashlib.sha256(text.encode()).hexdigest(),
    )  # fmt: skip
    found = distil_from_cost(task, folder, lambda done, figures: reporter.report("proximal", done, figures), stopped)
    reporter.report("selecting", 1.0, message=f"chosen: {found.name}; {found.reason}")
    if stopped():
        raise LearningError("stopped before calibrating; the folder can be taken up again", code="learn.stopped")
    reporter.report("calibrating", 0.0)
    rolled = roll_out(
        InProcess(), make, rig, found.policy, 2 * GATE_RUNS, int(simulator.max_steps), (recipe.seed, 7), noisy=False
    )
    seen = [rolled.windows[i, : rolled.lengths[i]] for i in np.flatnonzero(~rolled.terminated)]
    half = len(seen) // 2
    novelty = dict(calibrate(np.concatenate(seen[:half]), seen[half:])) if half else {}
    policy = PolicyFile(
        policy=found.policy, rig=begin.rig, observations=begin.observations, actions=begin.actions,
        method="from-cost", novelty=novelty, extra={"seed": recipe.seed},
    )  # fmt: skip
    folder.write_bytes("output-from-cost.policy", write_policy(policy))
    reporter.report("calibrating", 1.0)
    chosen = {"name": found.name, "reason": found.reason, "costs": found.costs}
    provenance = {
        "method": "from-cost",
        "from_version": options["from_version"],
        "simulator": dict(options.get("simulator", {})),
        "seed": recipe.seed,
        "recipe": recipe.model_dump(mode="json"),
        "recovered_cost": content,
        "libraries": {name: version(name) for name in ("nearhand", "numpy", "torch", "safetensors")},
        "simulator_steps": found.steps,
        "chosen": chosen,
        "wall_s": round(time.monotonic() - began_s, 3),
        "confidence_gate": f"{len(seen) - half} closed-loop runs of this version in the changed simulator",
    }
    result = {"chosen": chosen, "curves": found.curves, "messages": [], "simulator_steps": found.steps}
    versions = [{"name": "from-cost", "method": "from-cost", "provenance": provenance}]
    return {"state": "done", "versions": versions, "result": result}
