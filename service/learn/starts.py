"""Weights that make roll-outs start, on average, where the demonstrations started.

A handful of demonstrations began at a handful of places. Their mean features differ from the roll-outs' for that reason
alone, and a cost fitted to the difference would teach nothing about driving. Choosing, among many sets of start states,
one that is alike, and then re-weighting whole roll-outs, takes the start out of the comparison. The same weights stand
in the start distribution and in the occupancy, so the flow constraint still holds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

from nearhand.service.simulators import Simulator

Float64 = NDArray[np.float64]
#: Least effective share of the roll-outs; the match is softened until it is met.
EFFECTIVE_SHARE = 0.4
NEWTON_STEPS = 50


def _moments(starts: Float64) -> Float64:
    rows, columns = np.triu_indices(starts.shape[1])
    return np.concatenate([starts, starts[:, rows] * starts[:, columns]], axis=1)


def _gaps(starts: NDArray[np.floating], shown: NDArray[np.floating], weights: Float64) -> Float64:
    """Return the moments (B, q) of the roll-outs' starts less the demonstrations' mean ones, in the latter's spread."""
    centre = shown.mean(axis=0, dtype=np.float64)
    spread = np.maximum(np.concatenate([starts, shown]).std(axis=0, dtype=np.float64), 1e-2)
    target = np.average(_moments((shown - centre) / spread), axis=0, weights=weights)
    return np.asarray(_moments((starts - centre) / spread) - target)


@dataclass(frozen=True)
class Wanted:
    """Where roll-outs should start: the demonstrations' first observations (E, n), in the rig's units, weights (E,).

    Of ``tries`` sets of start states that a simulator offers, the one with the nearest mean and mean products is used.
    """

    shown: NDArray[np.float64]
    weights: Float64
    tries: int = 64


def nearest_seed(simulator: Simulator, count: int, seed: int, wanted: Wanted) -> int:
    """Return the seed, of ``wanted.tries``, whose ``count`` starts are on average nearest to the wanted ones."""
    seeds = [int(one) for one in np.random.default_rng(seed).integers(2**31, size=wanted.tries)]
    sizes = [
        float(np.square(_gaps(simulator.reset(count, seed=one), wanted.shown, wanted.weights).mean(axis=0)).sum())
        for one in seeds
    ]
    return seeds[int(np.argmin(sizes))]


def balance(starts: NDArray[np.floating], shown: NDArray[np.floating], weights: Float64) -> Float64:
    """Return shares (B,) of the roll-outs, summing to one, that match the demonstrations' mean start and mean products.

    The shares are the nearest to equal ones, in relative entropy, whose moments meet the target up to a ridge.

    Args:
        starts: (B, n) first observations of the roll-outs, standardised.
        shown: (E, n) first observations of the demonstrations, standardised.
        weights: (E,) of the demonstrations.

    Source: entropy balancing (Hainmueller 2012; from memory); the dual solved by Newton's method.
    """
    count = len(starts)
    rows = _gaps(starts, shown, weights)
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
