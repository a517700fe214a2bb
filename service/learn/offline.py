"""Offline proximal point: one dual-smoothing solve around the demonstrations themselves, without a simulator.

With a broad reference policy and an exact Gaussian family, Q = V - (1/α) log(π_θ/π_ref), so value and policy are
fitted directly and the policy read from the critic *is* the actor. The objective is then, for small η, maximum
likelihood less (η/2) times the variance of the Bellman residual under the best linear cost; derived here. It reduces
to well-regularised cloning and is compared with the clone on whole episodes; the better one is returned.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor

from nearhand.service.errors import LearningError
from nearhand.service.learn.cloning import LOG_TWO_PI, Actor, Tell, held_out_nll
from nearhand.service.learn.demonstrations import Demonstration
from nearhand.service.learn.features import CostFeatures, effective_discount, fit_features
from nearhand.service.learn.layers import Adam, Layers, cosine_rate
from nearhand.service.learn.objective import Sample, Setting, effective_share, objective, project_cost, tilting_strength
from nearhand.service.learn.rollouts import Rollouts
from nearhand.service.learn.sampling import draw_sample, mean_features
from nearhand.service.recipes import OfflineRecipe

LOOKS = 30


@dataclass(frozen=True)
class Offline:
    """An offline fit: the best actor by held-out likelihood (0 steps: the clone), and curves."""

    actor: Actor
    steps: int
    held_out_nll: float
    clone_nll: float
    curves: dict[str, list[float]]


def as_rollouts(demonstrations: Sequence[Demonstration]) -> Rollouts:
    """Return demonstrations in the form of roll-outs, padded to the longest by their last window."""
    periods = max(item.length for item in demonstrations)
    weights = np.asarray([item.weight for item in demonstrations], dtype=np.float64)
    windows = [np.pad(d.windows, ((0, periods - d.length), (0, 0)), mode="edge") for d in demonstrations]
    actions = np.stack([np.pad(d.actions, ((0, periods - d.length), (0, 0))) for d in demonstrations])
    return Rollouts(
        windows=np.stack(windows),
        asked=actions,
        applied=actions,
        lengths=np.asarray([item.length for item in demonstrations], dtype=np.int64),
        terminated=np.asarray([item.terminated for item in demonstrations]),
        shares=weights / weights.sum(),
    )


def log_ratio(mean: Tensor, log_sd: Tensor, actions: Tensor, reference_sd: float) -> Tensor:
    """Return log N(actions; mean, sd²) - log N(actions; 0, reference_sd²), summed over channels, (N,)."""
    fitted = -0.5 * ((actions - mean) / log_sd.exp()).square() - log_sd - 0.5 * LOG_TWO_PI
    broad = -0.5 * (actions / reference_sd).square() - float(np.log(reference_sd)) - 0.5 * LOG_TWO_PI
    return (fitted - broad).sum(dim=1)


class _Fit:
    """The parameters of one solve and its residuals."""

    def __init__(
        self, start: Actor, features: CostFeatures, discount: float, recipe: OfflineRecipe, sd_floor: float, seed: int
    ) -> None:
        d = start.layers.widths[0]
        self.recipe, self.discount = recipe, discount
        self.policy_layers = start.layers
        self.value_layers = Layers((d, 64, 64, 1))
        self.gain = float((1 - discount) ** -0.5)
        self.low = float(np.log(sd_floor))
        self.policy = Adam(start.flat.detach().clone())
        self.log_sd = Adam(torch.from_numpy(start.log_sd.astype(np.float32)).clone())
        self.value = Adam(self.value_layers.draw(np.random.default_rng((seed, 5, 0)), last_gain=0.0))
        self.cost = Adam(torch.zeros(features.count + 1))
        self.absorbing = Adam(torch.zeros(1))
        self.parts = (self.policy, self.log_sd, self.value, self.cost, self.absorbing)
        for part in self.parts:
            part.values.requires_grad_()

    def residuals(self, sample: Sample) -> tuple[Tensor, Tensor]:
        """Return δ (N + 1,) and V (R,)."""
        values = self.gain * self.value_layers(self.value.values, sample.windows)[:, 0]
        mean = self.policy_layers(self.policy.values, sample.windows[sample.here])
        ratio = log_ratio(mean, self.log_sd.values, sample.actions, self.recipe.reference_sd) / self.recipe.alpha
        absorbing = self.absorbing.values[0]
        following = torch.where(sample.ends, absorbing, values[sample.there])
        cost = sample.features @ self.cost.values[:-1]
        lived = cost + self.discount * following - values[sample.here] + ratio
        loop = self.cost.values[-1] + (self.discount - 1) * absorbing
        return torch.cat([lived, loop[None]]), values

    def ascend(self, sample: Sample, expert: Tensor, eta: float, rate: float) -> tuple[Tensor, float]:
        """Make one joint step; return δ and the objective.

        Raises:
            LearningError: the objective is no longer finite.
        """
        delta, values = self.residuals(sample)
        setting = Setting(eta, self.recipe.alpha, self.discount, self.log_sd.values.detach(), expert)
        gain = objective(delta, values, self.cost.values, self.absorbing.values[0], sample, setting)
        if not bool(torch.isfinite(gain)):
            raise LearningError("the offline objective is no longer finite; lower offline.learning_rate")
        for part, gradient in zip(
            self.parts, torch.autograd.grad(gain, [part.values for part in self.parts]), strict=True
        ):
            part.step(-gradient, rate)
        with torch.no_grad():
            project_cost(self.cost.values)
            self.log_sd.values.clamp_(min=self.low)
        return delta.detach(), float(gain.detach())

    def actor(self) -> Actor:
        """Return the policy as it stands."""
        log_sd = self.log_sd.values.detach().numpy().copy()
        return Actor(self.policy_layers, self.policy.values.detach().clone(), log_sd)


def fit_offline(
    n: int,
    train: Sequence[Demonstration],
    held_out: Sequence[Demonstration],
    start: Actor,
    recipe: OfflineRecipe,
    sd_floor: float,
    seed: int,
    tell: Tell,
    stopped: Callable[[], bool],
    *,
    stop_at: int | None = None,
) -> Offline:
    """Solve from a cloned start and return the look with the best held-out likelihood.

    Args:
        n: observation channels.
        train, held_out: whole episodes; without held-out ones the policy at step ``stop_at`` is returned.
        start: the clone, fitted to ``train`` alone.
        recipe, sd_floor, seed: see the recipe.
        tell, stopped: progress, and whether to stop.
        stop_at: take so many steps.

    Raises:
        LearningError: diverged or stopped.
    """
    features = fit_features(n, train)
    discount = effective_discount(recipe.discount, [item.length for item in train])
    rollouts = as_rollouts(train)
    means = mean_features(features, rollouts, discount)
    expert = torch.from_numpy(means.astype(np.float32))
    fit = _Fit(start, features, discount, recipe, sd_floor, seed)
    clone_nll = held_out_nll(start, held_out, sd_floor) if held_out else float("nan")
    best: tuple[float, int, Actor] = (clone_nll if held_out else np.inf, 0, start)
    curves: dict[str, list[float]] = {}
    end = recipe.steps if stop_at is None else stop_at
    every = max(recipe.steps // LOOKS, 1)
    eta = 1.0
    sample = None
    for step in range(end):
        if step % every == 0 or sample is None:
            if stopped():
                raise LearningError("stopped; the folder can be taken up again", code="learn.stopped")
            generator = np.random.default_rng((seed, 5, 1, step))
            sample = draw_sample(features, rollouts, start, discount, recipe.transitions, generator)
            with torch.no_grad():
                delta, _ = fit.residuals(sample)
            eta, spread = tilting_strength(sample.log_weight, delta, recipe.ess_floor, temperature=recipe.temperature)
        delta, value = fit.ascend(sample, expert, eta, cosine_rate(recipe.learning_rate, step, recipe.steps))
        if (step + 1) % every == 0 or step + 1 == end:
            figures = {
                "objective": value,
                "ess": effective_share(sample.log_weight, delta, eta),
                "delta_sd": spread,
                "eta": eta,
                "action_sd": float(np.exp(fit.actor().log_sd).mean()),
            }
            if held_out:
                figures["held_out_nll"] = held_out_nll(fit.actor(), held_out, sd_floor)
                if figures["held_out_nll"] < best[0]:
                    best = (figures["held_out_nll"], step + 1, fit.actor())
            for name, one in figures.items():
                curves.setdefault(name, []).append(one)
            tell((step + 1) / end, figures)
    nll, steps, actor = best if held_out else (float("nan"), end, fit.actor())
    return Offline(actor, steps, nll, clone_nll, curves)
