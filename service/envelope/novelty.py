"""Novelty: how unlike the demonstrations an observation is, as a conformal p-value.

Two looks at the policy's window, in coordinates whitened by the shrunk covariance of the training demonstrations: its
Mahalanobis distance from their mean, and its distance from the nearest of a small set that covers them. Each is
divided by what the demonstrations themselves show; the score is the larger. The first sees what lies outside, the
second also what lies in a gap between them.

The score is calibrated by split conformal prediction on the **maximum over each calibration episode**, since the steps
within an episode are not exchangeable: of fresh episodes like those, at most a fraction ε has any p-value ≤ ε. One
calibration for the larger of both keeps the finest honest ε at 1/(n+1); two of their own would double it.
Source: Vovk, Gammerman & Shafer, Algorithmic Learning in a Random World, 2005 (from memory); derived per episode here.
"""

from __future__ import annotations

import math
from bisect import bisect_left
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Float32 = NDArray[np.float32]
#: Weight of the diagonal in the covariance; keeps the whitening sound where channels depend on each other.
SHRINKAGE = 0.05
SMALLEST_SD = 1e-3
#: Size of the covering set; a query looks at all of it.
NEIGHBOURS = 256
#: Windows that it is chosen among.
CANDIDATES = 10_000
#: The share of the demonstrations' windows that scores at most 1.
USUAL = 0.99


def calibrate(reference: Float32, episodes: Sequence[Float32]) -> dict[str, Float32]:
    """Fit the score on reference windows and calibrate it on whole episodes.

    Args:
        reference: (N, d) windows of training demonstrations.
        episodes: per calibration episode its windows (T, d).

    Returns:
        ``centre`` (d,), ``whitening`` (d, d), ``neighbours`` (k, d) in whitened coordinates, ``usual`` (2,) both
        distances as the demonstrations show them, ``maxima`` (episodes,) sorted.

    Raises:
        ValueError: there are no reference windows, or a value is not finite.
    """
    if reference.ndim != 2 or not len(reference):
        raise ValueError(f"reference windows have shape {reference.shape}; expected (N, d) with N ≥ 1")
    episodes = [windows for windows in episodes if len(windows)]
    for windows in (reference, *episodes):
        if not np.isfinite(windows).all():
            raise ValueError("windows of the demonstrations must be finite")
    centre = reference.mean(axis=0, dtype=np.float64)
    spread = np.maximum(reference.std(axis=0, dtype=np.float64), SMALLEST_SD)
    scaled = (reference - centre) / spread
    covariance = (1 - SHRINKAGE) * scaled.T @ scaled / len(scaled) + SHRINKAGE * np.eye(scaled.shape[1])
    values, vectors = np.linalg.eigh(covariance)
    whitening = (vectors / np.sqrt(np.maximum(values, SHRINKAGE * 1e-2))).T / spread
    whitened = ((reference - centre) @ whitening.T).astype(np.float32)
    order = np.random.default_rng(0).permutation(len(whitened))[: 2 * CANDIDATES]
    chosen, others = whitened[order[::2]], whitened[order[1::2]]
    neighbours = covering(chosen, NEIGHBOURS)
    usual = np.ones(2)
    if len(others):
        squared = (others * others).sum(axis=1, dtype=np.float64)
        gaps = squared + ((neighbours * neighbours).sum(axis=1) - 2.0 * others @ neighbours.T).min(axis=1)
        usual = np.sqrt([np.quantile(squared, USUAL), max(np.quantile(gaps, USUAL), 0.0)])
    tensors = {
        "centre": centre.astype(np.float32),
        "whitening": np.ascontiguousarray(whitening, dtype=np.float32),
        "neighbours": neighbours,
        "usual": np.maximum(usual, SMALLEST_SD).astype(np.float32),
        "maxima": np.zeros(0, dtype=np.float32),
    }
    score = NoveltyScore(tensors)
    maxima = [max(score.score(row) for row in windows) for windows in episodes]
    return {**tensors, "maxima": np.sort(np.array(maxima, dtype=np.float32))}


def covering(points: Float32, most: int) -> Float32:
    """Return at most ``most`` of the points (N, d), each the farthest from those before it.

    The largest distance from any point to the nearest chosen one is at most twice the least possible.
    Source: Gonzalez 1985, Theoretical Computer Science 38 (from memory).
    """
    farthest = 0
    chosen: list[int] = []
    gaps = np.full(len(points), np.inf)
    while len(chosen) < most and gaps[farthest] > 0.0:
        chosen.append(farthest)
        away = points - points[farthest]
        gaps = np.minimum(gaps, np.einsum("ij,ij->i", away, away, dtype=np.float64))
        farthest = int(gaps.argmax())
    return np.ascontiguousarray(points[chosen], dtype=np.float32)


class NoveltyScore:
    """The calibrated score, ready to serve; without calibration episodes every p-value is 1.

    Args:
        tensors: as :func:`calibrate` returns them; without ``neighbours`` the score is the Mahalanobis distance alone.

    Raises:
        KeyError: a tensor is missing.
        ValueError: the shapes do not fit each other.

    Attributes:
        d: width of a window.
        smallest_epsilon: 1/(n+1), the finest false-alarm rate that n calibration episodes can promise.
        affine: (d+1, d+1) takes a window followed by 1 to its whitened coordinates followed by 1.
    """

    def __init__(self, tensors: dict[str, Float32]) -> None:
        centre, whitening = tensors["centre"].astype(np.float64), tensors["whitening"].astype(np.float64)
        self._maxima = sorted(float(value) for value in tensors["maxima"])
        self.d = int(centre.size)
        if centre.ndim != 1 or whitening.shape != (self.d, self.d):
            raise ValueError(f"centre {centre.shape} and whitening {whitening.shape} do not fit")
        self.smallest_epsilon = 1.0 / (len(self._maxima) + 1)
        self.affine = np.zeros((self.d + 1, self.d + 1))
        self.affine[:-1, :-1] = whitening.T
        self.affine[-1, :-1] = -(whitening @ centre)
        self.affine[-1, -1] = 1.0
        neighbours, usual = tensors.get("neighbours"), tensors.get("usual")
        self._per_distance, self._per_gap, self._near = 1.0, 1.0, None
        if neighbours is not None and usual is not None:
            if neighbours.ndim != 2 or neighbours.shape[1] != self.d or not len(neighbours):
                raise ValueError(f"neighbours {neighbours.shape} do not fit windows of {self.d} values")
            if usual.shape != (2,) or not (usual > 0).all():
                raise ValueError("the usual distances must be two positive numbers")
            self._per_distance, self._per_gap = 1.0 / float(usual[0]), 1.0 / float(usual[1])
            # |z − c|² = z·z + (c·c − 2 c·z): the bracket is one product with (z, 1).
            self._near = np.column_stack([-2.0 * neighbours, (neighbours * neighbours).sum(axis=1)]).astype(np.float32)
            self._gaps = np.empty(len(neighbours), dtype=np.float32)

    def score(self, window: Float32) -> float:
        """Return the score of a window (d,); infinite if it is not finite."""
        with np.errstate(over="ignore", invalid="ignore"):
            return self._score(np.append(window, np.float32(1.0)).astype(np.float64) @ self.affine)

    def p_value(self, window: Float32) -> float:
        """Return (1 + number of calibration episodes whose maximum is at least the score) / (n + 1)."""
        return self.p_of(self.score(window))

    def p_of_whitened(self, whitened: NDArray[np.float64]) -> float:
        """Return the p-value of whitened coordinates (d,) followed by 1.

        The caller has silenced NumPy's overflow warnings.
        """
        return self.p_of(self._score(whitened))

    def _score(self, whitened: NDArray[np.float64]) -> float:
        z = whitened.astype(np.float32)
        squared = float(z.dot(z)) - 1.0
        if not math.isfinite(squared):
            return math.inf
        squared = max(squared, 0.0)
        score = math.sqrt(squared) * self._per_distance
        if self._near is not None:
            self._near.dot(z, out=self._gaps)
            gap = squared + float(self._gaps.min())
            # NaN, of an overflow, is no comparison's friend.
            score = max(score, math.sqrt(max(gap, 0.0)) * self._per_gap) if math.isfinite(gap) else math.inf
        # Rounded as the maxima are, so that equals compare as equals.
        return float(np.float32(score))

    def p_of(self, score: float) -> float:
        """Return the p-value of a score."""
        n = len(self._maxima)
        return (1 + n - bisect_left(self._maxima, score)) / (n + 1)
