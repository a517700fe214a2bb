"""Figures that tell how well each half of a proximal-point step was done, and what distance chance alone would give."""

from __future__ import annotations

import numpy as np
import torch
from torch import Tensor

from nearhand.service.learn.features import Float64


def start_free_share(each: Float64, starts: Float64, shares: Float64) -> float:
    """Return the share of the episodes' feature variance that their start states do not explain, in (0, 1].

    Roll-outs that are matched to the demonstrations' starts have only this share of the variance left to differ by.

    Args:
        each: (B, k) discounted mean features of each episode.
        starts: (B, n) first observations.
        shares: (B,) weights, summing to one.

    Source: residual variance of weighted least squares with its degrees of freedom; 1 where B is too small to tell.
    """
    count, n = starts.shape
    if count < 2 * (n + 1):
        return 1.0
    root = np.sqrt(shares)[:, None]
    design = root * np.concatenate([np.ones((count, 1)), starts], axis=1)
    total = root * (each - shares @ each)
    rest = root * each - design @ np.linalg.lstsq(design, root * each, rcond=None)[0]
    rank = int(np.linalg.matrix_rank(design))
    whole = float(np.square(total).sum())
    if whole <= 0:
        return 1.0
    return float(np.clip(np.square(rest).sum() / whole * (count - 1) / (count - rank), 1e-3, 1.0))


def excitation(features: Tensor, log_weight: Tensor) -> float:
    """Return λ_min of the features' second moments under the visited occupancy, the absorbing row left out.

    Args:
        features: (N, k).
        log_weight: (N + 1,) as in ``objective.Sample``.

    Near zero, some direction of the cost is not visited and cannot be learnt (persistent excitation fails).
    """
    weights = torch.softmax(log_weight[:-1].double(), dim=0)
    rows = features.double()
    return float(torch.linalg.eigvalsh((rows * weights[:, None]).T @ rows)[0])


def dual_gap(cost: Tensor, for_cost: Tensor, for_critic: Tensor, moved: float) -> float:
    """Return to first order what the evaluation still misses: G* - G within reach of what it has moved.

    For the cost the reach is its whole class, the unit ball: the Frank-Wolfe gap |g| - ⟨g, w⟩. The critic's weights
    have no bound; for them it is the distance that this evaluation moved them. G is concave in (w, Q), so for a critic
    linear in its weights this bounds the true gap over that reach. Source: Jaggi 2013 (the gap; from memory).
    """
    first = torch.linalg.vector_norm(for_cost) - for_cost @ cost
    return float(first.clamp_min(0) + torch.linalg.vector_norm(for_critic) * moved)
