"""The joint objective over cost and critic that one proximal-point step maximises, on sampled transitions.

G(w, θ) = -(1/η) log Σ ω exp(-η δ) + Σ ω (V - g V') - ⟨λ_E, w⟩,  δ = w·φ + g V' - Q.

The weights ω are the discounted occupancy of the last iterate's roll-outs; over complete episodes the middle term
telescopes to first and last states. The gradient for w is the gap between tilted and expert features; for θ it is the
violation of the flow constraint. It is concave in (w, Q) together.

Source: Viano et al., "Proximal Point Imitation Learning", NeurIPS 2022, in the cost convention; telescoping and the
absorbing row derived here.
"""

from __future__ import annotations

from dataclasses import dataclass

import torch
from torch import Tensor

from nearhand.service.learn.critic import Coefficients, QuadraticCritic, action_value, soft_minimum


@dataclass(frozen=True)
class Sample:
    """Transitions of complete episodes, as rows of one table of windows.

    Attributes:
        windows: (R, d) every window that is needed once.
        mean: (R, m) the reference policy's mean at these windows.
        features: (N, k) cost features of the transitions; the absorbing row is not among them.
        actions: (N, m) what the policy asked for, in half ranges.
        here, there: (N,) rows of the transition's windows.
        ends: (N,) the transition entered the absorbing state.
        log_weight: (N + 1,) log ω; the last one is the absorbing state's own loop, -inf if it was never entered.
        first, last: (B,) rows of each episode's first and last window.
        flow_first, flow_last: (B,) weights of V(first) and V(last) in the flow term; flow_last is 0 after a terminal.
    """

    windows: Tensor
    mean: Tensor
    features: Tensor
    actions: Tensor
    here: Tensor
    there: Tensor
    ends: Tensor
    log_weight: Tensor
    first: Tensor
    last: Tensor
    flow_first: Tensor
    flow_last: Tensor


@dataclass(frozen=True)
class Setting:
    """What stays fixed during one evaluation: prox strengths, discount, the reference's variance (m,), the expert.

    ``expert`` is (k + 1,): feature expectations, then the mass on the absorbing state.
    """

    eta: float
    alpha: float
    discount: float
    variance: Tensor
    expert: Tensor


def residuals(
    critic: QuadraticCritic, flat: Tensor, cost: Tensor, absorbing: Tensor, sample: Sample, setting: Setting
) -> tuple[Tensor, Tensor, Coefficients]:
    """Return Bellman residuals (N + 1,), the values V (R,) of all rows, and the coefficients.

    Args:
        critic, flat: the critic and its parameters.
        cost: (k + 1,) weights w; the last one prices the absorbing state.
        absorbing: () value of the absorbing state.
        sample, setting: see there.
    """
    at = critic(flat, sample.windows)
    values = soft_minimum(at, sample.mean, setting.variance, setting.alpha)
    following = torch.where(sample.ends, absorbing, values[sample.there])
    taken = action_value(at.at(sample.here), sample.actions)
    lived = sample.features @ cost[:-1] + setting.discount * following - taken
    loop = cost[-1] + (setting.discount - 1) * absorbing
    return torch.cat([lived, loop[None]]), values, at


def objective(
    delta: Tensor, values: Tensor, cost: Tensor, absorbing: Tensor, sample: Sample, setting: Setting
) -> Tensor:
    """Return G, a scalar to be maximised."""
    tilted = -torch.logsumexp(sample.log_weight - setting.eta * delta, dim=0) / setting.eta
    flow = (sample.flow_first * values[sample.first]).sum() - (sample.flow_last * values[sample.last]).sum()
    return tilted + flow - setting.expert @ cost


def project_cost(cost: Tensor) -> None:
    """Project the cost weights on the unit ball of the 2-norm, in place."""
    norm = float(torch.linalg.vector_norm(cost))
    if norm > 1:
        cost.div_(norm)


def effective_share(log_weight: Tensor, delta: Tensor, eta: float) -> float:
    """Return Kish's effective sample size of the tilted weights over that of the plain ones, at most about one."""
    tilted = torch.softmax(log_weight - eta * delta, dim=0)
    plain = torch.softmax(log_weight, dim=0)
    return float(plain.square().sum() / tilted.square().sum())


def tilting_strength(
    log_weight: Tensor, delta: Tensor, ess_floor: float, *, temperature: float = 1.0
) -> tuple[float, float]:
    """Return η = temperature/sd(δ), halved until the effective share of samples reaches its floor; and sd(δ)."""
    weight = torch.softmax(log_weight, dim=0)
    mean = (weight * delta).sum()
    spread = float((weight * (delta - mean).square()).sum().clamp_min(1e-12).sqrt())
    eta = temperature / spread
    for _ in range(30):
        if effective_share(log_weight, delta, eta) >= ess_floor:
            break
        eta /= 2
    return eta, spread
