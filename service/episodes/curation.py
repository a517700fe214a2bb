"""What a person decides about an episode, and how that changes what training sees; the original stays as it came."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from nearhand.service.episodes.episode import Episode
from nearhand.service.rigs import Rig

#: A trim that moved no channel by more than this part of its range cut away waiting: what is left begins where the
#: episode began.
START_MOVED = 0.02


@dataclass(frozen=True, slots=True)
class Decision:
    """What is in force for an episode.

    Attributes:
        excluded: no job but an inspection sees it.
        start_s, end_s: what is kept, in seconds after its first sample; None means to its end.
        weight: how much it counts in training.
        tags: free words, sorted.
    """

    excluded: bool = False
    start_s: float = 0.0
    end_s: float | None = None
    weight: float = 1.0
    tags: tuple[str, ...] = ()


def apply(decision: Decision, episode: Episode, rig: Rig) -> Episode | None:
    """Return an episode trimmed and weighted, or None if nothing is left of it.

    A cut end takes the next observation as its last and is no true terminal; a cut start whose observation is not the
    episode's first makes a fragment. The weight is for training episodes alone.
    """
    if decision.excluded or not episode.length:
        return None
    after_s = episode.times_s - episode.times_s[0]
    begin = int(np.searchsorted(after_s, decision.start_s - 1e-9))
    end = episode.length if decision.end_s is None else int(np.searchsorted(after_s, decision.end_s - 1e-9))
    if begin >= end:
        return None
    weight = episode.weight * decision.weight if episode.split == "train" else episode.weight
    if (begin, end) == (0, episode.length):
        return replace(episode, weight=weight)
    span = np.asarray([channel.high - channel.low for channel in rig.observations])
    moved = bool((np.abs(episode.observations[begin] - episode.observations[0]) > START_MOVED * span).any())
    return replace(
        episode, times_s=episode.times_s[begin:end], observations=episode.observations[begin : end + 1],
        actions=episode.actions[begin:end], terminated=episode.terminated and end == episode.length,
        fragment=episode.fragment or moved, weight=weight,
    )  # fmt: skip
