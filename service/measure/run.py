"""A measurement from beginning to end, as a job."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from nearhand.service.episodes.episode import Episode
from nearhand.service.errors import ConfigError, LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.measure.closed_loop import Rollouts, roll_expert, roll_policy, roll_random, roll_served
from nearhand.service.measure.distances import FeatureMap, action_errors
from nearhand.service.measure.figures import (
    Figure,
    action_figures,
    closed_loop_figures,
    feature_figures,
    figure,
    sample_figures,
)
from nearhand.service.measure.intervals import Interval, bootstrap
from nearhand.service.measure.paired import compare, truncation_bound
from nearhand.service.measure.traces import side_by_side
from nearhand.service.policy.format import PolicyFile, read_policy
from nearhand.service.rigs import Rig
from nearhand.service.simulators import make_expert, make_simulator

#: Horizon of the feature distance, in episode lengths: the discount is set so that the weights reach that far.
HORIZON = 0.5
DEFAULT_EPISODES = 50
Stopped = Callable[[], bool]
#: Figures, served episodes, bare episodes.
Measured = tuple[dict[str, Figure], Rollouts | None, Rollouts | None]


@dataclass
class Bench:
    """What every measured policy is held against: demonstrations, features, expert and chance in the simulator."""

    rig: Rig
    demonstrations: list[Episode]
    held_out: list[Episode]
    features: FeatureMap
    episodes: int
    seed: int
    expert: Rollouts | None = None
    chance: Rollouts | None = None


def run_measure(folder: JobFolder, reporter: Reporter, stopped: Stopped) -> dict[str, Any]:
    """Measure ``input-version.policy`` beside ``input-clone.policy`` and ``input-in-service.policy``, if present.

    Raises:
        LearningError: stopped, or there are no demonstrations to measure against.
        PolicyFormatError: an input is damaged.
    """
    job = folder.read_json("job.json")
    rig = Rig.model_validate(job["rig"])
    options = job["options"]
    episodes = folder.read_episodes()
    demonstrations = [item for item in episodes if item.split != "calibration"]
    held_out = [item for item in episodes if item.split == "held-out"]
    train = [item for item in episodes if item.split == "train"] or demonstrations
    if not demonstrations:
        raise LearningError(f"rig {rig.name} has no demonstrations to measure against; collect some first")
    longest = float(np.mean([item.length for item in demonstrations]))
    bench = Bench(
        rig, demonstrations, held_out, FeatureMap.fit(train, float(np.exp(-1 / (HORIZON * longest)))),
        int(options.get("closed_loop_episodes") or DEFAULT_EPISODES), int(options.get("seed") or 0),
    )  # fmt: skip
    files = {
        name: read_policy(folder.read_bytes(f"input-{name}.policy"))
        for name in ("version", "clone", "in-service", "against")
        if folder.has(f"input-{name}.policy")
    }
    tell = _Teller(reporter, stopped, stages=2 + 2 * len(files))
    notes = _set_up(bench, tell)
    measured = {name: _measure(bench, file, tell) for name, file in files.items()}
    figures, served, bare = measured["version"]
    if "clone" in measured:
        for name, beside in measured["clone"][0].items():
            if name in figures:
                figures[name]["clone"] = {key: value for key, value in beside.items() if key not in ("floor", "clone")}
    if "in-service" in measured:
        figures.update(_against(served, measured["in-service"][1], bench))
    against: dict[str, Any] = {}
    if "against" in measured:
        against = _side_by_side(served, measured["against"][1], bench, measured["against"][0])
    figures["truncation_mass"] = figure(
        Interval(float(bench.features.discount**longest), np.nan, np.nan, len(demonstrations)), "", "low"
    )
    reporter.report("measuring", 1.0)
    return {
        "state": "done",
        "versions": [],
        "result": {
            "version": options.get("version"),
            "clone": options.get("clone"),
            "in_service": options.get("in_service"),
            "figures": figures,
            "traces": side_by_side(rig, bench.expert, bare),
            "notes": notes,
            "against": {"version": options.get("against"), "figures": against} if against else None,
            "truncation_bound": truncation_bound(float(bench.features.discount**longest), figures),
            "settings": {
                "closed_loop_episodes": bench.episodes, "seed": bench.seed, "held_out_episodes": len(held_out),
                "demonstrations": len(demonstrations), "discount": bench.features.discount,
            },
            "rig_digest": rig.digest(),
        },
    }  # fmt: skip


class _Teller:
    """Progress over several stages of equal weight, and the moment to stop."""

    def __init__(self, reporter: Reporter, stopped: Stopped, stages: int) -> None:
        self._reporter, self._stopped, self._stages, self._stage = reporter, stopped, stages, 0

    def next(self) -> None:
        self._stage += 1

    def __call__(self, fraction: float) -> None:
        if self._stopped():
            raise LearningError("the measurement was stopped", code="learn.stopped")
        self._reporter.report("measuring", min((self._stage + fraction) / self._stages, 0.99))


def _set_up(bench: Bench, tell: _Teller) -> list[str]:
    rig = bench.rig
    notes = []
    if not bench.held_out:
        notes.append("no held-out demonstrations; action errors were not measured")
    if rig.simulator is None:
        notes.append("the rig has no simulator; nothing was measured in closed loop")
        return notes
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    if rig.expert is None:
        notes.append("the rig names no expert; scores are not normalised")
    else:
        plant = rig.experts[rig.expert]
        expert = make_expert(plant.name, simulator, plant.options)
        bench.expert = roll_expert(simulator, expert, rig, bench.episodes, bench.seed, tell)
    tell.next()
    bench.chance = roll_random(simulator, rig, bench.episodes, bench.seed, tell)
    tell.next()
    return notes


def _measure(
    bench: Bench, file: PolicyFile, tell: _Teller
) -> tuple[dict[str, Figure], Rollouts | None, Rollouts | None]:
    rig = bench.rig
    if file.rig != rig.name:
        raise ConfigError(f"the policy is for rig {file.rig}, not {rig.name}")
    figures: dict[str, Figure] = {}
    rest = np.array([channel.rest for channel in rig.actions], dtype=np.float32)
    if bench.held_out:
        figures.update(action_figures(action_errors(file.policy, bench.held_out, rest), rig))
    if rig.simulator is None:
        return figures, None, None
    assert bench.chance is not None
    simulator = make_simulator(rig.simulator.name, rig.simulator.options)
    bare = roll_policy(simulator, file.policy, rig, bench.episodes, bench.seed, tell)
    tell.next()
    mine = np.array([bench.features.episode(*bare.episode(index)) for index in range(bench.episodes)])
    figures.update(feature_figures(mine, _expert_features(bench.features, bench.demonstrations)))
    figures.update(sample_figures(bare, bench.demonstrations, bench.features))
    served = roll_served(simulator, file, rig, bench.episodes, bench.seed, tell)
    tell.next()
    figures.update(closed_loop_figures(served, bench.expert, bench.chance, rig))
    return figures, served, bare


def _expert_features(features: FeatureMap, episodes: Sequence[Episode]) -> np.ndarray[Any, np.dtype[np.float64]]:
    return np.array([features.episode(item.observations, item.actions) for item in episodes])


def _side_by_side(
    served: Rollouts | None, other: Rollouts | None, bench: Bench, others: dict[str, Figure]
) -> dict[str, Any]:
    """Return the differences to another version, paired by start state, with the other's own value beside."""
    if served is None or other is None:
        return {}
    span = None
    if bench.expert is not None and bench.chance is not None:
        span = float(bench.expert.score.mean() - bench.chance.score.mean())
    rows = compare(served, other, span)
    for name, row in rows.items():
        row["other"] = others.get(name, {}).get("value")
    return rows


def _against(served: Rollouts | None, other: Rollouts | None, bench: Bench) -> dict[str, Figure]:
    """Return the score's difference to the version in service, paired by start state."""
    if served is None or other is None or bench.expert is None or bench.chance is None:
        return {}
    span = float(bench.expert.score.mean() - bench.chance.score.mean())
    gaps = (served.score - other.score) / span
    interval = bootstrap(lambda rows: float(gaps[rows].mean()), len(gaps))
    return {"closed_loop.score_minus_in_service": figure(interval, "of the expert's lead", "high")}
