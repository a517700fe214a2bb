"""Distances against closed forms for Gaussians and an independent kernel library."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.stats import energy_distance
from sklearn.metrics.pairwise import rbf_kernel
from torch import from_numpy
from torch.distributions import Normal

from nearhand.service.episodes.episode import Episode
from nearhand.service.measure.distances import (
    FeatureMap,
    action_errors,
    debiased_square,
    dual_norms,
    energy_distance_squared,
    mmd_squared,
    squared_gaps,
)
from nearhand.service.policy.network import Policy


def test_dual_norms_of_a_gap() -> None:
    """sup of ⟨w, d⟩ over unit balls: L2 → √26, L1 → 4, L∞ → 8, simplex → 3 for d = (3, −4, 1)."""
    found = dual_norms(np.array([3.0, -4.0, 1.0]))
    assert found == pytest.approx({"l2": math.sqrt(26), "l1": 4.0, "linf": 8.0, "simplex": 3.0})


def test_mmd_of_samples_by_hand_and_by_library() -> None:
    """x = (0,1,2), y = (½,1½), bandwidth 1: unbiased estimate −0.337101321085 (computed with NumPy)."""
    x, y = np.array([[0.0], [1.0], [2.0]]), np.array([[0.5], [1.5]])
    assert mmd_squared(x, y, 1.0) == pytest.approx(-0.337101321085, abs=1e-10)
    kxx, kyy, kxy = rbf_kernel(x, x, 0.5), rbf_kernel(y, y, 0.5), rbf_kernel(x, y, 0.5)
    by_library = (kxx.sum() - 3) / 6 + (kyy.sum() - 2) / 2 - 2 * kxy.mean()
    assert mmd_squared(x, y, 1.0) == pytest.approx(by_library, abs=1e-12)


def test_mmd_tends_to_the_closed_form_of_gaussians() -> None:
    """N(0,1) and N(1,1) with bandwidth 1: 0.17726763491986 (Gretton et al. 2012; E k = s/√(s²+v)·exp(−m²/2(s²+v)))."""
    generator = np.random.default_rng(1)
    found = [mmd_squared(generator.normal(size=(400, 1)), generator.normal(1.0, 1.0, (400, 1)), 1.0) for _ in range(30)]
    # Unbiased, so the mean of thirty lies within four of its own standard errors.
    assert float(np.mean(found)) == pytest.approx(0.17726763491986, abs=4 * float(np.std(found)) / math.sqrt(30))


def test_energy_distance_of_samples() -> None:
    """x = (0,1,2), y = (½,1½): D² = 5/18; SciPy's one-dimensional function returns D."""
    x, y = np.array([[0.0], [1.0], [2.0]]), np.array([[0.5], [1.5]])
    assert energy_distance_squared(x, y) == pytest.approx(5 / 18, abs=1e-12)
    assert energy_distance_squared(x, y) == pytest.approx(energy_distance(x[:, 0], y[:, 0]) ** 2, abs=1e-12)


def test_squared_gaps_are_squared_distances(generator: np.random.Generator) -> None:
    a, b = generator.normal(size=(5, 3)), generator.normal(size=(4, 3))
    expected = ((a[:, None, :] - b[None, :, :]) ** 2).sum(axis=2)
    assert squared_gaps(a, b) == pytest.approx(expected, abs=1e-12)


def test_the_debiased_square_is_unbiased_at_zero_and_elsewhere() -> None:
    """E‖mean gap‖² = ‖gap‖² + tr(C)/n + tr(C)/m: the plain square of 10 episodes in 20 features is far too large."""
    generator = np.random.default_rng(2)
    for shift in (0.0, 0.5):
        found, plain = [], []
        for _ in range(400):
            a, b = generator.normal(shift, 1.0, (10, 20)), generator.normal(0.0, 1.0, (15, 20))
            found.append(debiased_square(a, b))
            plain.append(float(((a.mean(0) - b.mean(0)) ** 2).sum()))
        error = 4 * float(np.std(found)) / 20
        assert float(np.mean(found)) == pytest.approx(20 * shift**2, abs=error)
        assert float(np.mean(plain)) > 20 * shift**2 + 2


def test_features_of_an_episode_are_discounted_and_normalised(generator: np.random.Generator) -> None:
    episodes = [
        Episode(
            "e",
            "r",
            "o",
            np.arange(6.0),
            generator.normal(size=(7, 2)).astype("f4"),
            generator.normal(size=(6, 1)).astype("f4"),
        )
        for _ in range(4)
    ]
    features = FeatureMap.fit(episodes, 0.9)
    rows = features.rows(episodes[0].observations[:-1], episodes[0].actions)
    weights = 0.9 ** np.arange(6)
    assert features.episode(episodes[0].observations, episodes[0].actions) == pytest.approx(
        weights @ rows / weights.sum()
    )
    every = np.concatenate([features.rows(item.observations[:-1], item.actions) for item in episodes])
    # Standardised on the demonstrations, each divided by √(number of features): 3 + 6.
    assert every.mean(axis=0) == pytest.approx(np.zeros(9), abs=1e-6)
    assert every.std(axis=0) == pytest.approx(np.full(9, 1 / 3), abs=1e-6)


def test_the_likelihood_is_that_of_the_library(generator: np.random.Generator) -> None:
    zero = np.zeros(2, dtype=np.float32)
    policy = Policy(
        weights=(np.zeros((2, 2), dtype=np.float32),), biases=(np.array([0.2, -0.1], dtype=np.float32),),
        observation_mean=zero, observation_scale=zero + 1, action_middle=zero + 1, action_half=zero + 2,
        log_sd=np.array([-1.0, 0.3], dtype=np.float32),
    )  # fmt: skip
    actions = generator.normal(size=(5, 2)).astype(np.float32)
    episode = Episode("e", "r", "o", np.arange(5.0), generator.normal(size=(6, 2)).astype(np.float32), actions)
    found = action_errors(policy, [episode], zero)
    units = from_numpy((actions - 1) / 2)
    law: Any = Normal(from_numpy(policy.biases[0]), from_numpy(np.exp(policy.log_sd)))
    assert found.nll[0] == pytest.approx(-float(law.log_prob(units).sum(dim=1).mean()), abs=1e-5)
    expected = ((1 + 2 * policy.biases[0] - actions) ** 2).mean(axis=0)
    assert found.squared[0] == pytest.approx(expected, abs=1e-6)
