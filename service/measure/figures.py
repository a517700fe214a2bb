"""Figures as they stand in a measurement: value, interval, unit, and the floor and the clone beside them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.episodes.episode import Episode
from nearhand.service.measure.closed_loop import Rollouts
from nearhand.service.measure.distances import (
    KERNEL_SAMPLE,
    ActionErrors,
    FeatureMap,
    debiased_square,
    dual_norms,
    energy_distance_squared,
    joined,
    median_bandwidth,
    mmd_squared,
)
from nearhand.service.measure.intervals import (
    FEWEST,
    Interval,
    bootstrap,
    mean_interval,
    permutation_p,
    proportion_interval,
    tails,
)
from nearhand.service.rigs import Rig

Array = NDArray[np.float64]
Figure = dict[str, Any]
HALVES = 200
CLASSES = ("l2", "l1", "linf", "simplex")


def figure(interval: Interval, unit: str, better: str) -> Figure:
    """Return a figure as JSON; what is not finite becomes null."""

    def number(value: float) -> float | None:
        return float(value) if math.isfinite(value) else None

    return {
        "value": number(interval.value), "low": number(interval.low), "high": number(interval.high), "n": interval.n,
        "unit": unit, "better": better,
    }  # fmt: skip


def action_figures(errors: ActionErrors, rig: Rig) -> dict[str, Figure]:
    """Return held-out action errors: per channel in units, over all as a fraction of range, and the likelihood."""
    n = len(errors.nll)
    found: dict[str, Figure] = {}
    for index, channel in enumerate(rig.actions):
        column = errors.squared[:, index]
        interval = bootstrap(lambda rows, column=column: float(np.sqrt(column[rows].mean())), n)  # type: ignore[misc]
        found[f"action_error.rmse.{channel.name}"] = figure(interval, channel.unit, "low")
    ranges = np.array([channel.high - channel.low for channel in rig.actions])
    share = (errors.squared / ranges**2).mean(axis=1)
    interval = bootstrap(lambda rows: float(np.sqrt(share[rows].mean())), n)
    found["action_error.rmse_fraction"] = figure(interval, "of range", "low")
    found["action_error.nll"] = figure(mean_interval(errors.nll), "nat", "low")
    return found


def feature_figures(mine: Array, experts: Array) -> dict[str, Figure]:
    """Return feature distances in each cost class, with the expert's floor; rows are per-episode features."""
    n, m = len(mine), len(experts)
    found: dict[str, Figure] = {}
    generator = np.random.default_rng(0)
    draws = [(generator.integers(0, n, n), generator.integers(0, m, m)) for _ in range(500)]
    sampled = [dual_norms(mine[a].mean(axis=0) - experts[b].mean(axis=0)) for a, b in draws]
    value = dual_norms(mine.mean(axis=0) - experts.mean(axis=0))
    halves = [_half_gap(experts, generator) for _ in range(HALVES)] if m >= 4 else []
    for name in CLASSES:
        interval = Interval(value[name], *_span([row[name] for row in sampled], min(n, m)), n)
        found[f"feature_distance.{name}"] = figure(interval, "", "low")
        if halves:
            rows = [row[name] for row in halves]
            floor = Interval(float(np.mean(rows)), float(np.quantile(rows, 0.025)), float(np.quantile(rows, 0.975)), m)
            found[f"feature_distance.{name}"]["floor"] = figure(floor, "", "low")
    if n > 1 and m > 1:
        squares = [debiased_square(mine[a], experts[b]) for a, b in draws]
        low, high = _span(squares, min(n, m))
        found["feature_distance.l2_squared_debiased"] = figure(
            Interval(debiased_square(mine, experts), float(low), float(high), n), "", "low"
        )
        p = permutation_p(mine, experts)
        found["feature_distance.p_same"] = figure(Interval(p, math.nan, math.nan, n + m), "", "high")
    return found


def _span(values: Sequence[float], n: int) -> tuple[float, float]:
    """Return the interval that bootstrap values of ``n`` episodes make; NaN where there are too few for one."""
    if n < FEWEST:
        return math.nan, math.nan
    low, high = np.quantile(values, tails(n))
    return float(low), float(high)


def _half_gap(experts: Array, generator: np.random.Generator) -> dict[str, float]:
    order = generator.permutation(len(experts))
    half = len(experts) // 2
    return dual_norms(experts[order[:half]].mean(axis=0) - experts[order[half:]].mean(axis=0))


def sample_figures(mine: Rollouts, experts: Sequence[Episode], features: FeatureMap) -> dict[str, Figure]:
    """Return kernel and energy distances between visited (observation, action) pairs, resampled by episode."""
    ours = [_scaled(features, *mine.episode(index)) for index in range(len(mine.lengths))]
    theirs = [_scaled(features, item.observations, item.actions) for item in experts]
    generator = np.random.default_rng(0)
    bandwidth = median_bandwidth(_thinned(theirs, range(len(theirs)), generator))

    def both(a: Sequence[int], b: Sequence[int]) -> tuple[float, float]:
        x, y = _thinned(ours, a, generator), _thinned(theirs, b, generator)
        return mmd_squared(x, y, bandwidth), energy_distance_squared(x, y)

    n, m = len(ours), len(theirs)
    value = both(range(n), range(m))
    draws = [both(generator.integers(0, n, n).tolist(), generator.integers(0, m, m).tolist()) for _ in range(40)]
    order = [generator.permutation(m) for _ in range(20)] if m >= 4 else []
    floors = []
    for row in order:
        x, y = (_thinned(theirs, part.tolist(), generator) for part in (row[: m // 2], row[m // 2 :]))
        floors.append((mmd_squared(x, y, bandwidth), energy_distance_squared(x, y)))
    found = {}
    for index, name in enumerate(("mmd2", "energy_distance")):
        low, high = _span([row[index] for row in draws], min(n, m))
        found[name] = figure(Interval(value[index], float(low), float(high), n), "", "low")
        if floors:
            column = [row[index] for row in floors]
            low, high = np.quantile(column, [0.025, 0.975])
            found[name]["floor"] = figure(Interval(float(np.mean(column)), float(low), float(high), m), "", "low")
    return found


def _scaled(features: FeatureMap, observations: NDArray[np.floating], actions: NDArray[np.floating]) -> Array:
    rows = joined(observations[: len(actions)], actions)
    return np.asarray((rows - features.mean) / features.scale / np.sqrt(rows.shape[1]))


def _thinned(parts: Sequence[Array], chosen: Sequence[int] | range, generator: np.random.Generator) -> Array:
    """Return at most KERNEL_SAMPLE rows, drawn evenly from the chosen episodes."""
    each = max(2, KERNEL_SAMPLE // max(len(chosen), 1))
    return np.concatenate([part[generator.integers(0, len(part), each)] for part in (parts[i] for i in chosen)])


def closed_loop_figures(served: Rollouts, expert: Rollouts | None, chance: Rollouts, rig: Rig) -> dict[str, Figure]:
    """Return score, success, outcomes and interventions of served episodes, paired by start with expert and chance."""
    n = len(served.lengths)
    found: dict[str, Figure] = {}
    if expert is not None:
        ours, best, worst = served.score, expert.score, chance.score

        def normalised(rows: NDArray[np.int64]) -> float:
            span = float(best[rows].mean() - worst[rows].mean())
            return float(ours[rows].mean() - worst[rows].mean()) / span if abs(span) > 1e-12 else math.nan

        found["closed_loop.score"] = figure(bootstrap(normalised, n), "0 random, 1 expert", "high")
    successes = int(served.outcomes["success"].sum())
    found["closed_loop.success"] = figure(proportion_interval(successes, n), "", "high")
    if expert is not None:
        floor = proportion_interval(int(expert.outcomes["success"].sum()), len(expert.lengths))
        found["closed_loop.success"]["floor"] = figure(floor, "", "high")
    for name, values in served.outcomes.items():
        if name != "success":
            found[f"closed_loop.{name}"] = figure(mean_interval(values), "", "low")
            if expert is not None:
                found[f"closed_loop.{name}"]["floor"] = figure(mean_interval(expert.outcomes[name]), "", "low")
    minutes = served.lengths * rig.timing.period_s / 60
    interventions = np.array([counts["interventions"] for counts in served.counts], dtype=np.float64)
    rate = bootstrap(lambda rows: float(interventions[rows].sum() / minutes[rows].sum()), n)
    found["closed_loop.interventions_per_minute"] = figure(rate, "1/min", "low")
    novel = sum(counts["novel"] > 0 for counts in served.counts)
    found["closed_loop.novelty_trip_rate"] = figure(proportion_interval(novel, n), "", "low")
    return found
