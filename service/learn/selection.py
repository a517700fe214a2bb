"""Which of the clone, the iterates and their average is returned: do no harm, and never by the task score.

Two figures decide, both about likeness to the expert: the closed-loop distance between a candidate's roll-outs and the
demonstrations, feature by feature and part by part of the episode, and the likelihood of the demonstrated actions.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from nearhand.service.learn.cloning import Actor, held_out_nll
from nearhand.service.learn.demonstrations import Demonstration
from nearhand.service.learn.features import FEATURE_SD_FLOOR, CostFeatures, Float64
from nearhand.service.learn.online import Scene, matched
from nearhand.service.learn.rollouts import Rollouts, roll_out, served
from nearhand.service.policy.network import Float32

#: One-sided confidence that a candidate is nearer to the expert than the clone, before it may replace it.
CONFIDENCE = 0.9
RESAMPLES = 400


@dataclass(frozen=True)
class Trial:
    """One candidate's figures: segment features of each roll-out (B, q) with shares (B,), distance, likelihood."""

    each: Float64
    shares: Float64
    distance: float
    nll: float


@dataclass(frozen=True)
class Choice:
    """The chosen candidate, why, every candidate's distance and likelihood, and the simulated periods spent."""

    name: str
    reason: str
    distances: dict[str, float]
    nlls: dict[str, float]
    floor: float
    steps: int


def segment_means(
    features: CostFeatures,
    windows: Sequence[Float32],
    actions: Sequence[Float32],
    ended: NDArray[np.bool_],
    horizon: int,
    segments: int,
) -> Float64:
    """Return the mean features of each part of each episode, (B, segments·(k + 1)), the absorbing share last in each.

    Every part of the ``horizon`` counts alike, without discount: what happens late, such as arriving, weighs as much as
    what happens early. Periods after a true terminal count as absorbed; a part that was cut off is NaN, not known.
    The absorbed share is scaled by the least spread of a feature, as one that the expert hardly ever shows: an episode
    that fell has features of zero afterwards, which is the expert's mean, and would otherwise look near.
    """
    edges = np.linspace(0, horizon, segments + 1).round().astype(int)
    rows = np.zeros((len(actions), segments, features.count + 1))
    for index, (seen, done) in enumerate(zip(windows, actions, strict=True)):
        values = features(np.ascontiguousarray(seen[: len(done)]), np.ascontiguousarray(done)).astype(np.float64)
        for part, (start, end) in enumerate(pairwise(edges)):
            here = values[start:end]
            periods = end - start if ended[index] else len(here)
            rows[index, part, :-1] = here.sum(axis=0) / periods if periods else np.nan
            rows[index, part, -1] = (1 - len(here) / periods) / FEATURE_SD_FLOOR if periods else np.nan
    return rows.reshape(len(actions), -1)


def demonstrated_segments(
    features: CostFeatures, demonstrations: Sequence[Demonstration], horizon: int, segments: int
) -> Float64:
    """Return ``segment_means`` of demonstrations."""
    return segment_means(
        features,
        [item.windows for item in demonstrations],
        [item.actions[:horizon] for item in demonstrations],
        np.asarray([item.terminated and item.length <= horizon for item in demonstrations]),
        horizon,
        segments,
    )


def rolled_segments(features: CostFeatures, rollouts: Rollouts, horizon: int, segments: int) -> Float64:
    """Return ``segment_means`` of roll-outs."""
    return segment_means(
        features,
        list(rollouts.windows),
        [applied[:length] for applied, length in zip(rollouts.applied, rollouts.lengths, strict=True)],
        rollouts.terminated,
        horizon,
        segments,
    )


def known_mean(rows: Float64, shares: Float64) -> Float64:
    """Return the weighted mean over episodes of what is known, NaN where nothing is."""
    known = np.isfinite(rows)
    mass = shares @ known
    return np.asarray(np.where(mass > 0, shares @ np.where(known, rows, 0.0) / np.maximum(mass, 1e-300), np.nan))


def square_gap(each: Float64, shares: Float64, expert: Float64) -> float:
    """Return the squared distance of the mean features, over the parts that both know."""
    gap = known_mean(each, shares) - known_mean(expert, np.ones(len(expert)))
    return float(np.square(gap[np.isfinite(gap)]).sum())


def distance(each: Float64, shares: Float64, expert: Float64, segments: int) -> float:
    """Return the root mean square over the parts of the gap between the mean features."""
    return float(np.sqrt(square_gap(each, shares, expert) / segments))


def expert_floor(expert: Float64, rollouts: int, segments: int) -> float:
    """Return the distance that fresh episodes of the expert would have by chance alone; 0 from one demonstration."""
    if len(expert) < 2:
        return 0.0
    known = expert[:, np.isfinite(expert).all(axis=0)]
    trace = float(np.var(known, axis=0, ddof=1).sum())
    return float(np.sqrt(trace * (1 / len(expert) + 1 / rollouts) / segments))


def share_nearer(candidate: Trial, clone: Trial, expert: Float64, generator: np.random.Generator) -> float:
    """Return the share of bootstrap resamples in which the candidate is nearer to the expert than the clone.

    Roll-outs are resampled in pairs of one start state, the demonstrations once for both.
    """
    nearer, count = 0, len(candidate.each)
    for _ in range(RESAMPLES):
        rows = generator.integers(count, size=count)
        shares = candidate.shares[rows]
        shown = expert[generator.integers(len(expert), size=len(expert))]
        nearer += square_gap(candidate.each[rows], shares, shown) < square_gap(clone.each[rows], shares, shown)
    return nearer / RESAMPLES


class Selector:
    """Tries candidates in fresh roll-outs, all from the same start states."""

    def __init__(
        self, scene: Scene, selection: Sequence[Demonstration], episodes: int, segments: int, sd_floor: float
    ) -> None:
        self._sd_floor = sd_floor
        self._scene, self._selection, self._episodes, self._segments = scene, selection, episodes, segments
        self._expert = demonstrated_segments(scene.features, scene.demonstrations, scene.horizon, segments)
        self.steps = 0

    def trial(self, actor: Actor, stage: int) -> Trial:
        """Try one candidate; each ``stage`` has its own start states."""
        scene = self._scene
        rollouts = roll_out(
            scene.executor, scene.make, scene.rig, served(scene.blank, actor), self._episodes, scene.horizon,
            (scene.seed, 3, stage), noisy=False, wanted=scene.wanted, parts=scene.pieces,
        )  # fmt: skip
        self.steps += rollouts.steps
        rollouts = matched(scene, rollouts)
        each = rolled_segments(scene.features, rollouts, scene.horizon, self._segments)
        near = distance(each, rollouts.shares, self._expert, self._segments)
        return Trial(each, rollouts.shares, near, held_out_nll(actor, self._selection, self._sd_floor))

    def choose(self, first: Mapping[str, Trial], candidates: Mapping[str, Actor]) -> Choice:
        """Return the nearest candidate of a first round if fresh roll-outs confirm it, else the clone.

        Args:
            first: trials of every candidate from the same start states; ``clone`` is among them.
            candidates: the same names' actors.
        """
        floor = expert_floor(self._expert, self._episodes, self._segments)
        distances = {name: trial.distance for name, trial in first.items()}
        nlls = {name: trial.nll for name, trial in first.items()}
        name = min((n for n in first if n != "clone"), key=lambda n: distances[n], default="clone")
        if name == "clone":
            reason = "there was no other candidate"
        else:
            fresh = {one: self.trial(candidates[one], 1) for one in ("clone", name)}
            generator = np.random.default_rng((self._scene.seed, 3, 9))
            sure = share_nearer(fresh[name], fresh["clone"], self._expert, generator)
            both = f"{fresh[name].distance:.3g} against the clone's {fresh['clone'].distance:.3g} (floor {floor:.3g})"
            if sure >= CONFIDENCE and distances[name] < distances["clone"]:
                reason = f"nearest to the expert in fresh roll-outs: feature distance {both}, sure to {sure:.0%}"
            else:
                reason = (
                    f"{name} was nearest of the iterates, but is not surely nearer than the clone: feature distance "
                    f"{both}, sure to {sure:.0%} where {CONFIDENCE:.0%} is asked"
                )
                name = "clone"
        return Choice(name, reason, distances, nlls, floor, self.steps)
