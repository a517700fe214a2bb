"""Recordings on the control period: episodes split where samples are missing, the rest put on even times.

What is regular already passes through bit for bit.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.timing import GAP_PERIODS

#: Intervals that stray from the period by no more than this part of it are taken for regular.
REGULAR = 0.25


def split_at_gaps(episode: Episode, period_s: float) -> list[Episode]:
    """Return the stretches between gaps, in order; a gap is never bridged.

    The sample before a gap has no known successor: its observation ends its stretch and its action is left out. Times
    that do not go forward are left out with their samples. Only the last stretch can be terminated; all but the first
    are fragments.
    """
    times = episode.times_s
    kept = _forward(times)
    if kept.size < times.size:
        rows = np.concatenate([kept, [episode.length]])
        episode = replace(
            episode, times_s=times[kept], actions=episode.actions[kept], observations=episode.observations[rows]
        )
        times = episode.times_s
    gaps = np.flatnonzero(np.diff(times) > GAP_PERIODS * period_s)
    if not gaps.size:
        return [episode]
    bounds = [0, *(int(gap) + 1 for gap in gaps), episode.length]
    found = []
    for place, (begin, end) in enumerate(pairwise(bounds)):
        is_last = end == episode.length
        last = end if is_last else end - 1
        if last <= begin:
            continue
        found.append(
            replace(
                episode, episode=f"{episode.episode}#{place}", times_s=times[begin:last],
                actions=episode.actions[begin:last], observations=episode.observations[begin : last + 1],
                terminated=episode.terminated and is_last, fragment=episode.fragment or place > 0,
            )
        )  # fmt: skip
    return found


def _forward(times_s: NDArray[np.float64]) -> NDArray[np.intp]:
    """Return the indices of samples later than all before them."""
    if times_s.size == 0:
        return np.empty(0, dtype=np.intp)
    before = np.concatenate([[-np.inf], np.maximum.accumulate(times_s)[:-1]])
    return np.flatnonzero(times_s > before)


def is_regular(times_s: NDArray[np.float64], period_s: float) -> bool:
    """Tell whether every interval is near the period."""
    return bool((np.abs(np.diff(times_s) - period_s) <= REGULAR * period_s).all())


def resample(episode: Episode, period_s: float) -> Episode | None:
    """Return an episode without gaps on times one period apart, or None if it is shorter than a period.

    A command holds until the next one (zero-order hold); states are interpolated linearly between the two samples
    around a time and never beyond the last, so they stay within the recorded values.
    """
    if is_regular(episode.times_s, period_s):
        return episode
    # The last observation was taken one period after the last command, as far as anybody knows.
    known_s = np.append(episode.times_s, episode.times_s[-1] + period_s)
    count = int(np.floor((known_s[-1] - known_s[0]) / period_s + 1e-6))
    if count < 1:
        return None
    even_s = known_s[0] + period_s * np.arange(count + 1)
    states = np.stack([np.interp(even_s, known_s, column) for column in episode.observations.T], axis=1)
    held = np.searchsorted(episode.times_s, even_s[:-1] + 1e-9, side="right") - 1
    return replace(episode, times_s=even_s[:-1], observations=states.astype(np.float32), actions=episode.actions[held])


def regular_stretches(episode: Episode, period_s: float) -> list[Episode]:
    """Return what a job may learn from: every stretch of a training episode, the longest of any other.

    Figures count episodes as independent, which stretches of one episode are not.
    """
    found = [item for part in split_at_gaps(episode, period_s) if (item := resample(part, period_s)) is not None]
    if episode.split != "train" and len(found) > 1:
        return [max(found, key=lambda item: item.length)]
    return found
