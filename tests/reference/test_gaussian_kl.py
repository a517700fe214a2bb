"""Divergences of Gaussians against closed forms and against torch.distributions."""

from __future__ import annotations

import numpy as np
import pytest
import torch
from torch.distributions import Independent, MultivariateNormal, Normal, kl_divergence

from nearhand.service.learn.critic import Coefficients
from nearhand.service.learn.improvement import choose_alpha, closed_form_targets, gaussian_kl_new_old, mean_shift_kl
from nearhand.service.learn.objective import effective_share


def kl(m1: list[float], s1: list[float], m2: list[float], s2: list[float]) -> float:
    """Return KL(N(m1, s1²) ‖ N(m2, s2²)) of diagonal Gaussians given by standard deviations."""
    mean1, sd1, mean2, sd2 = (torch.tensor([one], dtype=torch.float64) for one in (m1, s1, m2, s2))
    return float(gaussian_kl_new_old(mean1, torch.diag_embed(sd1**2), mean2, sd2[0] ** 2)[0])


@pytest.mark.parametrize(("m1", "s1", "m2", "s2", "forward", "backward"), [
    ([0.0], [1.0], [1.0], [2.0], 0.44314718055995, 1.3068528194401),
    ([0.0, 1.0], [1.0, 0.5], [0.5, -1.0], [2.0, 1.0], 2.6675443611199, 9.7387056388801),
    ([0.1, -0.2, 0.3], [0.05, 0.1, 0.2], [0.0, 0.0, 0.0], [0.1, 0.1, 0.1], 8.125, 6.25),
    ([0.0], [1.0], [0.0], [2.0], 0.3181471805599, 0.8068528194401),
])  # fmt: skip
def test_diagonal_closed_form(
    m1: list[float], s1: list[float], m2: list[float], s2: list[float], forward: float, backward: float
) -> None:
    # sum ln(s2/s1) + (s1²+(m1-m2)²)/(2 s2²) - 1/2; equal to torch's kl_divergence to 1e-12.
    assert kl(m1, s1, m2, s2) == pytest.approx(forward, abs=1e-10)
    assert kl(m2, s2, m1, s1) == pytest.approx(backward, abs=1e-10)
    one, two = (
        Independent(Normal(torch.tensor(m, dtype=torch.float64), torch.tensor(s, dtype=torch.float64)), 1)
        for m, s in ((m1, s1), (m2, s2))
    )
    assert kl(m1, s1, m2, s2) == pytest.approx(float(kl_divergence(one, two)), abs=1e-7)


def test_full_covariance_agrees_with_torch(generator: np.random.Generator) -> None:
    for _ in range(20):
        root = torch.from_numpy(generator.normal(0, 1, (3, 3)))
        covariance = root @ root.T + 0.1 * torch.eye(3)
        mean, old = torch.from_numpy(generator.normal(0, 1, (2, 3)))
        variance = torch.from_numpy(generator.uniform(0.1, 2, 3))
        wanted = kl_divergence(MultivariateNormal(mean, covariance), MultivariateNormal(old, torch.diag(variance)))
        found = gaussian_kl_new_old(mean[None], covariance[None], old[None], variance)
        assert float(found[0]) == pytest.approx(float(wanted), rel=1e-9)


def test_divergence_of_the_mean_alone_is_half_the_squared_mahalanobis_distance() -> None:
    new, old = torch.tensor([[1.0, 0.0]]), torch.tensor([[0.0, 2.0]])
    assert mean_shift_kl(new, old, torch.tensor([0.5, 4.0])) == pytest.approx(0.5 * (1 / 0.5 + 4 / 4))


@pytest.mark.parametrize("budget", [0.3, 0.05, 0.005])
def test_temperature_meets_the_divergence_budget(budget: float, generator: np.random.Generator) -> None:
    at = Coefficients(
        torch.zeros(40, dtype=torch.float64),
        torch.from_numpy(generator.normal(0, 1, (40, 2))),
        torch.from_numpy(np.tril(generator.normal(0, 0.5, (40, 2, 2)))),
    )
    mean, variance = torch.from_numpy(generator.normal(0, 1, (40, 2))), torch.tensor([0.04, 0.09], dtype=torch.float64)
    alpha = choose_alpha(at, mean, variance, budget)
    assert closed_form_targets(at, mean, variance, alpha).kl_new_old == pytest.approx(budget, rel=1e-6)


@pytest.mark.parametrize(
    ("logits", "kish"), [([0, 0, 0, 0], 4.0), ([0, 1, 2, 3], 2.0861107728433), ([1000, 1000, 1001], 2.3710778994388)]
)
def test_effective_share_is_kishs_size_over_the_plain_one(logits: list[float], kish: float) -> None:
    # Kish 1965: 1/sum p² of softmax weights; computed.
    values = torch.tensor(logits, dtype=torch.float64)
    assert effective_share(torch.zeros_like(values), -values, 1.0) == pytest.approx(kish / len(logits), abs=1e-10)
