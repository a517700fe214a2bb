"""What the benches of learning share: demonstrations from a simulator, and the task score that only measures."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.configs import builtin_text
from nearhand.service.episodes.episode import Episode
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.learn.cost_job import changed_rig
from nearhand.service.learn.demonstrations import rest_action
from nearhand.service.learn.distil import run_distil
from nearhand.service.policy.format import read_policy
from nearhand.service.policy.network import Policy, Window
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.service.simulators import make_expert, make_simulator

Array = NDArray[np.float64]


def builtin_rig(name: str) -> Rig:
    """Return a rig that comes with Nearhand."""
    return rig_from_toml(builtin_text("rigs", name), origin=name)


def _limited(rig: Rig, wanted: Array, last: Array) -> Array:
    low = np.asarray([channel.low for channel in rig.actions])
    high = np.asarray([channel.high for channel in rig.actions])
    slew = np.asarray([channel.slew_per_s for channel in rig.actions]) * rig.timing.period_s
    return np.asarray(np.clip(np.clip(wanted, low, high), last - slew, last + slew))


def demonstrate(rig: Rig, expert: str, count: int, seed: int) -> list[Episode]:
    """Let one of the rig's experts, by the rig's name for it, drive ``count`` training episodes within the limits."""
    assert rig.simulator is not None
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    plant = rig.experts[expert]
    driver = make_expert(plant.name, simulator, plant.options)
    seen = [simulator.reset(count, seed=seed)]
    driver.reset(seen[0], seed=seed + 1)
    last = np.tile(rest_action(rig).astype(np.float64), (count, 1))
    done: list[Array] = []
    lengths, ended, alive = np.zeros(count, int), np.zeros(count, bool), np.ones(count, bool)
    while alive.any():
        last = _limited(rig, driver.act(seen[-1]), last)
        step = simulator.step(last)
        done.append(last)
        seen.append(step.observations)
        lengths += alive
        ended |= alive & step.terminated
        alive = alive & ~(step.terminated | step.truncated)
    observations, actions = np.asarray(seen, dtype=np.float32), np.asarray(done, dtype=np.float32)
    return [
        Episode(
            episode=f"{expert}-{seed}-{i}", rig=rig.name, operator=expert,
            times_s=np.arange(lengths[i]) * rig.timing.period_s,
            observations=observations[: lengths[i] + 1, i], actions=actions[: lengths[i], i], terminated=bool(ended[i]),
        )
        for i in range(count)
    ]  # fmt: skip


def scores(rig: Rig, policy: Policy, count: int, seed: int, changes: Mapping[str, Any] | None = None) -> Array:
    """Return the mean task score a period of each of ``count`` fresh episodes, (count,), with changed options."""
    plant = changed_rig(rig, dict(changes or {})).simulator
    assert plant is not None
    simulator = make_simulator(plant.name, plant.options)
    window = Window(policy, count, rest_action(rig))
    rows = window.start(simulator.reset(count, seed=seed))
    last = np.tile(rest_action(rig).astype(np.float64), (count, 1))
    total = np.zeros(count)
    for _ in range(simulator.max_steps):
        last = _limited(rig, policy.action(rows).astype(np.float64), last)
        window.acted(last)
        step = simulator.step(last)
        total += step.score
        rows = window.observed(step.observations)
    return np.asarray(total / simulator.max_steps)


def distilled(
    rig: Rig,
    recipe: Mapping[str, Any],
    episodes: Sequence[Episode],
    *,
    options: Mapping[str, Any] | None = None,
    inputs: Mapping[str, bytes] | None = None,
) -> tuple[dict[str, Any], dict[str, Policy], dict[str, bytes]]:
    """Do one distillation job in a folder of its own.

    Returns:
        the job's result, its policies by name, and their files' bytes.
    """
    with tempfile.TemporaryDirectory(prefix="nearhand-bench-") as place:
        folder = JobFolder(Path(place) / "job")
        folder.write_episodes(list(episodes))
        for name, data in (inputs or {}).items():
            folder.write_bytes(name, data)
        content = {"recipe": dict(recipe), **(options or {})}
        folder.write_json(
            "job.json", {"job": 1, "kind": "distil", "rig": rig.model_dump(mode="json"), "options": content}
        )
        result = run_distil(folder, Reporter(1, ""), lambda: False)
        files = {one["name"]: folder.read_bytes(f"output-{one['name']}.policy") for one in result["versions"]}
    return result, {name: read_policy(data).policy for name, data in files.items()}, files
