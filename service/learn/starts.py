"""Weights that make roll-outs start, on average, where the demonstrations started.

A handful of demonstrations began at a handful of places. Their mean features differ from the roll-outs' for that reason
alone, and a cost fitted to the difference would teach nothing about driving. Re-weighting whole roll-outs takes the
start out of the comparison; the weights are the same in the start distribution and in the occupancy, so the flow
constraint still holds.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

Float64 = NDArray[np.float64]
#: Least effective share of the roll-outs; the match is softened until it is met.
EFFECTIVE_SHARE = 0.4
NEWTON_STEPS = 50


def _moments(starts: Float64) -> Float64:
    return np.concatenate([starts, np.square(starts)], axis=1)


def balance(starts: NDArray[np.floating], shown: NDArray[np.floating], weights: Float64) -> Float64:
    """Return shares (B,) of the roll-outs, summing to one, that match the demonstrations' mean start and its square.

    The shares are the nearest to equal ones, in relative entropy, whose moments meet the target up to a ridge.

    Args:
        starts: (B, n) first observations of the roll-outs, standardised.
        shown: (E, n) first observations of the demonstrations, standardised.
        weights: (E,) of the demonstrations.

    Source: entropy balancing (Hainmueller 2012; from memory); the dual solved by Newton's method.
    """
    count = len(starts)
    spread = np.maximum(starts.std(axis=0, dtype=np.float64), 1e-2)
    centre = starts.mean(axis=0, dtype=np.float64)
    rows = _moments((starts - centre) / spread)
    target = np.average(_moments((shown - centre) / spread), axis=0, weights=weights)
    rows = rows - target
    ridge = 1e-3
    for _ in range(20):
        shares = _shares(rows, ridge)
        if 1 / np.square(shares).sum() >= EFFECTIVE_SHARE * count:
            return shares
        ridge *= 3
    return np.full(count, 1 / count)


def _shares(rows: Float64, ridge: float) -> Float64:
    """Return softmax shares whose multipliers minimise log Σ exp(rows·y) + ridge/2 |y|²."""
    y = np.zeros(rows.shape[1])

    def dual(multipliers: Float64) -> float:
        return float(logsumexp(rows @ multipliers) + 0.5 * ridge * multipliers @ multipliers)

    shares = np.full(len(rows), 1 / len(rows))
    for _ in range(NEWTON_STEPS):
        gradient = shares @ rows + ridge * y
        if np.abs(gradient).max() < 1e-10:
            break
        middle = rows - shares @ rows
        hessian = (middle.T * shares) @ middle + ridge * np.eye(len(y))
        move = np.linalg.solve(hessian, gradient)
        size, here = 1.0, dual(y)
        while size > 1e-8 and dual(y - size * move) > here - 1e-4 * size * gradient @ move:
            size /= 2
        y = y - size * move
        logits = rows @ y
        shares = np.exp(logits - logsumexp(logits))
    return shares
