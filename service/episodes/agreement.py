"""What can be said of demonstrations only together: do they agree, and how much of the space do they cover."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from nearhand.service.episodes.episode import Episode

NEIGHBOURS = 8
#: States looked at and states looked among; more cost time and tell little more.
MOST_QUERIES = 2_000
MOST_STATES = 10_000


@dataclass(frozen=True, slots=True)
class Disagreement:
    """How different the actions are at similar observations of different episodes.

    Attributes:
        unexplained: per action channel, variance of the actions at the nearest observations of other episodes over
            the variance of all actions: 0 when the observation settles the action, about 1 when it tells nothing.
        between_operators: mean squared difference of actions to the nearest observations of other operators, over
            that to the same operator's other episodes; about 1 when they drive alike; None with one operator.
        n: how many observations were looked at.
    """

    unexplained: NDArray[np.float64]
    between_operators: float | None
    n: int


@dataclass(frozen=True, slots=True)
class Coverage:
    """How the observations spread, each channel standardised.

    Attributes:
        smallest_eigenvalue: of the covariance; near 0 when some channels follow from others.
        effective_dimension: (Σλ)² / Σλ², between 1 and the number of channels that vary.
        varying: indices of channels that vary.
        direction: (len(varying),) the direction with the smallest eigenvalue.
    """

    smallest_eigenvalue: float
    effective_dimension: float
    varying: NDArray[np.intp]
    direction: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Samples:
    """Finite samples of all episodes together: observations (N, n), actions (N, m), episode and operator numbers."""

    observations: NDArray[np.float64]
    actions: NDArray[np.float64]
    episode: NDArray[np.intp]
    operator: NDArray[np.intp]


def pool(episodes: Sequence[Episode]) -> Samples:
    """Return all samples with finite values."""
    observations = np.concatenate([episode.observations[:-1] for episode in episodes]).astype(np.float64)
    actions = np.concatenate([episode.actions for episode in episodes]).astype(np.float64)
    lengths = [episode.length for episode in episodes]
    names = {name: number for number, name in enumerate(dict.fromkeys(episode.operator for episode in episodes))}
    good = np.isfinite(observations).all(axis=1) & np.isfinite(actions).all(axis=1)
    return Samples(
        observations=observations[good],
        actions=actions[good],
        episode=np.repeat(np.arange(len(episodes)), lengths)[good],
        operator=np.repeat([names[episode.operator] for episode in episodes], lengths)[good],
    )


def disagreement(samples: Samples, *, seed: int = 0) -> Disagreement | None:
    """Return how far actions differ at similar observations; None with fewer than two episodes to compare."""
    if np.unique(samples.episode).size < 2:
        return None
    generator = np.random.default_rng(seed)
    kept = np.sort(generator.permutation(samples.episode.size)[:MOST_STATES])
    observations, actions = samples.observations[kept], samples.actions[kept]
    episode, operator = samples.episode[kept], samples.operator[kept]
    spread = observations.std(axis=0)
    states = (observations - observations.mean(axis=0)) / np.where(spread > 0, spread, 1.0)
    asked = np.sort(generator.permutation(kept.size)[:MOST_QUERIES])
    variance = actions.var(axis=0)
    unexplained, n = _local_variance(states, actions, episode, asked)
    if not n:
        return None
    between = None
    if np.unique(operator).size > 1:
        own = _squared_gap(states, actions, episode, operator, asked, variance, same=True)
        other = _squared_gap(states, actions, episode, operator, asked, variance, same=False)
        both = np.isfinite(own) & np.isfinite(other)
        if both.any() and own[both].mean() > 0:
            between = float(other[both].mean() / own[both].mean())
    return Disagreement(unexplained / np.where(variance > 0, variance, 1.0), between, n)


def _neighbours_of_others(
    states: NDArray[np.float64], group: NDArray[np.intp], asked: NDArray[np.intp], among: NDArray[np.intp]
) -> NDArray[np.intp]:
    """Return (len(asked), NEIGHBOURS) indices of the nearest states of other groups, -1 rows where too few."""
    result = np.full((asked.size, NEIGHBOURS), -1, dtype=np.intp)
    for one in np.unique(group[asked]):
        others = among[group[among] != one]
        if others.size >= NEIGHBOURS:
            own = np.flatnonzero(group[asked] == one)
            _, found = cKDTree(states[others]).query(states[asked[own]], k=NEIGHBOURS)
            result[own] = others[found]
    return result


def _local_variance(
    states: NDArray[np.float64], actions: NDArray[np.float64], episode: NDArray[np.intp], asked: NDArray[np.intp]
) -> tuple[NDArray[np.float64], int]:
    """Return the mean variance of actions at the nearest states of other episodes, (m,), and of how many states."""
    near = _neighbours_of_others(states, episode, asked, np.arange(states.shape[0]))
    usable = near[:, 0] >= 0
    if not usable.any():
        return np.zeros(actions.shape[1]), 0
    return np.asarray(actions[near[usable]].var(axis=1, ddof=1).mean(axis=0)), int(usable.sum())


def _squared_gap(
    states: NDArray[np.float64],
    actions: NDArray[np.float64],
    episode: NDArray[np.intp],
    operator: NDArray[np.intp],
    asked: NDArray[np.intp],
    variance: NDArray[np.float64],
    *,
    same: bool,
) -> NDArray[np.float64]:
    """Return, per asked state, the mean squared difference of its action to those nearby, in units of variance.

    The nearby ones are those of the same operator's other episodes, or of other operators; NaN where too few.
    """
    scale = np.where(variance > 0, variance, 1.0)
    result = np.full(asked.size, np.nan)
    for one in np.unique(operator):
        own = np.flatnonzero(operator[asked] == one)
        among = np.flatnonzero((operator == one) == same)
        if not own.size or among.size < NEIGHBOURS:
            continue
        group = episode if same else operator
        near = _neighbours_of_others(states, group, asked[own], among)
        usable = near[:, 0] >= 0
        gap = actions[near[usable]] - actions[asked[own[usable]]][:, None, :]
        result[own[usable]] = (gap**2 / scale).mean(axis=(1, 2))
    return result


def coverage(samples: Samples) -> Coverage | None:
    """Return how the observations spread; None with fewer than two samples or no channel that varies."""
    if samples.episode.size < 2:
        return None
    spread = samples.observations.std(axis=0)
    size = np.maximum(np.abs(samples.observations).max(axis=0), 1e-12)
    varying = np.flatnonzero(spread > 1e-6 * size)
    if not varying.size:
        return None
    standard = (samples.observations[:, varying] - samples.observations[:, varying].mean(axis=0)) / spread[varying]
    values, vectors = np.linalg.eigh(standard.T @ standard / standard.shape[0])
    values = np.maximum(values, 0.0)
    return Coverage(
        smallest_eigenvalue=float(values[0]),
        effective_dimension=float(values.sum() ** 2 / (values**2).sum()),
        varying=varying,
        direction=vectors[:, 0],
    )
