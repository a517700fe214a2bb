"""Choosing: never something measurably farther from the expert than the clone."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from nearhand.service.errors import ConfigError
from nearhand.service.learn.demonstrations import Demonstration
from nearhand.service.learn.features import FEATURE_SD_FLOOR, fit_features
from nearhand.service.learn.selection import (
    Trial,
    demonstrated_segments,
    distance,
    expert_floor,
    known_mean,
    share_nearer,
)
from nearhand.service.recipes import Recipe, recipe_from_map


def trial(rows: Any) -> Trial:
    """Return a trial of given segment features."""
    return Trial(rows, np.full(len(rows), 1 / len(rows)), 0.0, 0.0)


def test_nearer_candidate_is_found_nearer_and_an_equal_one_is_not_surely_so(generator: np.random.Generator) -> None:
    expert = generator.normal(0, 1, (12, 6))
    clone = trial(generator.normal(0.8, 1, (40, 6)))
    better, same = trial(clone.each - 0.6), trial(clone.each + 0.0)
    assert share_nearer(better, clone, expert, generator) > 0.95
    assert share_nearer(same, clone, expert, generator) == 0.0
    assert share_nearer(clone, better, expert, generator) < 0.05


def test_fresh_expert_episodes_are_about_a_floor_away(generator: np.random.Generator) -> None:
    # E |mean_a - mean_b|² = trace(C)(1/n + 1/m) for independent samples of one law; 300 repetitions.
    expert = generator.normal(0, 1, (20, 8))
    floor = expert_floor(expert, 30, 2)
    shares = np.full(30, 1 / 30)
    found = [distance(generator.normal(0, 1, (30, 8)), shares, generator.normal(0, 1, (20, 8)), 2) for _ in range(300)]
    assert floor == pytest.approx(float(np.sqrt(np.mean(np.square(found)))), rel=0.25)


def test_parts_after_a_cut_are_unknown_and_after_a_terminal_absorbed(generator: np.random.Generator) -> None:
    windows = generator.standard_normal((11, 2)).astype(np.float32)
    actions = generator.standard_normal((10, 1)).astype(np.float32)
    cut, fell = (Demonstration(windows, actions, 1.0, ended) for ended in (False, True))
    features = fit_features(2, [cut])
    rows = demonstrated_segments(features, [cut, fell], 20, 4).reshape(2, 4, -1)
    assert np.isfinite(rows[:, :2]).all()
    assert np.isnan(rows[0, 2:]).all()
    np.testing.assert_allclose(rows[1, 2:, -1], 1 / FEATURE_SD_FLOOR)
    assert (rows[1, 2:, :-1] == 0).all()
    mean = known_mean(np.array([[1.0, np.nan], [3.0, np.nan]]), np.array([0.25, 0.75]))
    assert mean[0] == 2.5
    assert np.isnan(mean[1])


def test_empty_recipe_is_valid_and_wrong_ones_are_named() -> None:
    assert recipe_from_map({}) == Recipe()
    assert recipe_from_map({"clone": {"hidden": [8]}}).clone.hidden == (8,)
    for wrong, where in (
        ({"method": "magic"}, "method"),
        ({"clone": {"steps": 0}}, r"clone\.steps"),
        ({"online": {"discount": 1.0}}, r"online\.discount"),
        ({"seeds": 1}, "seeds"),
        ({"online": {"kl_first": float("nan")}}, r"online\.kl_first"),
    ):
        with pytest.raises(ConfigError, match=where):
            recipe_from_map(wrong)


def test_built_in_recipes_are_valid() -> None:
    import tomllib

    from nearhand.configs import builtin_names, builtin_text

    names = builtin_names("recipes")
    assert {"standard", "quick", "clone-only", "offline"} <= set(names)
    for name in names:
        recipe_from_map(tomllib.loads(builtin_text("recipes", name)))
