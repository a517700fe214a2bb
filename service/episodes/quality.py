"""What can be said of one demonstration by itself: values, limits, stillness, dead channels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.motion import Motion
from nearhand.service.rigs import Channel, Rig

#: At a limit means within this fraction of half the range (common practice).
SATURATION_MARGIN = 1e-3
#: Still means: action this close to rest, and observations this slow, both as fractions of a channel's range.
IDLE_ACTION = 0.01
IDLE_PER_S = 0.01
#: A channel is stuck when it repeats one value for this long, and at least this many samples, while the others make
#: one expect this share of its usual motion.
STUCK_S = 0.5
STUCK_SAMPLES = 10
STUCK_MOTION = 0.25
ROUNDING = 1e-6


@dataclass(frozen=True, slots=True)
class Run:
    """The longest stretch over which a channel repeats one value: samples ``start`` to ``stop``."""

    start: int
    stop: int

    @property
    def length(self) -> int:
        """Number of samples."""
        return self.stop - self.start


def limits(channels: Sequence[Channel]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return low and high of the channels."""
    return np.array([channel.low for channel in channels]), np.array([channel.high for channel in channels])


def saturation(rig: Rig, actions: NDArray[np.float32]) -> NDArray[np.float64]:
    """Return the fraction of samples at a limit per action channel, (m,)."""
    low, high = limits(rig.actions)
    half = (high - low) / 2
    finite = actions[np.isfinite(actions).all(axis=1)]
    if not finite.size:
        return np.zeros(len(rig.actions))
    return np.asarray((np.abs(finite - (low + high) / 2) >= (1 - SATURATION_MARGIN) * half).mean(axis=0))


def outside(channels: Sequence[Channel], values: NDArray[np.float32]) -> NDArray[np.float64]:
    """Return the fraction of finite samples outside a channel's range, per channel."""
    low, high = limits(channels)
    slack = ROUNDING * np.maximum(high - low, np.maximum(np.abs(low), np.abs(high)))
    finite = np.isfinite(values)
    beyond = ((values < low - slack) | (values > high + slack)) & finite
    return np.asarray(beyond.sum(axis=0) / np.maximum(1, finite.sum(axis=0)))


def idle_ends(rig: Rig, episode: Episode) -> tuple[float, float]:
    """Return how long nothing happens at the beginning and at the end, in seconds.

    Nothing happens while every action is at rest and no observation changes faster than IDLE_PER_S of its range.
    """
    if not episode.length:
        return 0.0, 0.0
    action_low, action_high = limits(rig.actions)
    rest = np.array([channel.rest for channel in rig.actions])
    low, high = limits(rig.observations)
    at_rest = (np.abs(episode.actions - rest) <= IDLE_ACTION * (action_high - action_low)).all(axis=1)
    change = np.abs(_changes(episode.observations)) / rig.timing.period_s
    still = at_rest & (change <= IDLE_PER_S * (high - low)).all(axis=1)
    busy = np.flatnonzero(~still)
    if not busy.size:
        return episode.length * rig.timing.period_s, 0.0
    return float(busy[0] * rig.timing.period_s), float((episode.length - 1 - busy[-1]) * rig.timing.period_s)


def _changes(values: NDArray[np.float32]) -> NDArray[np.float64]:
    """Return the change from sample to sample, NaN beside a value that is not finite."""
    return np.diff(np.where(np.isfinite(values), values, np.nan).astype(np.float64), axis=0)


def longest_run(values: NDArray[np.float32]) -> Run:
    """Return the longest stretch of equal consecutive values of one channel (T,)."""
    edges = np.flatnonzero(_changes(values) != 0) + 1
    bounds = np.concatenate([[0], edges, [values.size]])
    lengths = np.diff(bounds)
    longest = int(np.argmax(lengths))
    return Run(int(bounds[longest]), int(bounds[longest + 1]))


def repeats(episode: Episode) -> NDArray[np.float64]:
    """Return, per observation channel, the fraction of samples that repeat the one before."""
    if not episode.length:
        return np.zeros(episode.observations.shape[1])
    return np.asarray((_changes(episode.observations) == 0).mean(axis=0))


def stuck_channels(rig: Rig, episode: Episode, lively: NDArray[np.bool_], motion: Motion) -> list[str]:
    """Return the observation channels that repeat one value for long while the others say that they should move.

    Args:
        lively: (n,) channels that usually change from sample to sample; the others are constant by nature.
        motion: forecast of each channel's change, from all demonstrations.
    """
    least = max(STUCK_SAMPLES, round(STUCK_S / rig.timing.period_s))
    found = []
    for index in map(int, np.flatnonzero(lively)):
        run = longest_run(episode.observations[:, index])
        if run.length >= least and motion.expected(episode, index, run.start, run.stop - 1) > STUCK_MOTION:
            found.append(rig.observations[index].name)
    return found


def not_finite(episode: Episode) -> int:
    """Return how many times, observations and actions are NaN or infinite."""
    parts = (episode.times_s, episode.observations, episode.actions)
    return sum(int((~np.isfinite(part)).sum()) for part in parts)
