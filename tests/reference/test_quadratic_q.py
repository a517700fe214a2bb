"""Soft minimum and improved policy of a critic quadratic in the action: closed forms, sampling, quadrature."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import torch

from nearhand.service.learn.critic import Coefficients, QuadraticCritic, action_value, improved_gaussian, soft_minimum
from nearhand.service.learn.improvement import SAMPLES, sampled_targets

H = torch.tensor([[2.0, 0.3], [0.3, 1.0]], dtype=torch.float64)
BEST = torch.tensor([0.4, -0.2], dtype=torch.float64)
VARIANCE = torch.tensor([0.3, 0.2], dtype=torch.float64)
MEAN = torch.tensor([[0.0, 0.1]], dtype=torch.float64)
ALPHA = 1.5


def example() -> Coefficients:
    """Return Q(u) = .7 + (u - u*)ᵀH(u - u*) in the critic's own form."""
    level = 0.7 + BEST @ H @ BEST
    return Coefficients(level[None], (-2 * H @ BEST)[None], torch.linalg.cholesky(H)[None])


def random_coefficients(generator: np.random.Generator, count: int, m: int) -> Coefficients:
    """Return coefficients with H positive semi-definite."""
    return Coefficients(
        torch.from_numpy(generator.normal(0, 1, count)),
        torch.from_numpy(generator.normal(0, 1, (count, m))),
        torch.from_numpy(np.tril(generator.normal(0, 0.7, (count, m, m)))),
    )


def test_two_channels_have_the_known_value_and_policy() -> None:
    # Completing the square, in agreement with 4e6 samples (1.34845).
    assert float(soft_minimum(example(), MEAN, VARIANCE, ALPHA)[0]) == pytest.approx(1.348802, abs=1e-6)
    mean, covariance = improved_gaussian(example(), MEAN, VARIANCE, ALPHA)
    np.testing.assert_allclose(covariance[0], [[0.108318, -0.012186], [-0.012186, 0.126371]], atol=1e-6)
    np.testing.assert_allclose(mean[0], [0.237297, 0.005804], atol=1e-6)


def test_one_channel_agrees_with_gauss_hermite_quadrature(generator: np.random.Generator) -> None:
    nodes, weights = np.polynomial.hermite_e.hermegauss(80)
    at = random_coefficients(generator, 12, 1)
    mean, variance = torch.from_numpy(generator.normal(0, 1, (12, 1))), torch.tensor([0.35], dtype=torch.float64)
    found = soft_minimum(at, mean, variance, 0.9)
    total = np.zeros(12)
    for node, weight in zip(nodes, weights / weights.sum(), strict=True):
        total += weight * np.exp(-0.9 * action_value(at, mean + np.sqrt(0.35) * node).numpy())
    np.testing.assert_allclose(found, -np.log(total) / 0.9, rtol=1e-9)


@pytest.mark.parametrize("m", [1, 2, 3])
def test_value_is_q_plus_log_ratio_for_every_action(m: int, generator: np.random.Generator) -> None:
    # Gibbs: V = Q(u) + (1/α) log(π'(u)/π(u)) holds at each u if and only if V and π' are both right.
    at = random_coefficients(generator, 9, m)
    mean = torch.from_numpy(generator.normal(0, 1, (9, m)))
    variance = torch.from_numpy(generator.uniform(0.05, 1, m))
    new_mean, covariance = improved_gaussian(at, mean, variance, ALPHA)
    old: Any = torch.distributions.MultivariateNormal(mean, torch.diag(variance).expand(9, m, m))
    new: Any = torch.distributions.MultivariateNormal(new_mean, covariance)
    for _ in range(4):
        u = torch.from_numpy(generator.normal(0, 1.5, (9, m)))
        right = action_value(at, u) + (new.log_prob(u) - old.log_prob(u)) / ALPHA
        np.testing.assert_allclose(soft_minimum(at, mean, variance, ALPHA), right, rtol=1e-8, atol=1e-8)


def test_repeated_steps_shrink_the_spread_as_the_closed_form_says() -> None:
    # S_k⁻¹ = S_0⁻¹ + 2α k H: with 2αH = 1 and S_0 = 1 the sd is .707, .408, .302, .140, .100 at k = 1, 5, 10, 50, 99.
    at = Coefficients(torch.zeros(1), torch.zeros(1, 1), torch.full((1, 1, 1), float(np.sqrt(0.5))))
    variance, found = torch.ones(1), {}
    for k in range(1, 100):
        _, covariance = improved_gaussian(at, torch.zeros(1, 1), variance, 1.0)
        variance = covariance[0, :, 0]
        found[k] = float(variance.sqrt())
    np.testing.assert_allclose([found[k] for k in (1, 5, 10, 50, 99)], [0.7071, 0.4082, 0.3015, 0.1400, 0.1], atol=1e-4)


def test_sampled_improvement_agrees_with_the_closed_form(generator: np.random.Generator) -> None:
    # Self-normalised importance weights; the bias is of order 1/SAMPLES and the noise averages over 4,000 states.
    count = 4000
    at = example()
    at = Coefficients(*(part.expand(count, *part.shape[1:]).float() for part in (at.level, at.slope, at.factor)))
    mean = MEAN.expand(count, 2).float()
    sampled = sampled_targets(at, mean, VARIANCE.float(), 0.3, generator)
    exact_mean, exact_covariance = improved_gaussian(at, mean, VARIANCE.float(), 0.3)
    about_old = exact_covariance[0] + torch.outer(exact_mean[0] - mean[0], exact_mean[0] - mean[0])
    assert SAMPLES >= 20
    np.testing.assert_allclose(sampled.mean.mean(dim=0), exact_mean[0], atol=0.01)
    np.testing.assert_allclose(sampled.covariance.mean(dim=0), about_old, atol=0.012)


@pytest.mark.parametrize("m", [1, 3])
def test_critic_network_is_convex_in_the_action_and_zero_at_the_start(m: int, generator: np.random.Generator) -> None:
    critic = QuadraticCritic(5, m, (16,), gain=3.0)
    flat = critic.draw(generator)
    windows = torch.from_numpy(generator.standard_normal((50, 5)).astype(np.float32))
    start = critic(flat, windows)
    assert float(start.level.abs().max()) == 0.0
    assert float(start.slope.abs().max()) == 0.0
    moved = flat + torch.from_numpy(generator.standard_normal(len(flat)).astype(np.float32))
    curvature = critic(moved, windows).curvature()
    assert float(torch.linalg.eigvalsh(curvature).min()) > -1e-4
    assert float(curvature.diagonal(dim1=1, dim2=2).min()) > 0
