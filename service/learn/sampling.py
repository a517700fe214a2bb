"""From roll-outs or demonstrations to the weighted transitions that one evaluation uses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import torch
from numpy.typing import NDArray

from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.features import CostFeatures, Float64
from nearhand.service.learn.objective import Sample
from nearhand.service.learn.rollouts import Rollouts
from nearhand.service.policy.network import Float32


@dataclass(frozen=True)
class Occupancy:
    """The discounted occupancy of B episodes.

    Attributes:
        weights: (B, T) of the lived periods; with ``absorbing`` they sum to one.
        absorbing: mass on the absorbing state.
        total: mean mass of an episode before this normalisation.
    """

    weights: Float64
    absorbing: float
    total: float


def occupancy(rollouts: Rollouts, discount: float) -> Occupancy:
    """Return the occupancy: (1-g) g^t per lived period, g^T on the absorbing state after a true terminal only."""
    lengths, periods = rollouts.lengths, rollouts.asked.shape[1]
    powers = (1 - discount) * discount ** np.arange(periods)
    weights = rollouts.shares[:, None] * powers * (np.arange(periods) < lengths[:, None])
    tail = float((rollouts.shares * rollouts.terminated * discount**lengths).sum())
    total = float(weights.sum()) + tail
    return Occupancy(weights / total, tail / total, total)


def systematic(weights: Float64, count: int, generator: np.random.Generator) -> NDArray[np.int64]:
    """Return ``count`` indices drawn by systematic resampling. Source: Kitagawa 1996."""
    edges = np.cumsum(weights)
    points = (generator.random() + np.arange(count)) / count * edges[-1]
    return np.asarray(np.minimum(np.searchsorted(edges, points), len(weights) - 1), dtype=np.int64)


def mean_features(features: CostFeatures, rollouts: Rollouts, discount: float) -> Float64:
    """Return the roll-outs' mean features (k + 1,), the absorbing mass last."""
    count, periods = rollouts.asked.shape[:2]
    mass = occupancy(rollouts, discount)
    flat = features(
        rollouts.windows[:, :-1].reshape(count * periods, -1), rollouts.applied.reshape(count * periods, -1)
    )
    mean = np.einsum("bt,btk->k", mass.weights, flat.reshape(count, periods, -1).astype(np.float64))
    return np.append(mean, mass.absorbing)


def draw_sample(
    features: CostFeatures,
    rollouts: Rollouts,
    reference: Actor,
    discount: float,
    transitions: int,
    generator: np.random.Generator,
) -> Sample:
    """Return the transitions of one evaluation: all of them, or ``transitions`` resampled by their weight."""
    count, periods = rollouts.asked.shape[:2]
    mass = occupancy(rollouts, discount)
    lived = np.flatnonzero(mass.weights.ravel() > 0)
    weights = mass.weights.ravel()[lived]
    if len(lived) > transitions:
        lived = lived[systematic(weights, transitions, generator)]
        weights = np.full(transitions, weights.sum() / transitions)
    episode, period = np.divmod(lived, periods)
    first = np.arange(count) * (periods + 1)
    last = first + rollouts.lengths
    here = episode * (periods + 1) + period
    rows, places = np.unique(np.concatenate([here, here + 1, first, last]), return_inverse=True)
    table: Float32 = rollouts.windows.reshape(count * (periods + 1), -1)[rows]
    ends = rollouts.terminated[episode] & (period + 1 == rollouts.lengths[episode])
    n = len(lived)
    with np.errstate(divide="ignore"):
        log_weight = np.log(np.append(weights, mass.absorbing))
    share = (1 - discount) * rollouts.shares / mass.total
    flow_last = np.where(rollouts.terminated, 0.0, share * discount**rollouts.lengths)

    def whole(array: NDArray[np.int64]) -> torch.Tensor:
        return torch.from_numpy(np.ascontiguousarray(array))

    def real(array: NDArray[np.floating]) -> torch.Tensor:
        return torch.from_numpy(np.ascontiguousarray(array, dtype=np.float32))

    return Sample(
        windows=real(table),
        mean=real(reference.mean(table)),
        features=real(
            features(
                rollouts.windows.reshape(count * (periods + 1), -1)[here],
                rollouts.applied.reshape(count * periods, -1)[lived],
            )
        ),
        actions=real(rollouts.asked.reshape(count * periods, -1)[lived]),
        here=whole(places[:n]),
        there=whole(places[n : 2 * n]),
        ends=torch.from_numpy(ends),
        log_weight=real(log_weight),
        first=whole(places[2 * n : 2 * n + count]),
        last=whole(places[2 * n + count :]),
        flow_first=real(share),
        flow_last=real(flow_last),
    )
