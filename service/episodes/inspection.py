"""The inspection of a rig's demonstrations: all figures, then what they mean."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import asdict
from typing import Any

import numpy as np
from numpy.typing import NDArray
from pydantic import ValidationError

from nearhand.service.episodes.agreement import Samples, coverage, disagreement, pool
from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.lag import estimate_lag
from nearhand.service.episodes.motion import Motion, learn_motion
from nearhand.service.episodes.quality import idle_ends, not_finite, outside, repeats, saturation, stuck_channels
from nearhand.service.episodes.timing import judge_times
from nearhand.service.episodes.verdicts import verdicts
from nearhand.service.errors import LearningError, StoreError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.rigs import Rig, sentence

#: A channel that repeats its value more often than this, in the median episode, is constant by nature.
LIVELY_REPEATS = 0.5
#: Channels named for the weakest direction: those with at least this share of its length.
WEAK_SHARE = 0.3

Told = Callable[[str, float], None]


def _silent(stage: str, fraction: float) -> None:
    return None


def inspect_episodes(rig: Rig, episodes: Sequence[Episode], *, told: Told = _silent) -> dict[str, Any]:
    """Return what can be said of a rig's demonstrations, ready for JSON.

    Args:
        episodes: closed episodes of the rig, of all uses.
        told: receives (stage, fraction) now and then; may raise to stop.

    Returns:
        ``rig``, ``period_s``, ``samples``, ``duration_s``; ``episodes``: one map each; ``operators``, ``outcomes``,
        ``splits``: counts; ``lag``, ``disagreement``, ``coverage``: maps or None; ``verdicts``: maps {level, sentence}.
    """
    usable = [episode for episode in episodes if episode.length]
    lively = np.zeros(len(rig.observations), dtype=np.bool_)
    if usable:
        lively = np.median([repeats(episode) for episode in usable], axis=0) < LIVELY_REPEATS
    motion = learn_motion(usable) if usable else None
    rows = []
    for number, episode in enumerate(episodes):
        rows.append(_row(rig, episode, lively, motion))
        told("episodes", (number + 1) / len(episodes))
    told("together", 0.0)
    samples = pool(usable) if usable else None
    lag = estimate_lag(rig, usable)
    told("together", 0.3)
    result: dict[str, Any] = {
        "rig": rig.name,
        "period_s": rig.timing.period_s,
        "samples": sum(episode.length for episode in episodes),
        "duration_s": float(sum(row["duration_s"] for row in rows)),
        "episodes": rows,
        "operators": _operators(episodes),
        "outcomes": dict(Counter(episode.outcome for episode in episodes)),
        "splits": dict(Counter(str(episode.split) for episode in episodes)),
        "lag": None if lag is None else asdict(lag),
        "disagreement": None if samples is None else _disagreement(rig, samples),
        "coverage": None if samples is None else _coverage(rig, samples),
    }
    result["verdicts"] = verdicts(rig, result)
    told("together", 1.0)
    return result


def _row(rig: Rig, episode: Episode, lively: NDArray[np.bool_], motion: Motion | None) -> dict[str, Any]:
    finite_times = episode.times_s[np.isfinite(episode.times_s)]
    idle_start_s, idle_end_s = idle_ends(rig, episode)
    beyond = [*outside(rig.observations, episode.observations), *outside(rig.actions, episode.actions)]
    names = [channel.name for channel in (*rig.observations, *rig.actions)]
    return {
        "episode": episode.episode,
        "operator": episode.operator,
        "outcome": episode.outcome,
        "terminated": episode.terminated,
        "split": episode.split,
        "samples": episode.length,
        "duration_s": float(np.ptp(finite_times) + rig.timing.period_s) if finite_times.size else 0.0,
        **asdict(judge_times(episode.times_s, rig.timing.period_s)),
        "saturation": _by_name([channel.name for channel in rig.actions], saturation(rig, episode.actions)),
        "idle_start_s": idle_start_s,
        "idle_end_s": idle_end_s,
        "stuck": [] if motion is None else stuck_channels(rig, episode, lively, motion),
        "not_finite": not_finite(episode),
        "outside": {name: float(part) for name, part in zip(names, beyond, strict=True) if part > 0},
    }


def _by_name(names: Sequence[str], values: NDArray[np.float64]) -> dict[str, float]:
    return {name: float(value) for name, value in zip(names, values, strict=True)}


def _operators(episodes: Sequence[Episode]) -> dict[str, dict[str, int]]:
    found: dict[str, dict[str, int]] = {}
    for episode in episodes:
        row = found.setdefault(episode.operator, {"episodes": 0, "samples": 0, "successes": 0})
        row["episodes"] += 1
        row["samples"] += episode.length
        row["successes"] += episode.outcome == "success"
    return found


def _disagreement(rig: Rig, samples: Samples) -> dict[str, Any] | None:
    found = disagreement(samples)
    if found is None:
        return None
    return {
        "unexplained": _by_name([channel.name for channel in rig.actions], found.unexplained),
        "between_operators": found.between_operators,
        "n": found.n,
    }


def _coverage(rig: Rig, samples: Samples) -> dict[str, Any] | None:
    found = coverage(samples)
    if found is None:
        return None
    names = [channel.name for channel in rig.observations]
    varying = set(found.varying.tolist())
    low, high = np.quantile(samples.observations, [0.01, 0.99], axis=0)
    span = np.array([channel.high - channel.low for channel in rig.observations])
    share = np.abs(found.direction)
    return {
        "smallest_eigenvalue": found.smallest_eigenvalue,
        "effective_dimension": found.effective_dimension,
        "channels": len(varying),
        "constant": [name for index, name in enumerate(names) if index not in varying],
        "weakest": [names[index] for index, part in zip(found.varying, share, strict=True) if part >= WEAK_SHARE],
        "range_used": _by_name(names, (high - low) / span),
    }


def run_inspect(folder: JobFolder, reporter: Reporter, stopped: Callable[[], bool]) -> dict[str, Any]:
    """Inspect the episodes in a job's folder.

    Returns:
        The content of ``result.json``.

    Raises:
        StoreError: the folder's files are missing or damaged.
        LearningError: it was stopped (``learn.stopped``).
    """
    job = folder.read_json("job.json")
    try:
        rig = Rig.model_validate(job.get("rig"))
    except ValidationError as error:
        raise StoreError(f"job folder {folder.path}: the rig is damaged: {sentence(error)}") from error

    def told(stage: str, fraction: float) -> None:
        if stopped():
            raise LearningError("the inspection was stopped", code="learn.stopped")
        reporter.report(stage, fraction)

    return {"state": "done", "versions": [], "result": inspect_episodes(rig, folder.read_episodes(), told=told)}
