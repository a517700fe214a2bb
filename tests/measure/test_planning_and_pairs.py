"""Paired comparison and planning, against exact values and against what then happens."""

from __future__ import annotations

from collections import Counter
from itertools import product
from typing import Any

import numpy as np
import pytest
from statsmodels.stats.proportion import proportion_confint

from nearhand.service.measure.closed_loop import Rollouts
from nearhand.service.measure.gate import judge
from nearhand.service.measure.intervals import mean_interval, proportion_interval
from nearhand.service.measure.paired import compare, sign_flip_p, truncation_bound
from nearhand.service.measure.planning import plan
from nearhand.service.rigs import Bound


def rollouts(score: list[float], success: list[float], interventions: list[int]) -> Rollouts:
    """Return served episodes of ten periods with these figures."""
    n = len(score)
    empty = np.zeros((11, n, 1))
    return Rollouts(
        empty, empty[:10], np.full(n, 10), np.zeros(n, dtype=bool), np.array(score),
        {"success": np.array(success), "time_s": np.array(score)}, [Counter(interventions=k) for k in interventions],
    )  # fmt: skip


def test_the_sign_flip_p_value_is_that_of_all_flips() -> None:
    gaps = np.array([0.4, 1.1, -0.3, 0.9, 0.7, -0.1, 1.4, 0.2])
    flips = np.array(list(product([-1, 1], repeat=len(gaps))))
    exact = np.mean(np.abs((flips * gaps).mean(axis=1)) >= abs(gaps.mean()) - 1e-12)
    assert sign_flip_p(gaps) == pytest.approx(float(exact), abs=0.02)
    assert sign_flip_p(np.zeros(8)) == 1.0


def test_the_sign_flip_test_keeps_its_level() -> None:
    generator = np.random.default_rng(0)
    ps = np.array([sign_flip_p(generator.standard_t(3, 12), seed=k) for k in range(400)])
    # 400 tests at 5 %: at most 31 rejections in 99 % of studies (binomial, SciPy: binom.ppf(0.995, 400, 0.05) = 31).
    assert (ps <= 0.05).sum() <= 31


def test_differences_are_taken_start_by_start() -> None:
    mine = rollouts([1.0, 2.0, 3.0, 4.0, 5.0, 6.0], [1, 1, 1, 0, 1, 1], [0] * 6)
    other = rollouts([0.5, 2.0, 2.0, 5.0, 4.0, 5.0], [1, 0, 1, 0, 1, 1], [5] * 6)
    rows = compare(mine, other, 2.0)
    score = rows["closed_loop.score"]
    assert score["value"] == pytest.approx(np.mean([0.25, 0.0, 0.5, -0.5, 0.5, 0.5]))
    assert (score["wins"], score["draws"], score["losses"]) == (4, 1, 1)
    success = rows["closed_loop.success"]
    assert (success["wins"], success["draws"], success["losses"]) == (1, 5, 0)
    fewer = rows["closed_loop.interventions_per_period"]
    assert fewer["value"] == pytest.approx(-0.5) and fewer["wins"] == 6
    assert rows["closed_loop.time_s"]["wins"] == 1


def measured(name: str, interval: Any) -> dict[str, Any]:
    """Return a measurement of one figure."""
    told = {"value": interval.value, "low": interval.low, "high": interval.high, "n": interval.n}
    return {"figures": {name: told}}


def test_a_proportion_needs_what_the_exact_interval_needs() -> None:
    bound = Bound(figure="closed_loop.success", at_least=0.8)
    (row,) = plan([bound], measured("closed_loop.success", proportion_interval(27, 30)), None)
    n = row["needed"]
    assert not row["met"] and n > 30
    low, _ = proportion_confint(round(0.9 * n), n, method="beta")
    before, _ = proportion_confint(round(0.9 * (n - max(1, n // 50) - 1)), n - max(1, n // 50) - 1, method="beta")
    assert low >= 0.8 > before


def test_with_the_number_told_about_every_other_measurement_passes() -> None:
    generator = np.random.default_rng(1)
    bound = Bound(figure="closed_loop.score", at_least=0.8)
    first = generator.normal(0.85, 0.2, 30)
    first += 0.85 - first.mean()
    (row,) = plan([bound], measured("closed_loop.score", mean_interval(first)), None)
    passes = [
        judge([bound], measured("closed_loop.score", mean_interval(generator.normal(0.85, 0.2, row["needed"]))), None)
        for _ in range(200)
    ]
    # True probability one half: 74 to 126 of 200 in 99.98 % of studies (binomial); the spread is itself estimated.
    assert 70 <= sum(verdict[0]["met"] for verdict in passes) <= 140


def test_what_lies_outside_the_bound_needs_a_better_version() -> None:
    bounds = [Bound(figure="closed_loop.score", at_least=0.8), Bound(figure="action_error.rmse_fraction", at_most=0.1)]
    rows = plan(bounds, measured("closed_loop.score", mean_interval(np.full(9, 0.7))), None)
    assert [row["needed"] for row in rows] == [None, None]
    assert "must be better" in rows[0]["sentence"] and "not measured" in rows[1]["sentence"]


def test_the_truncation_bound_holds_for_a_known_tail() -> None:
    # Constant features: within and beyond the end the sides differ alike; d∞ = d_T, and any tail of the same size
    # keeps |d∞ − d_T| within 2·m·d_T.
    mass, inside = 0.1, 0.5
    bound = truncation_bound(mass, {"feature_distance.l2": {"high": inside}, "mmd2": {"high": 1.0}})
    assert set(bound) == {"feature_distance.l2"}
    for tail in (-inside, 0.0, inside):
        endless = abs((1 - mass) * inside + mass * tail)
        assert abs(endless - inside) <= bound["feature_distance.l2"] + 1e-12
