"""Demonstrations as the trainer sees them: normalised windows, actions in half ranges, and who is kept out."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode
from nearhand.service.errors import LearningError
from nearhand.service.policy.network import Float32, Policy, episode_windows
from nearhand.service.rigs import Rig

#: Smallest scale of an observation channel, as a part of the channel's declared range; a channel that never moved in
#: the demonstrations must not turn sensor noise into large inputs.
SCALE_FLOOR = 1e-3


@dataclass(frozen=True, slots=True)
class Demonstration:
    """One episode: windows (T+1, d) float32, actions (T, m) float32 in half ranges, weight, true terminal or not."""

    windows: Float32
    actions: Float32
    weight: float
    terminated: bool

    @property
    def length(self) -> int:
        """Number T of control periods."""
        return int(self.actions.shape[0])


def rest_action(rig: Rig) -> Float32:
    """Return the rig's action at rest, (m,)."""
    return np.asarray([channel.rest for channel in rig.actions], dtype=np.float32)


def blank_policy(rig: Rig, episodes: Sequence[Episode]) -> Policy:
    """Return a policy without layers, whose normalisation comes from these episodes.

    Raises:
        LearningError: an episode does not fit the rig or holds values that are not finite.
    """
    n, m = len(rig.observations), len(rig.actions)
    for item in episodes:
        if item.observations.shape != (item.length + 1, n) or item.actions.shape != (item.length, m):
            raise LearningError(
                f"episode {item.episode}: observations {item.observations.shape} and actions {item.actions.shape} do "
                f"not fit rig {rig.name}; expected (T+1, {n}) and (T, {m})",
                code="learn.shape",
            )
        if not (np.isfinite(item.observations).all() and np.isfinite(item.actions).all()):
            raise LearningError(
                f"episode {item.episode} holds values that are not finite; inspect the demonstrations and leave it out",
                code="learn.not_finite",
            )
    rows = np.concatenate([item.observations for item in episodes]).astype(np.float64)
    span = np.asarray([channel.high - channel.low for channel in rig.observations])
    low = np.asarray([channel.low for channel in rig.actions])
    high = np.asarray([channel.high for channel in rig.actions])
    return Policy(
        weights=(),
        biases=(),
        observation_mean=rows.mean(axis=0).astype(np.float32),
        observation_scale=np.maximum(rows.std(axis=0), SCALE_FLOOR * span).astype(np.float32),
        action_middle=((low + high) / 2).astype(np.float32),
        action_half=((high - low) / 2).astype(np.float32),
        log_sd=np.zeros(m, dtype=np.float32),
        past_observations=rig.history.observations,
        past_actions=rig.history.actions,
    )


def input_width(blank: Policy) -> int:
    """Return the width of the stacked window."""
    return blank.input_size


def read_demonstrations(blank: Policy, rest: Float32, episodes: Sequence[Episode]) -> list[Demonstration]:
    """Return the episodes as windows and actions in half ranges."""
    return [
        Demonstration(
            windows=episode_windows(blank, item.observations, item.actions, rest),
            actions=((item.actions - blank.action_middle) / blank.action_half).astype(np.float32),
            weight=item.weight,
            terminated=item.terminated,
        )
        for item in episodes
    ]


def stack_pairs(demonstrations: Sequence[Demonstration]) -> tuple[Float32, Float32, Float32]:
    """Return all windows (N, d) that were acted on, the actions (N, m), and weights (N,) of mean one."""
    windows = np.concatenate([item.windows[:-1] for item in demonstrations])
    actions = np.concatenate([item.actions for item in demonstrations])
    weights = np.concatenate([np.full(item.length, item.weight) for item in demonstrations])
    return windows, actions, (weights / weights.mean()).astype(np.float32)


def blur_past_actions(rows: Float32, history: int, sd: float, generator: np.random.Generator) -> Float32:
    """Return windows (N, d) with one draw of noise per row on their last ``history`` columns.

    Smooth driving makes the last action an excellent guess of the next, which a policy that only repeats itself never
    corrects. Blurring the past actions together hides their level and keeps their change.

    Args:
        rows: windows; not changed.
        history: columns of past actions, all channels.
        sd: in half ranges; 0 returns the rows as they are.
        generator: draws the noise.
    """
    if history == 0 or sd == 0:
        return rows
    blurred = rows.copy()
    blurred[:, -history:] += (sd * generator.standard_normal((len(rows), 1))).astype(np.float32)
    return blurred


def hold_out(count: int, fraction: float, generator: np.random.Generator) -> NDArray[np.int64]:
    """Return the sorted indices of the episodes kept out: at least one, never all but none."""
    kept = min(max(round(fraction * count), 1), count - 1)
    return np.sort(generator.permutation(count)[:kept])


def data_digest(episodes: Sequence[Episode]) -> str:
    """Return the SHA-256 over the episodes' names, observations and actions, in order."""
    digest = hashlib.sha256()
    for item in episodes:
        digest.update(item.episode.encode())
        digest.update(np.ascontiguousarray(item.observations, dtype="<f4").tobytes())
        digest.update(np.ascontiguousarray(item.actions, dtype="<f4").tobytes())
    return digest.hexdigest()
