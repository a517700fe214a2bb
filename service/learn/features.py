"""Cost features: standardised linear and quadratic terms of the present observation and the applied action."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist

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
#: Quantiles of the rank features, and the least distance of two, in standard deviations.
QUANTILES, KNOT_SPACING = 40, 2e-3
#: Beyond so many coordinates, products of different coordinates are left out.
MAX_CROSSED = 24


@dataclass(frozen=True)
class CostFeatures:
    """The map (window, applied action) → features; the absorbing state's indicator is kept apart from it.

    Coordinates z are the present observation (already standardised) and the action standardised on the demonstrations;
    features are z, the products z_i z_j, and of each coordinate's rank r among the demonstrations, as a normal score,
    r and r². All are centred and scaled on the demonstrations. Ranks resolve what the expert does finely: where it
    spends much time, as at a landing, a small miss is a large step in rank that the plain squares cannot see.

    Attributes:
        n: observation channels, the first ``n`` columns of a window.
        action_mean, action_sd: (m,).
        rows, columns: indices of the products.
        knots: (q, p) quantiles of each coordinate; ``scores`` (q,) their normal scores.
        centre, scale: (k,) of the raw features.
    """

    n: int
    action_mean: Float32
    action_sd: Float32
    rows: NDArray[np.int64]
    columns: NDArray[np.int64]
    knots: Float64
    scores: Float64
    centre: Float32
    scale: Float32

    @property
    def count(self) -> int:
        """Number k of features, the absorbing indicator not among them."""
        return int(self.centre.shape[0])

    def __call__(self, windows: Float32, actions: Float32) -> Float32:
        """Return features (N, k) of windows (N, d) and applied actions (N, m) in half ranges."""
        z = _coordinates(self.n, self.action_mean, self.action_sd, windows, actions)
        raw = _raw(z, self.rows, self.columns, self.knots, self.scores)
        return np.asarray((raw - self.centre) / self.scale, dtype=np.float32)


def _coordinates(n: int, action_mean: Float32, action_sd: Float32, windows: Float32, actions: Float32) -> Float32:
    z = np.concatenate([windows[:, :n], (actions - action_mean) / action_sd], axis=1)
    return (BEND_SD * np.tanh(z / BEND_SD)).astype(np.float32)


def _raw(z: Float32, rows: NDArray[np.int64], columns: NDArray[np.int64], knots: Float64, scores: Float64) -> Float32:
    ranks = np.stack([np.interp(z[:, i], knots[:, i], scores) for i in range(z.shape[1])], axis=1).astype(np.float32)
    return np.concatenate([z, z[:, rows] * z[:, columns], ranks, np.square(ranks)], axis=1)


def fit_features(n: int, demonstrations: Sequence[Demonstration]) -> CostFeatures:
    """Return the features standardised on these demonstrations, of ``n`` observation channels."""
    windows, actions, weights = stack_pairs(demonstrations)
    mean = np.average(actions, axis=0, weights=weights).astype(np.float32)
    spread = np.sqrt(np.average(np.square(actions - mean), axis=0, weights=weights))
    sd = np.maximum(spread, ACTION_SD_FLOOR).astype(np.float32)
    size = n + actions.shape[1]
    rows, columns = np.triu_indices(size) if size <= MAX_CROSSED else (np.arange(size), np.arange(size))
    z = _coordinates(n, mean, sd, windows, actions)
    levels = (np.arange(QUANTILES) + 0.5) / QUANTILES
    # Values that the expert repeats exactly would make a step of no width; give every step a least width.
    knots = np.quantile(z.astype(np.float64), levels, axis=0) + KNOT_SPACING * np.arange(QUANTILES)[:, None]
    scores = np.asarray([NormalDist().inv_cdf(float(level)) for level in levels])
    raw = _raw(z, rows, columns, knots, scores).astype(np.float64)
    centre = np.average(raw, axis=0, weights=weights)
    scale = np.sqrt(np.average(np.square(raw - centre), axis=0, weights=weights))
    return CostFeatures(
        n=n,
        action_mean=mean,
        action_sd=sd,
        rows=rows,
        columns=columns,
        knots=knots,
        scores=scores,
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
