"""Intervals over episodes: the episode is the unit, never the control period.

NaN in, NaN out: nothing here turns a missing figure into a number.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import beta, norm, t

Array = NDArray[np.float64]
LEVEL = 0.95
#: With fewer episodes no bootstrap covers as it says (three normal values: 74 %), so there is no interval at all.
FEWEST = 6
RESAMPLES = 2_000


@dataclass(frozen=True, slots=True)
class Interval:
    """A value with its two-sided 95 % interval; ``n`` episodes stand behind it."""

    value: float
    low: float
    high: float
    n: int


def tails(n: int) -> tuple[float, float]:
    """Return the quantiles of bootstrap values that make a 95 % interval from ``n`` episodes.

    The percentile interval of few episodes is too narrow, by √((n−1)/n) and by taking the normal for Student's t; the
    expanded one corrects both: Φ(−√(n/(n−1))·t₀.₉₇₅,ₙ₋₁) on either side.
    Source: Hesterberg 2015, The American Statistician 69:371–386 (from memory); coverage is tested.
    """
    if n < FEWEST:
        return math.nan, math.nan
    tail = float(norm.cdf(-math.sqrt(n / (n - 1)) * t.ppf((1 + LEVEL) / 2, n - 1)))
    return tail, 1 - tail


def bootstrap(statistic: Callable[[NDArray[np.int64]], float], n: int, *, seed: int = 0) -> Interval:
    """Return the expanded percentile bootstrap interval of a statistic of episodes; see :func:`tails`.

    Skewed figures of few episodes are still covered less often than 95 % (tested: 88 % and more for ten exponential
    values).

    Args:
        statistic: maps episode indices (with repetitions) to the figure.
        n: number of episodes; below FEWEST there is no interval and its ends are NaN.
    """
    everyone = np.arange(n)
    value = float(statistic(everyone)) if n else math.nan
    if n < FEWEST or not math.isfinite(value):
        return Interval(value, math.nan, math.nan, n)
    generator = np.random.default_rng(seed)
    draws = generator.integers(0, n, size=(RESAMPLES, n))
    values = np.array([statistic(row) for row in draws])
    if not np.isfinite(values).all():
        return Interval(value, math.nan, math.nan, n)
    low, high = np.quantile(values, tails(n))
    return Interval(value, float(low), float(high), n)


def mean_interval(values: Array, *, seed: int = 0) -> Interval:
    """Return the bootstrap interval of the mean of per-episode values (n,)."""
    values = np.asarray(values, dtype=np.float64)
    n = len(values)
    value = float(values.mean()) if n else math.nan
    if n < FEWEST or not math.isfinite(value):
        return Interval(value, math.nan, math.nan, n)
    draws = np.random.default_rng(seed).integers(0, n, size=(RESAMPLES, n))
    low, high = np.quantile(values[draws].mean(axis=1), tails(n))
    return Interval(value, float(low), float(high), n)


def proportion_interval(successes: int, n: int) -> Interval:
    """Return the exact (Clopper–Pearson) interval of a proportion.

    Source: Clopper & Pearson 1934, Biometrika 26:404; in terms of beta quantiles.
    """
    if n == 0:
        return Interval(math.nan, math.nan, math.nan, 0)
    tail = (1 - LEVEL) / 2
    low = 0.0 if successes == 0 else float(beta.ppf(tail, successes, n - successes + 1))
    high = 1.0 if successes == n else float(beta.ppf(1 - tail, successes + 1, n - successes))
    return Interval(successes / n, low, high, n)


def permutation_p(mine: Array, theirs: Array, *, seed: int = 0, permutations: int = 999) -> float:
    """Return the p-value of "both sets of episode features have the same mean", by permuting episode labels.

    Args:
        mine, theirs: (n, k) and (m, k) per-episode features.
    """
    together = np.concatenate((mine, theirs))
    n = len(mine)

    def gap(order: NDArray[np.int64]) -> float:
        return float(np.linalg.norm(together[order[:n]].mean(axis=0) - together[order[n:]].mean(axis=0)))

    observed = gap(np.arange(len(together)))
    generator = np.random.default_rng(seed)
    at_least = sum(gap(generator.permutation(len(together))) >= observed - 1e-12 for _ in range(permutations))
    return (1 + at_least) / (permutations + 1)
