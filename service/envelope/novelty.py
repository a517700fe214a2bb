"""Novelty: how unlike the demonstrations an observation is, as a conformal p-value.

Score: Mahalanobis distance of the policy's window from the training demonstrations, with a shrunk covariance. It is
calibrated by split conformal prediction on the **maximum over each calibration episode**, since the steps within an
episode are not exchangeable: of fresh episodes like the demonstrations, at most a fraction ε has any p-value ≤ ε.
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


def calibrate(reference: Float32, episodes: Sequence[Float32]) -> dict[str, Float32]:
    """Fit the score on reference windows and calibrate it on whole episodes.

    Args:
        reference: (N, d) windows of training demonstrations.
        episodes: per calibration episode its windows (T, d).

    Returns:
        ``centre`` (d,), ``whitening`` (d, d), ``maxima`` (episodes,) sorted. A further score would bring its own
        tensors under further names.

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
    tensors = {
        "centre": centre.astype(np.float32),
        "whitening": np.ascontiguousarray(whitening, dtype=np.float32),
        "maxima": np.zeros(0, dtype=np.float32),
    }
    score = NoveltyScore(tensors)
    maxima = [max(score.score(row) for row in windows) for windows in episodes]
    return {**tensors, "maxima": np.sort(np.array(maxima, dtype=np.float32))}


class NoveltyScore:
    """The calibrated score, ready to serve; without calibration episodes every p-value is 1.

    Args:
        tensors: as :func:`calibrate` returns them.

    Raises:
        KeyError: a tensor is missing.
        ValueError: the shapes do not fit each other.

    Attributes:
        d: width of a window.
        smallest_epsilon: 1/(n+1), the finest false-alarm rate that n calibration episodes can promise.
    """

    def __init__(self, tensors: dict[str, Float32]) -> None:
        self._centre = tensors["centre"]
        self._whitening = tensors["whitening"]
        self._maxima = sorted(float(value) for value in tensors["maxima"])
        self.d = int(self._centre.size)
        if self._centre.ndim != 1 or self._whitening.shape != (self.d, self.d):
            raise ValueError(f"centre {self._centre.shape} and whitening {self._whitening.shape} do not fit")
        self.smallest_epsilon = 1.0 / (len(self._maxima) + 1)

    def score(self, window: Float32) -> float:
        """Return the distance of a window (d,); infinite if it is not finite."""
        with np.errstate(over="ignore", invalid="ignore"):
            return self._distance(window)

    def p_value(self, window: Float32) -> float:
        """Return (1 + number of calibration episodes whose maximum is at least the score) / (n + 1)."""
        return self.p_of(self.score(window))

    def p_value_bare(self, window: Float32) -> float:
        """Return the p-value where the caller has silenced NumPy's overflow warnings already."""
        return self.p_of(self._distance(window))

    def _distance(self, window: Float32) -> float:
        gap = self._whitening.dot(window - self._centre)
        squared = float(gap.dot(gap))
        # Rounded as the maxima are, so that equals compare as equals.
        return float(np.float32(math.sqrt(squared))) if math.isfinite(squared) else math.inf

    def p_of(self, score: float) -> float:
        """Return the p-value of a score."""
        n = len(self._maxima)
        return (1 + n - bisect_left(self._maxima, score)) / (n + 1)
