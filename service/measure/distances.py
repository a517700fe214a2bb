"""Distances between a policy and the expert, from per-episode features and samples."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode
from nearhand.service.policy.network import Policy, episode_windows

Array = NDArray[np.float64]
#: Largest sample per side for the kernel distance; its cost is quadratic.
KERNEL_SAMPLE = 800


@dataclass(frozen=True, slots=True)
class FeatureMap:
    """Standardised (observation, action) with squares and products, as fixed by the training demonstrations.

    Features are divided by √(their number), so that a typical vector has length about one; the distances are then
    comparable between rigs of different size.
    """

    mean: Array
    scale: Array
    square_mean: Array
    square_scale: Array
    discount: float

    @classmethod
    def fit(cls, episodes: Sequence[Episode], discount: float) -> FeatureMap:
        """Return the map that the demonstrations define."""
        rows = np.concatenate([joined(item.observations[:-1], item.actions) for item in episodes])
        mean, scale = rows.mean(axis=0), np.maximum(rows.std(axis=0), 1e-6)
        products = _products((rows - mean) / scale)
        return cls(mean, scale, products.mean(axis=0), np.maximum(products.std(axis=0), 1e-6), discount)

    def rows(self, observations: NDArray[np.floating], actions: NDArray[np.floating]) -> Array:
        """Return features (T, k) along an episode."""
        scaled = (joined(observations, actions) - self.mean) / self.scale
        products = (_products(scaled) - self.square_mean) / self.square_scale
        together = np.concatenate((scaled, products), axis=1)
        return np.asarray(together / np.sqrt(together.shape[1]))

    def episode(self, observations: NDArray[np.floating], actions: NDArray[np.floating]) -> Array:
        """Return the discounted, normalised feature sum (k,) of an episode's T periods."""
        weights = self.discount ** np.arange(len(actions))
        return np.asarray(weights @ self.rows(observations[: len(actions)], actions) / weights.sum())


def joined(observations: NDArray[np.floating], actions: NDArray[np.floating]) -> Array:
    """Return observation and action side by side, (T, n + m)."""
    return np.concatenate((observations, actions), axis=1).astype(np.float64)


def _products(scaled: Array) -> Array:
    first, second = np.triu_indices(scaled.shape[1])
    return np.asarray(scaled[:, first] * scaled[:, second])


def dual_norms(gap: Array) -> dict[str, float]:
    """Return the feature distance in four classes of linear costs: the norm dual to each class' unit ball.

    L2 costs → Euclidean norm (Abbeel & Ng 2004); L1 → largest component; L∞ → sum; simplex → largest signed component
    (Syed & Schapire 2007).
    """
    return {
        "l2": float(np.linalg.norm(gap)),
        "l1": float(np.max(np.abs(gap))),
        "linf": float(np.sum(np.abs(gap))),
        "simplex": float(np.max(gap)),
    }


def debiased_square(mine: Array, theirs: Array) -> float:
    """Return an unbiased estimate of ‖E mine − E theirs‖² from per-episode features; it may be negative.

    ‖gap‖² − tr(C_mine)/n − tr(C_theirs)/m, since E‖mean‖² = ‖E‖² + tr(C)/n.
    """
    gap = mine.mean(axis=0) - theirs.mean(axis=0)
    noise = sum(float(part.var(axis=0, ddof=1).sum()) / len(part) for part in (mine, theirs) if len(part) > 1)
    return float(gap @ gap) - noise


def mmd_squared(x: Array, y: Array, bandwidth: float) -> float:
    """Return the unbiased squared kernel two-sample distance with k = exp(−‖a−b‖²/(2·bandwidth²)); may be negative.

    Source: Gretton et al. 2012, JMLR 13:723, lemma 6 (from memory).
    """

    def kernel(a: Array, b: Array) -> Array:
        return np.asarray(np.exp(-squared_gaps(a, b) / (2 * bandwidth**2)))

    n, m = len(x), len(y)
    within_x = (kernel(x, x).sum() - n) / (n * (n - 1))
    within_y = (kernel(y, y).sum() - m) / (m * (m - 1))
    return float(within_x + within_y - 2 * kernel(x, y).mean())


def energy_distance_squared(x: Array, y: Array) -> float:
    """Return 2E‖X−Y‖ − E‖X−X'‖ − E‖Y−Y'‖ (Székely & Rizzo), as a V-statistic."""

    def mean_gap(a: Array, b: Array) -> float:
        return float(np.sqrt(np.maximum(squared_gaps(a, b), 0.0)).mean())

    return 2 * mean_gap(x, y) - mean_gap(x, x) - mean_gap(y, y)


def squared_gaps(a: Array, b: Array) -> Array:
    """Return squared distances (len(a), len(b))."""
    return np.asarray(np.maximum((a**2).sum(1)[:, None] + (b**2).sum(1)[None, :] - 2 * a @ b.T, 0.0))


def median_bandwidth(x: Array) -> float:
    """Return the median distance between points, the usual bandwidth."""
    gaps = squared_gaps(x, x)
    return float(np.sqrt(max(np.median(gaps[np.triu_indices(len(x), 1)]), 1e-12)))


@dataclass(frozen=True, slots=True)
class ActionErrors:
    """Per held-out episode: mean squared error (episodes, m) in action units, and mean negative log-likelihood."""

    squared: Array
    nll: Array


def action_errors(policy: Policy, episodes: Sequence[Episode], rest: NDArray[np.float32]) -> ActionErrors:
    """Compare the policy's actions with the expert's on the expert's own observations.

    The likelihood is that of the Gaussian policy in units of half a range.
    """
    squared, nll = [], []
    sd = np.exp(policy.log_sd.astype(np.float64))
    for item in episodes:
        windows = episode_windows(policy, item.observations, item.actions, rest)[:-1]
        gap = policy.action(windows).astype(np.float64) - item.actions
        squared.append((gap**2).mean(axis=0))
        z = gap / policy.action_half / sd
        nll.append(float((0.5 * z**2 + np.log(sd) + 0.5 * np.log(2 * np.pi)).sum(axis=1).mean()))
    return ActionErrors(np.array(squared), np.array(nll))
