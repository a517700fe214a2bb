"""What the other channels say a channel should be doing: tells a stuck sensor from a machine at rest."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode

MOST_ROWS = 20_000
#: Jumps (a sample lost, a sensor stuck) with a residual over this many medians are left out of the second fit.
OUTLIER = 6.0


@dataclass(frozen=True, slots=True)
class Motion:
    """A linear forecast of each observation channel's next change from all channels at once.

    Attributes:
        weights: (n + m + 1, n); the last row is a constant.
        usual: (n,) mean absolute change from sample to sample.
    """

    weights: NDArray[np.float64]
    usual: NDArray[np.float64]

    def expected(self, episode: Episode, channel: int, start: int, stop: int) -> float:
        """Return the mean absolute change forecast for samples ``start`` to ``stop``, over the channel's usual one.

        NaN where a value is not finite.
        """
        inputs = _inputs(episode)[start : min(stop, episode.length)]
        if not self.usual[channel] or not inputs.size:
            return 0.0
        return float(np.abs(inputs @ self.weights[:, channel]).mean() / self.usual[channel])


def _inputs(episode: Episode) -> NDArray[np.float64]:
    values = np.concatenate([episode.observations[:-1], episode.actions], axis=1).astype(np.float64)
    values[~np.isfinite(values)] = np.nan
    return np.concatenate([values, np.ones((episode.length, 1))], axis=1)


def learn_motion(episodes: Sequence[Episode], *, seed: int = 0) -> Motion:
    """Return the forecast fitted by trimmed least squares to the samples of all episodes."""
    inputs = np.concatenate([_inputs(episode) for episode in episodes])
    following = np.concatenate([episode.observations[1:] for episode in episodes]).astype(np.float64)
    n = following.shape[1]
    good = np.flatnonzero(np.isfinite(inputs).all(axis=1) & np.isfinite(following).all(axis=1))
    if good.size > MOST_ROWS:
        good = np.sort(np.random.default_rng(seed).choice(good, MOST_ROWS, replace=False))
    if not good.size:
        return Motion(np.zeros((inputs.shape[1], n)), np.zeros(n))
    changes = following[good] - inputs[good, :n]
    scale = np.abs(inputs[good]).max(axis=0)
    scale[scale == 0] = 1.0
    scaled = inputs[good] / scale
    weights = np.zeros((inputs.shape[1], n))
    for channel in range(n):
        change = changes[:, channel]
        first, *_ = np.linalg.lstsq(scaled, change, rcond=1e-9)
        residual = np.abs(change - scaled @ first)
        kept = residual <= OUTLIER * np.median(residual)
        weights[:, channel], *_ = np.linalg.lstsq(scaled[kept], change[kept], rcond=1e-9)
    return Motion(weights / scale[:, None], np.abs(changes).mean(axis=0))
