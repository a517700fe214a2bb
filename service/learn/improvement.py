"""Policy improvement: targets from the critic, a temperature from a divergence budget, and a bounded fit.

The fit is decoupled: means with the old standard deviation, standard deviations with the old mean, each within its own
trust region (Abdolmaleki et al., "Maximum a posteriori policy optimisation", ICLR 2018, sec. 4; from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor

from nearhand.service.learn.critic import Coefficients, action_value, improved_gaussian
from nearhand.service.learn.demonstrations import blur_past_actions
from nearhand.service.learn.layers import Adam, Layers
from nearhand.service.policy.network import Float32

ALPHA_LOW, ALPHA_HIGH = 1e-6, 1e8
#: Samples per state of the sampled improvement, in antithetic pairs.
SAMPLES = 32


def gaussian_kl_new_old(new_mean: Tensor, new_covariance: Tensor, old_mean: Tensor, old_variance: Tensor) -> Tensor:
    """Return KL(new ‖ old) per state (N,), of N(new_mean, new_covariance) from N(old_mean, diag old_variance).

    ½ [tr(S⁻¹S') + (m-m')ᵀS⁻¹(m-m') - dim + log det S - log det S']. Source: Kullback & Leibler 1951, normal case.
    """
    trace = (torch.diagonal(new_covariance, dim1=-2, dim2=-1) / old_variance).sum(dim=-1)
    shift = ((new_mean - old_mean).square() / old_variance).sum(dim=-1)
    log_dets = torch.log(old_variance).sum(dim=-1) - torch.linalg.slogdet(new_covariance)[1]
    divergence: Tensor = 0.5 * (trace + shift - new_mean.shape[-1] + log_dets)
    return divergence


def mean_shift_kl(new_mean: Tensor, old_mean: Tensor, old_variance: Tensor) -> float:
    """Return the mean's part of the divergence, ½ E (m-m')ᵀS⁻¹(m-m')."""
    return float(0.5 * ((new_mean - old_mean).square() / old_variance).sum(dim=-1).mean())


def choose_alpha(at: Coefficients, mean: Tensor, variance: Tensor, budget: float) -> float:
    """Return the largest inverse temperature whose improved policy diverges by at most ``budget`` on average.

    Bisection on log α: the mean divergence KL(new ‖ old) grows with α.
    """

    def divergence(alpha: float) -> float:
        new_mean, covariance = improved_gaussian(at, mean, variance, alpha)
        return float(gaussian_kl_new_old(new_mean, covariance, mean, variance).mean())

    low, high = np.log(ALPHA_LOW), np.log(ALPHA_HIGH)
    for _ in range(50):
        middle = (low + high) / 2
        value = divergence(float(np.exp(middle)))
        low, high = (middle, high) if value <= budget else (low, middle)
    return float(np.exp(low))


@dataclass(frozen=True)
class Targets:
    """What the actor is fitted to: means (N, m) and covariances (N, m, m) per state, and their divergence."""

    mean: Tensor
    covariance: Tensor
    kl_new_old: float


def closed_form_targets(at: Coefficients, mean: Tensor, variance: Tensor, alpha: float) -> Targets:
    """Return the improved policy itself."""
    new_mean, covariance = improved_gaussian(at, mean, variance, alpha)
    return Targets(new_mean, covariance, float(gaussian_kl_new_old(new_mean, covariance, mean, variance).mean()))


def sampled_targets(
    at: Coefficients, mean: Tensor, variance: Tensor, alpha: float, generator: np.random.Generator
) -> Targets:
    """Return moments of actions drawn from the old policy and weighted by exp(-α Q), in antithetic pairs.

    The covariance is taken about the old mean, as the decoupled fit wants it. ``kl_new_old`` is that of the weights
    from equal ones; it cannot exceed log(SAMPLES).
    """
    n, m = mean.shape
    half = torch.from_numpy(generator.standard_normal((SAMPLES // 2, n, m)).astype(np.float32))
    noise = torch.cat([half, -half]) * variance.sqrt()
    values = torch.stack([action_value(at, mean + one) for one in noise])
    weights = torch.softmax(-alpha * values, dim=0)
    new_mean = mean + (weights[:, :, None] * noise).sum(dim=0)
    covariance = torch.einsum("sn,sni,snj->nij", weights, noise, noise)
    kl = (weights * torch.log((weights * SAMPLES).clamp_min(1e-30))).sum(dim=0).mean()
    return Targets(new_mean, covariance, float(kl))


@dataclass(frozen=True)
class Anchor:
    """The cloning term: demonstration windows (N, d), actions (N, m), row weights (N,), its weight, rows a step.

    ``history`` columns of past actions are blurred by ``blur``, as in cloning.
    """

    windows: Float32
    actions: Tensor
    row_weights: Tensor
    weight: float
    batch: int
    history: int = 0
    blur: float = 0.0


def fit_mean(
    layers: Layers,
    actor: Adam,
    windows: Tensor,
    targets: Targets,
    old_mean: Tensor,
    old_variance: Tensor,
    anchor: Anchor,
    *,
    steps: int,
    rate: float,
    trust: float,
    generator: np.random.Generator,
) -> None:
    """Fit the actor's mean to the targets and to the demonstrations, then pull it back into the trust region."""
    flat = actor.values.requires_grad_()
    before = flat.detach().clone()
    for _ in range(steps):
        picked = generator.integers(len(anchor.windows), size=anchor.batch)
        rows = torch.from_numpy(picked)
        shown = torch.from_numpy(blur_past_actions(anchor.windows[picked], anchor.history, anchor.blur, generator))
        gap = (layers(flat, windows) - targets.mean).square() / (2 * old_variance)
        clone_gap = (layers(flat, shown) - anchor.actions[rows]).square() / (2 * old_variance)
        clone_term = (anchor.row_weights[rows, None] * clone_gap).sum(dim=1).mean()
        loss = gap.sum(dim=1).mean() + anchor.weight * clone_term
        (gradient,) = torch.autograd.grad(loss, flat)
        actor.step(gradient, rate)
    with torch.no_grad():
        after = flat.detach().clone()
        part = 1.0
        while part > 1e-3 and mean_shift_kl(layers(flat, windows), old_mean, old_variance) > trust:
            part /= 2
            flat.copy_(torch.lerp(before, after, part))


def fit_sd(targets: Targets, old_sd: Float32, *, floor: float, trust: float) -> Float32:
    """Return new standard deviations (m,): the targets' geometric mean, within the trust region, above a floor.

    A change of log sd by r costs r² to second order in each channel's divergence.
    """
    variance = torch.diagonal(targets.covariance, dim1=1, dim2=2)
    wanted = (0.5 * torch.log(variance).mean(dim=0)).numpy()
    change = wanted - np.log(old_sd)
    size = float(np.sqrt(np.sum(np.square(change))))
    limit = float(np.sqrt(trust))
    change = change * min(1.0, limit / size) if size > 0 else change
    return np.maximum(old_sd * np.exp(change), floor).astype(np.float32)
