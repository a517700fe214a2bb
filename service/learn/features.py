"""Cost features: standardised linear and quadratic terms of the present observation and the applied action."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.learn.demonstrations import Demonstration, stack_pairs
from nearhand.service.policy.network import Float32

Float64 = NDArray[np.float64]
#: Coordinates are bent to at most so many standard deviations of the expert, so that a wild roll-out stays finite.
BEND_SD = 5.0
#: Least spread of an action and of a feature, in half ranges and in units of the standardised coordinates.
ACTION_SD_FLOOR = 0.02
FEATURE_SD_FLOOR = 0.1
#: Beyond so many coordinates, products of different coordinates are left out.
MAX_CROSSED = 24


@dataclass(frozen=True)
class CostFeatures:
    """The map (window, applied action) → features; the absorbing state's indicator is kept apart from it.

    Coordinates z are the present observation (already standardised) and the action standardised on the demonstrations;
    features are z and the products z_i z_j, centred and scaled on the demonstrations.

    Attributes:
        n: observation channels, the first ``n`` columns of a window.
        action_mean, action_sd: (m,).
        rows, columns: indices of the products.
        centre, scale: (k,) of the raw features.
    """

    n: int
    action_mean: Float32
    action_sd: Float32
    rows: NDArray[np.int64]
    columns: NDArray[np.int64]
    centre: Float32
    scale: Float32

    @property
    def count(self) -> int:
        """Number k of features, the absorbing indicator not among them."""
        return int(self.centre.shape[0])

    def __call__(self, windows: Float32, actions: Float32) -> Float32:
        """Return features (N, k) of windows (N, d) and applied actions (N, m) in half ranges."""
        raw = _raw(self.n, self.action_mean, self.action_sd, self.rows, self.columns, windows, actions)
        return np.asarray((raw - self.centre) / self.scale, dtype=np.float32)

    def action_noise_shift(self, variance: Float64) -> Float64:
        """Return how the mean features (k,) move when independent noise (m,) is added to the action.

        Only the squares move, by variance/sd² before scaling; the bending is not counted. Derived here.
        """
        shift = np.zeros(self.count)
        first = self.n + len(self.action_mean)
        for channel in range(len(self.action_mean)):
            square = (self.rows == self.n + channel) & (self.columns == self.n + channel)
            shift[first:][square] = variance[channel] / self.action_sd[channel] ** 2
        return shift / self.scale


def _raw(
    n: int,
    action_mean: Float32,
    action_sd: Float32,
    rows: NDArray[np.int64],
    columns: NDArray[np.int64],
    windows: Float32,
    actions: Float32,
) -> Float32:
    z = np.concatenate([windows[:, :n], (actions - action_mean) / action_sd], axis=1)
    z = (BEND_SD * np.tanh(z / BEND_SD)).astype(np.float32)
    return np.concatenate([z, z[:, rows] * z[:, columns]], axis=1)


def fit_features(n: int, demonstrations: Sequence[Demonstration]) -> CostFeatures:
    """Return the features standardised on these demonstrations, of ``n`` observation channels."""
    windows, actions, weights = stack_pairs(demonstrations)
    mean = np.average(actions, axis=0, weights=weights).astype(np.float32)
    spread = np.sqrt(np.average(np.square(actions - mean), axis=0, weights=weights))
    sd = np.maximum(spread, ACTION_SD_FLOOR).astype(np.float32)
    size = n + actions.shape[1]
    rows, columns = np.triu_indices(size) if size <= MAX_CROSSED else (np.arange(size), np.arange(size))
    raw = _raw(n, mean, sd, rows, columns, windows, actions).astype(np.float64)
    centre = np.average(raw, axis=0, weights=weights)
    scale = np.sqrt(np.average(np.square(raw - centre), axis=0, weights=weights))
    return CostFeatures(
        n=n,
        action_mean=mean,
        action_sd=sd,
        rows=rows,
        columns=columns,
        centre=centre.astype(np.float32),
        scale=np.maximum(scale, FEATURE_SD_FLOOR).astype(np.float32),
    )


def effective_discount(discount: float, lengths: Sequence[int]) -> float:
    """Return the recipe's discount, or for 0 one whose horizon is a third of the mean episode, within [.9, .998]."""
    if discount > 0:
        return discount
    return float(np.clip(1 - 3.0 / float(np.mean(lengths)), 0.9, 0.998))


def discounted_means(
    features: CostFeatures, demonstrations: Sequence[Demonstration], discount: float, horizon: int
) -> tuple[Float64, Float64]:
    """Return each episode's discounted feature mean (E, k) and its mass on the absorbing state (E,).

    Every episode is seen through the same window of ``horizon`` periods. One that ended in a true terminal state goes
    on for ever in the absorbing state, with discounted mass g^T; one that was cut is only normalised by its own mass.
    """
    means = np.empty((len(demonstrations), features.count))
    absorbed = np.zeros(len(demonstrations))
    for row, item in enumerate(demonstrations):
        length = min(item.length, horizon)
        powers = (1 - discount) * discount ** np.arange(length)
        ended = item.terminated and item.length <= horizon
        tail = discount**length if ended else 0.0
        total = powers.sum() + tail
        means[row] = powers @ features(item.windows[:length], item.actions[:length]).astype(np.float64) / total
        absorbed[row] = tail / total
    return means, absorbed
