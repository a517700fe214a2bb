"""Other imitation methods, from their papers, in the frame of the online method: only the evaluation differs.

Networks, roll-outs, start states, the actor's step with its trust region and its cloning term, the averaging, and the
number of optimiser steps are those of ``OnlineProximalPoint``; so the comparison is of what is learned from the
roll-outs, the cost and the critic. Every method returns its averaged iterate, none is selected.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import replace

import numpy as np
import torch
from torch import Tensor
from torch.nn.functional import softplus

from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.critic import Coefficients, action_value
from nearhand.service.learn.demonstrations import stack_pairs
from nearhand.service.learn.features import Float64
from nearhand.service.learn.improvement import choose_alpha
from nearhand.service.learn.layers import Adam, Layers
from nearhand.service.learn.objective import Sample, Setting, residuals
from nearhand.service.learn.online import Evaluated, OnlineProximalPoint
from nearhand.service.learn.rollouts import Rollouts
from nearhand.service.learn.sampling import draw_sample, mean_features
from nearhand.service.policy.network import Float32

#: Optimiser steps between two refreshes of the target that a value is regressed on.
REFRESH = 10
#: Strength of the chi-square regulariser, and of the discriminator's gradient penalty.
CHI_SQUARE, PENALTY = 0.5, 1.0


def _found(
    sample: Sample, at: Coefficients, variance: Tensor, expert: Float64, figures: dict[str, float]
) -> tuple[dict[str, float], Evaluated]:
    found = Evaluated(sample.windows[sample.here], sample.mean[sample.here], variance, at.at(sample.here), expert)
    return figures, found


class Rival(OnlineProximalPoint, ABC):
    """A run whose cost is given each iteration, and whose critic is fitted to it by regression on its own target."""

    @abstractmethod
    def costs(self, sample: Sample, rollouts: Rollouts, expert: Float64) -> Tensor:
        """Return the cost (N,) of the sample's transitions and, as the last entry, of the absorbing state."""

    def evaluate(self, rollouts: Rollouts, reference: Actor) -> tuple[dict[str, float], Evaluated]:
        """Fit cost and critic to one batch of roll-outs."""
        scene, recipe, state = self.scene, self.recipe, self.progress
        generator = np.random.default_rng((scene.seed, 2, 1, state.iteration))
        sample = draw_sample(scene.features, rollouts, reference, scene.discount, recipe.transitions, generator)
        variance = torch.from_numpy(np.exp(2 * reference.log_sd))
        expert = self.expected(self.explored_variance(rollouts, reference))
        costs = self.costs(sample, rollouts, expert)
        critic, absorbing = state.critic.values.requires_grad_(), state.absorbing.values.requires_grad_()
        nothing = torch.zeros(len(expert))
        setting = Setting(1.0, state.alpha, scene.discount, variance, torch.zeros(len(expert)))
        weight = torch.exp(sample.log_weight)
        steps = recipe.inner_steps if state.iteration else max(recipe.first_inner_steps, recipe.inner_steps)
        target, spread = costs, float("nan")
        for step in range(steps):
            if step % REFRESH == 0:
                with torch.no_grad():
                    target, at = self._target(sample, setting, critic, absorbing, costs)
                    if step == 0 and state.iteration:
                        alpha = choose_alpha(at.at(sample.here), sample.mean[sample.here], variance, self.budget())
                        setting = replace(setting, alpha=alpha)
            gap = self._values(sample, critic, absorbing) - target
            loss = (weight * gap.square()).sum()
            gradients = torch.autograd.grad(loss, (critic, absorbing), allow_unused=True, materialize_grads=True)
            for optimiser, gradient in zip((state.critic, state.absorbing), gradients, strict=True):
                optimiser.step(gradient, recipe.learning_rate)
            spread = float(gap.detach().square().mean().sqrt())
        with torch.no_grad():
            _, _, at = residuals(self.critic, critic, nothing, absorbing[0], sample, setting)
        return _found(sample, at, variance, expert, {"delta_sd": spread, "ess": 1.0})

    def _values(self, sample: Sample, critic: Tensor, absorbing: Tensor) -> Tensor:
        at = self.critic(critic, sample.windows[sample.here])
        return torch.cat([action_value(at, sample.actions), absorbing])

    def _target(
        self, sample: Sample, setting: Setting, critic: Tensor, absorbing: Tensor, costs: Tensor
    ) -> tuple[Tensor, Coefficients]:
        nothing = torch.zeros_like(setting.expert)
        delta, _, at = residuals(self.critic, critic, nothing, absorbing[0], sample, setting)
        # With no cost the residual is g V' - Q, so the target c + g V' is the cost, the residual and Q.
        return costs + delta + self._values(sample, critic, absorbing), at


class FeatureMatching(Rival):
    """Apprenticeship by projection: the cost points from the expert's mean features to the nearest mixture's.

    Source: Abbeel & Ng, "Apprenticeship learning via inverse reinforcement learning", ICML 2004, sec. 3.1 (from
    memory); the policy is improved by one step an iteration instead of being solved for.
    """

    _mixture: Float64 | None = None

    def costs(self, sample: Sample, rollouts: Rollouts, expert: Float64) -> Tensor:
        """Return the cost (N + 1,) along the gap, of unit norm."""
        means = mean_features(self.scene.features, rollouts, self.scene.discount)
        if self._mixture is None:
            self._mixture = means
        else:
            move = means - self._mixture
            part = float(move @ (expert - self._mixture)) / max(float(move @ move), 1e-12)
            self._mixture = self._mixture + np.clip(part, 0.0, 1.0) * move
        gap = self._mixture - expert
        weights = torch.from_numpy((gap / max(float(np.linalg.norm(gap)), 1e-12)).astype(np.float32))
        return torch.cat([sample.features @ weights[:-1], weights[-1:]])


class Adversarial(Rival):
    """Occupancy matching against a discriminator network; the cost is log(1 + exp D) with D its logit for the learner.

    Source: Ho & Ermon, "Generative adversarial imitation learning", NeurIPS 2016; gradient penalty at mixtures as in
    Kostrikov et al., "Discriminator-actor-critic", ICLR 2019 (both from memory). The absorbing state costs as much as
    the dearest transition, since no demonstration enters it.
    """

    _judge: tuple[Layers, Adam] | None = None

    def costs(self, sample: Sample, rollouts: Rollouts, expert: Float64) -> Tensor:
        """Train the discriminator on this batch, return its costs (N + 1,)."""
        scene, recipe = self.scene, self.recipe
        generator = np.random.default_rng((scene.seed, 6, self.progress.iteration))
        windows, actions, _ = stack_pairs(scene.demonstrations)
        sd = np.sqrt(self.explored_variance(rollouts, self.actor)).astype(np.float32)
        shown = torch.from_numpy(np.concatenate([windows, actions], axis=1))
        own = torch.cat([sample.windows[sample.here], sample.actions], dim=1)
        if self._judge is None:
            layers = Layers((shown.shape[1], *recipe.critic_hidden, 1))
            self._judge = layers, Adam(layers.draw(generator, last_gain=0.1))
        layers, optimiser = self._judge
        flat = optimiser.values.requires_grad_()
        m, batch = actions.shape[1], min(512, len(shown), len(own))
        mass = np.exp(sample.log_weight[:-1].numpy().astype(np.float64))
        row_weights = np.concatenate(
            [scene.discount ** np.arange(item.length) * item.weight for item in scene.demonstrations]
        )
        for _ in range(recipe.inner_steps):
            mine = own[torch.from_numpy(generator.choice(len(own), batch, p=mass / mass.sum()))]
            theirs = shown[torch.from_numpy(generator.choice(len(shown), batch, p=row_weights / row_weights.sum()))]
            theirs = theirs.clone()
            theirs[:, -m:] += torch.from_numpy(sd * generator.standard_normal((batch, m)).astype(np.float32))
            between = torch.from_numpy(generator.random((batch, 1)).astype(np.float32))
            middle = (between * mine + (1 - between) * theirs).requires_grad_()
            (slope,) = torch.autograd.grad(layers(flat, middle).sum(), middle, create_graph=True)
            penalty = (torch.linalg.vector_norm(slope, dim=1) - 1).square().mean()
            loss = softplus(-layers(flat, mine)).mean() + softplus(layers(flat, theirs)).mean() + PENALTY * penalty
            (gradient,) = torch.autograd.grad(loss, flat)
            optimiser.step(gradient, 1e-3)
        with torch.no_grad():
            costs = softplus(layers(flat, own)[:, 0])
        # On the scale of a linear cost of unit norm, which the critic's starting scale is made for.
        costs = costs / costs.std().clamp_min(1e-3)
        return torch.cat([costs, costs.max()[None]])


class InverseSoftQ(OnlineProximalPoint):
    """A soft Q alone, whose Bellman residual on the demonstrations is the cost, with a chi-square regulariser.

    Minimises E_expert[r + r²/(4β)] - E_roll-outs[V - g V'] with r = Q - g V', the implied cost.
    Source: Garg et al., "IQ-Learn: inverse soft-Q learning for imitation", NeurIPS 2021, sec. 4 and 5.2, in the cost
    convention (from memory).
    """

    def evaluate(self, rollouts: Rollouts, reference: Actor) -> tuple[dict[str, float], Evaluated]:
        """Fit the critic to one batch of roll-outs and the demonstrations."""
        scene, recipe, state = self.scene, self.recipe, self.progress
        generator = np.random.default_rng((scene.seed, 2, 1, state.iteration))
        sample = draw_sample(scene.features, rollouts, reference, scene.discount, recipe.transitions, generator)
        sd = np.sqrt(self.explored_variance(rollouts, reference)).astype(np.float32)
        shown = self._demonstrated(reference, sd, generator)
        variance = torch.from_numpy(np.exp(2 * reference.log_sd))
        expert = self.expected(np.square(sd, dtype=np.float64))
        critic, absorbing = state.critic.values.requires_grad_(), state.absorbing.values.requires_grad_()
        nothing = torch.zeros(len(expert))
        setting = Setting(1.0, state.alpha, scene.discount, variance, nothing)
        with torch.no_grad():
            _, _, at = residuals(self.critic, critic, nothing, absorbing[0], sample, setting)
            if state.iteration:
                alpha = choose_alpha(at.at(sample.here), sample.mean[sample.here], variance, self.budget())
                setting = replace(setting, alpha=alpha)
        steps = recipe.inner_steps if state.iteration else max(recipe.first_inner_steps, recipe.inner_steps)
        spread = float("nan")
        own_weight, shown_weight = torch.exp(sample.log_weight), torch.exp(shown.log_weight)
        for _ in range(steps):
            own, values, _ = residuals(self.critic, critic, nothing, absorbing[0], sample, setting)
            theirs, _, _ = residuals(self.critic, critic, nothing, absorbing[0], shown, setting)
            implied = -theirs
            flow = (sample.flow_first * values[sample.first]).sum() - (sample.flow_last * values[sample.last]).sum()
            # The regulariser is taken on both halves of the data, as for roll-outs in the simulator.
            square = 0.5 * ((shown_weight * implied.square()).sum() + (own_weight * own.square()).sum())
            loss = (shown_weight * implied).sum() + square / (4 * CHI_SQUARE) - flow
            gradients = torch.autograd.grad(loss, (critic, absorbing), allow_unused=True, materialize_grads=True)
            for optimiser, gradient in zip((state.critic, state.absorbing), gradients, strict=True):
                optimiser.step(gradient, recipe.learning_rate)
            spread = float(implied.detach().std())
        with torch.no_grad():
            _, _, at = residuals(self.critic, critic, nothing, absorbing[0], sample, setting)
        return _found(sample, at, variance, expert, {"delta_sd": spread, "ess": 1.0})

    def _demonstrated(self, reference: Actor, sd: Float32, generator: np.random.Generator) -> Sample:
        scene = self.scene
        items = scene.demonstrations
        periods = max(min(item.length, scene.horizon) for item in items)
        count, d, m = len(items), items[0].windows.shape[1], items[0].actions.shape[1]
        windows = np.empty((count, periods + 1, d), dtype=np.float32)
        actions = np.zeros((count, periods, m), dtype=np.float32)
        lengths = np.asarray([min(item.length, scene.horizon) for item in items])
        for row, (item, length) in enumerate(zip(items, lengths, strict=True)):
            windows[row, : length + 1] = item.windows[: length + 1]
            windows[row, length + 1 :] = item.windows[length]
            actions[row, :length] = item.actions[:length]
        actions = actions + sd * generator.standard_normal(actions.shape).astype(np.float32)
        ended = np.asarray([item.terminated and item.length <= scene.horizon for item in items])
        shares = np.asarray([item.weight for item in items], dtype=np.float64)
        table = Rollouts(windows, actions, actions, lengths, ended, shares / shares.sum())
        return draw_sample(scene.features, table, reference, scene.discount, self.recipe.transitions, generator)


RIVALS: dict[str, type[OnlineProximalPoint]] = {
    "feature-matching": FeatureMatching,
    "adversarial": Adversarial,
    "inverse-soft-q": InverseSoftQ,
}
