"""Two small rigs with simulators and experts of their own, installed for the tests like any rig's package."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import torch

from nearhand.service.episodes.episode import Episode, Split
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.policy.network import Policy, Window
from nearhand.service.rigs import Rig
from nearhand.service.simulators import make_expert, make_simulator

PLANTS = Path(__file__).parent / "plants"
ENTRY_POINTS = """\
[nearhand.simulators]
test-pendulum = nearhand_plants:make_pendulum
test-integrator = nearhand_plants:make_integrator

[nearhand.experts]
test-pendulum = nearhand_plants:make_pendulum_expert
test-integrator = nearhand_plants:make_regulator
"""


@pytest.fixture(scope="session", autouse=True)
def plants(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Put the plants and a distribution that names them on the import path."""
    root = tmp_path_factory.mktemp("site")
    facts = root / "nearhand_plants-1.dist-info"
    facts.mkdir()
    (facts / "METADATA").write_text("Metadata-Version: 2.1\nName: nearhand-plants\nVersion: 1\n", encoding="utf-8")
    (facts / "entry_points.txt").write_text(ENTRY_POINTS, encoding="utf-8")
    sys.path[:0] = [str(root), str(PLANTS)]
    torch.set_num_threads(1)
    yield root
    for path in (str(root), str(PLANTS)):
        sys.path.remove(path)


def channel(name: str, reach: float, **more: float) -> dict[str, Any]:
    """Return a channel's table."""
    return {"name": name, "unit": "", "low": -reach, "high": reach, **more}


def rig_of(kind: str, *, simulator: bool = True, **options: Any) -> Rig:
    """Return the rig of a plant."""
    pendulum = kind == "pendulum"
    names = {"cosine": 1.0, "sine": 1.0, "rate": 8.0} if pendulum else {"position": 3.0, "velocity": 3.0}
    period_s = 0.05 if pendulum else 0.1
    table: dict[str, Any] = {
        "name": kind,
        "title": kind,
        "observations": [channel(name, reach) for name, reach in names.items()],
        "actions": [channel("drive", 3.0 if pendulum else 8.0, slew_per_s=1e4)],
        "timing": {"period_s": period_s, "deadline_s": 2 * period_s, "lease_s": 2 * period_s},
    }
    if simulator:
        table["simulator"] = {"name": f"test-{kind}", "options": options}
    return Rig.model_validate(table)


def record(kind: str, count: int, seed: int, split: Split = "train", **options: Any) -> list[Episode]:
    """Let a plant's expert drive ``count`` episodes."""
    simulator = make_simulator(f"test-{kind}", options)
    expert = make_expert(f"test-{kind}", simulator, {})
    seen = [simulator.reset(count, seed=seed)]
    expert.reset(seen[0], seed=seed + 1)
    done, lengths, ended, alive = [], np.zeros(count, int), np.zeros(count, bool), np.ones(count, bool)
    while alive.any():
        done.append(expert.act(seen[-1]))
        step = simulator.step(done[-1])
        seen.append(step.observations)
        lengths += alive
        ended |= alive & step.terminated
        alive = alive & ~(step.terminated | step.truncated)
    observations, actions = np.asarray(seen, dtype=np.float32), np.asarray(done, dtype=np.float32)
    return [
        Episode(
            episode=f"{split}-{seed}-{i}",
            rig=kind,
            operator="expert",
            times_s=np.arange(lengths[i]) * simulator.period_s,
            observations=observations[: lengths[i] + 1, i],
            actions=actions[: lengths[i], i],
            terminated=bool(ended[i]),
            split=split,
        )
        for i in range(count)
    ]


def drive_and_score(rig: Rig, policy: Policy, count: int, seed: int) -> float:
    """Return the mean task score of a policy's mean action; for the tests alone."""
    assert rig.simulator is not None
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    window = Window(policy, count, np.zeros(policy.action_size, dtype=np.float32))
    rows = window.start(simulator.reset(count, seed=seed))
    low, high = rig.actions[0].low, rig.actions[0].high
    for _ in range(simulator.max_steps):
        action = np.clip(policy.action(rows).astype(np.float64), low, high)
        window.acted(action)
        rows = window.observed(simulator.step(action).observations)
    return float(simulator.outcomes()["score"].mean())


@pytest.fixture
def job(tmp_path: Path) -> Callable[..., JobFolder]:
    """A function that makes a distillation's folder."""

    def make(
        rig: Rig, recordings: list[Episode], recipe: dict[str, Any], name: str = "job", **options: Any
    ) -> JobFolder:
        folder = JobFolder(tmp_path / name)
        folder.write_episodes(recordings)
        content = {"job": 1, "kind": "distil", "rig": rig.model_dump(mode="json"), "progress": ""}
        folder.write_json("job.json", {**content, "options": {"recipe": recipe, **options}})
        return folder

    return make


@pytest.fixture(scope="session")
def rigs() -> Callable[..., Rig]:
    """``rig_of``."""
    return rig_of


@pytest.fixture(scope="session")
def recorded() -> Callable[..., list[Episode]]:
    """``record``."""
    return record


@pytest.fixture(scope="session")
def scored() -> Callable[..., float]:
    """``drive_and_score``."""
    return drive_and_score
