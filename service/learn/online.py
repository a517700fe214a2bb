"""Online proximal point: roll out, evaluate cost and critic jointly, improve the policy, again from there."""

from __future__ import annotations

import time
from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, field, replace

import numpy as np
import torch

from nearhand.service.errors import LearningError
from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.critic import Coefficients, QuadraticCritic
from nearhand.service.learn.demonstrations import Demonstration, stack_pairs
from nearhand.service.learn.diagnostics import dual_gap, excitation, start_free_share
from nearhand.service.learn.features import CostFeatures, Float64, discounted_means
from nearhand.service.learn.improvement import (
    Anchor,
    choose_alpha,
    closed_form_targets,
    fit_mean,
    fit_sd,
    gaussian_kl_new_old,
    mean_shift_kl,
    sampled_targets,
)
from nearhand.service.learn.layers import Adam
from nearhand.service.learn.objective import (
    Setting,
    effective_share,
    objective,
    project_cost,
    residuals,
    tilting_strength,
)
from nearhand.service.learn.rollouts import MakeSimulator, Rollouts, roll_out, served
from nearhand.service.learn.sampling import draw_sample, mean_features
from nearhand.service.learn.starts import Wanted, balance
from nearhand.service.policy.network import Float32, Policy
from nearhand.service.recipes import OnlineRecipe
from nearhand.service.rigs import Rig

#: A roll-out distance this many times that of the clone, for so many iterations on end, sends the run back to its best.
LOST_FACTOR, LOST_PATIENCE = 2.0, 3
ALPHA_START = 1.0


@dataclass(frozen=True)
class Scene:
    """What stays the same over a run: the machine, the demonstrations, the discount, who works, the seed."""

    rig: Rig
    blank: Policy
    demonstrations: Sequence[Demonstration]
    features: CostFeatures
    discount: float
    horizon: int
    make: MakeSimulator
    executor: Executor
    seed: int
    pieces: int
    wanted: Wanted


def matched(scene: Scene, rollouts: Rollouts) -> Rollouts:
    """Return the roll-outs with shares that make them start where the demonstrations did."""
    n = scene.features.n
    shown = np.stack([item.windows[0, :n] for item in scene.demonstrations])
    weights = np.asarray([item.weight for item in scene.demonstrations], dtype=np.float64)
    return replace(rollouts, shares=balance(rollouts.windows[:, 0, :n], shown, weights))


@dataclass
class Progress:
    """Everything that one iteration hands to the next, and a checkpoint has to keep."""

    actor: Adam
    log_sd: Float32
    critic: Adam
    cost: Adam
    absorbing: Adam
    average: torch.Tensor
    best: torch.Tensor
    best_log_sd: Float32
    iteration: int = 0
    alpha: float = ALPHA_START
    first_distance: float = float("inf")
    best_distance: float = float("inf")
    lost: int = 0
    caution: float = 1.0
    steps: int = 0
    #: Sum over the iterations of the cost weights (k + 1,); their mean is the recovered cost.
    cost_sum: Float64 = field(default_factory=lambda: np.zeros(0))
    curves: dict[str, list[float]] = field(default_factory=dict)
    candidates: dict[str, tuple[Float32, Float32]] = field(default_factory=dict)
    messages: list[str] = field(default_factory=list)


@dataclass(frozen=True)
class Evaluated:
    """One evaluation's result at its N transitions: windows, reference means and variance, Q, the expert it saw."""

    windows: torch.Tensor
    mean: torch.Tensor
    variance: torch.Tensor
    at: Coefficients
    expert: Float64


class OnlineProximalPoint:
    """One run from a cloned policy; ``iterate`` makes one proximal-point step and returns its figures."""

    def __init__(self, scene: Scene, clone: Actor, recipe: OnlineRecipe, *, past_action_noise: float = 0.0) -> None:
        self.scene, self.recipe, self.clone = scene, recipe, clone
        d, m = scene.blank.input_size, scene.blank.action_size
        self.critic = QuadraticCritic(d, m, recipe.critic_hidden, gain=float((1 - scene.discount) ** -0.5))
        generator = np.random.default_rng((scene.seed, 2, 0))
        windows, actions, weights = stack_pairs(scene.demonstrations)
        self._anchor = Anchor(
            windows, torch.from_numpy(actions), torch.from_numpy(weights), recipe.anchor,
            batch=min(1024, len(windows)), history=scene.blank.past_actions * m, blur=past_action_noise,
        )  # fmt: skip
        means, _ = discounted_means(scene.features, scene.demonstrations, scene.discount, scene.horizon)
        weights_of_episodes = np.asarray([item.weight for item in scene.demonstrations])
        self._share = weights_of_episodes / weights_of_episodes.sum()
        self._expert_trace = float(np.var(means, axis=0, ddof=1).sum()) if len(means) > 1 else float("nan")
        size = scene.features.count + 1
        self.progress = Progress(
            actor=Adam(clone.flat.clone()),
            log_sd=np.maximum(clone.log_sd, np.log(recipe.sd_start)).astype(np.float32),
            critic=Adam(self.critic.draw(generator)),
            cost=Adam(torch.zeros(size)),
            absorbing=Adam(torch.zeros(1)),
            cost_sum=np.zeros(size),
            average=clone.flat.clone(),
            best=clone.flat.clone(),
            best_log_sd=clone.log_sd,
        )

    @property
    def actor(self) -> Actor:
        """The present policy."""
        return Actor(self.clone.layers, self.progress.actor.values.detach(), self.progress.log_sd)

    def floor(self, rollouts: Rollouts) -> float:
        """Return the distance of as many episodes of the expert, started alike; NaN from one demonstration."""
        scene = self.scene
        rows = [replace(rollouts, shares=np.eye(len(rollouts.lengths))[i]) for i in range(len(rollouts.lengths))]
        each = np.stack([mean_features(scene.features, row, scene.discount) for row in rows])
        starts = rollouts.windows[:, 0, : scene.features.n].astype(np.float64)
        free = start_free_share(each, starts, rollouts.shares)
        spread = np.square(self._share).sum() + np.square(rollouts.shares).sum()
        return float(np.sqrt(self._expert_trace * free * spread))

    def evaluate(self, rollouts: Rollouts, reference: Actor) -> tuple[dict[str, float], Evaluated]:
        scene, recipe, state = self.scene, self.recipe, self.progress
        generator = np.random.default_rng((scene.seed, 2, 1, state.iteration))
        sample = draw_sample(scene.features, rollouts, reference, scene.discount, recipe.transitions, generator)
        variance = torch.from_numpy(np.exp(2 * reference.log_sd))
        expert = self.expected(self.explored_variance(rollouts, reference))
        critic, cost, absorbing = state.critic.values, state.cost.values, state.absorbing.values
        for leaf in (critic, cost, absorbing):
            leaf.requires_grad_()
        setting = Setting(1.0, state.alpha, scene.discount, variance, torch.from_numpy(expert.astype(np.float32)))
        with torch.no_grad():
            delta, _, at = residuals(self.critic, critic, cost, absorbing[0], sample, setting)
            budget = self.budget()
            here = at.at(sample.here)
            alpha = choose_alpha(here, sample.mean[sample.here], variance, budget)
            if state.iteration > 0:
                setting = Setting(1.0, alpha, scene.discount, variance, setting.expert)
                delta, _, at = residuals(self.critic, critic, cost, absorbing[0], sample, setting)
        value, before = float("nan"), critic.detach().clone()
        for step in range(recipe.inner_steps if state.iteration else max(recipe.first_inner_steps, recipe.inner_steps)):
            if step % 10 == 0:
                eta, _ = tilting_strength(sample.log_weight, delta.detach(), recipe.ess_floor)
                setting = Setting(eta, setting.alpha, scene.discount, variance, setting.expert)
            delta, values, at = residuals(self.critic, critic, cost, absorbing[0], sample, setting)
            gain = objective(delta, values, cost, absorbing[0], sample, setting)
            gradients = torch.autograd.grad(gain, (critic, cost, absorbing))
            value = float(gain.detach())
            if not np.isfinite(value):
                raise LearningError(
                    "the joint objective is no longer finite; lower online.learning_rate or raise online.ess_floor",
                    code="learn.diverged",
                )
            rate = recipe.learning_rate
            for optimiser, gradient in zip((state.critic, state.cost, state.absorbing), gradients, strict=True):
                optimiser.step(-gradient, rate)
            with torch.no_grad():
                project_cost(cost)
        with torch.no_grad():
            delta, _, at = residuals(self.critic, critic, cost, absorbing[0], sample, setting)
            share = effective_share(sample.log_weight, delta, setting.eta)
            _, spread = tilting_strength(sample.log_weight, delta, recipe.ess_floor)
        figures = {
            "objective": value,
            "gradient_cost": float(torch.linalg.vector_norm(gradients[1])),
            "gradient_critic": float(torch.linalg.vector_norm(gradients[0])),
            "dual_gap": dual_gap(
                cost.detach(), gradients[1], gradients[0], float(torch.linalg.vector_norm(critic.detach() - before))
            ),
            "excitation": excitation(sample.features, sample.log_weight),
            "ess": share,
            "delta_sd": spread,
            "eta": setting.eta,
        }
        return figures, Evaluated(
            sample.windows[sample.here], sample.mean[sample.here], variance, at.at(sample.here), expert
        )

    def expected(self, variance: Float64) -> Float64:
        """Return the expert's feature expectations (k + 1,), had its actions been explored with this variance (m,).

        Without it the cost would first of all punish the exploring itself, which the served policy does not do.
        """
        scene = self.scene
        generator = np.random.default_rng((scene.seed, 2, 4, self.progress.iteration))
        sd = np.sqrt(variance).astype(np.float32)
        explored = [
            replace(item, actions=item.actions + sd * generator.standard_normal(item.actions.shape).astype(np.float32))
            for item in scene.demonstrations
        ]
        means, absorbed = discounted_means(scene.features, explored, scene.discount, scene.horizon)
        return np.append(self._share @ means, self._share @ absorbed)

    def explored_variance(self, rollouts: Rollouts, reference: Actor) -> Float64:
        """Return the action variance (m,) that exploring adds to the expert's own, as it passed the limits."""
        count, periods = rollouts.asked.shape[:2]
        mean = reference.mean(rollouts.windows[:, :-1].reshape(count * periods, -1)).reshape(count, periods, -1)
        lived = np.arange(periods) < rollouts.lengths[:, None]
        passed = np.square(rollouts.applied - np.clip(mean, -1, 1))[lived].mean(axis=0)
        explored = np.minimum(passed, np.exp(2 * reference.log_sd))
        return np.asarray(np.maximum(explored - np.exp(2 * self.clone.log_sd), 0.0), dtype=np.float64)

    def budget(self) -> float:
        recipe = self.recipe
        part = self.progress.iteration / max(recipe.iterations - 1, 1)
        return float(self.progress.caution * recipe.kl_first * (recipe.kl_last / recipe.kl_first) ** part)

    def _sd_floor(self) -> float:
        recipe = self.recipe
        part = self.progress.iteration / max(recipe.iterations - 1, 1)
        return float(recipe.sd_start * (recipe.sd_floor / recipe.sd_start) ** part)

    def iterate(self) -> tuple[dict[str, float], str]:
        """Make one iteration; return its figures and, if something went wrong, what was done about it.

        Raises:
            LearningError: the objective is no longer finite, or the simulator failed.
        """
        began_s = time.monotonic()
        scene, recipe, state = self.scene, self.recipe, self.progress
        reference = Actor(self.clone.layers, state.actor.values.detach().clone(), state.log_sd)
        rollouts = roll_out(
            scene.executor, scene.make, scene.rig, served(scene.blank, reference), recipe.episodes, scene.horizon,
            (scene.seed, 2, 2, state.iteration), noisy=True, wanted=scene.wanted, parts=scene.pieces,
        )  # fmt: skip
        rollouts = matched(scene, rollouts)
        means = mean_features(scene.features, rollouts, scene.discount)
        figures, evaluated = self.evaluate(rollouts, reference)
        state.cost_sum = state.cost_sum + state.cost.values.detach().numpy()
        distance = float(np.linalg.norm(means - evaluated.expert))
        message = self._keep_or_return(distance, reference)
        if not message:
            figures |= self._improve(evaluated, reference)
        if figures["ess"] < recipe.ess_floor / 2:
            state.caution *= 0.7
            message = message or (
                f"the effective sample size fell to {figures['ess']:.0%}: few transitions carry the evaluation; "
                f"from here on the steps are {state.caution:.2f} of the planned ones"
            )
        state.steps += rollouts.steps
        state.iteration += 1
        figures |= {
            "feature_distance": distance,
            "floor": self.floor(rollouts),
            "action_sd": float(np.exp(state.log_sd).mean()),
            "steps_per_s": rollouts.steps / max(time.monotonic() - began_s, 1e-9),
        }
        for name, value in figures.items():
            state.curves.setdefault(name, []).append(value)
        if message:
            state.messages.append(f"iteration {state.iteration}: {message}")
        # Told, not kept: what depends on the clock has no place among the curves.
        figures["remaining_s"] = (recipe.iterations - state.iteration) * (time.monotonic() - began_s)
        return figures, message

    def _keep_or_return(self, distance: float, reference: Actor) -> str:
        """Note the best iterate; when the run has got lost, go back to it and say so."""
        state = self.progress
        if state.iteration == 0:
            state.first_distance = distance
        if distance < state.best_distance:
            state.best_distance, state.lost = distance, 0
            state.best, state.best_log_sd = reference.flat.clone(), reference.log_sd
            return ""
        state.lost = state.lost + 1 if distance > LOST_FACTOR * state.first_distance else 0
        if state.lost < LOST_PATIENCE:
            return ""
        state.lost = 0
        state.caution *= 0.5
        state.actor = Adam(state.best.clone())
        state.log_sd = np.maximum(state.best_log_sd, np.log(self._sd_floor())).astype(np.float32)
        return (
            f"feature distance {distance:.3g} stayed over {LOST_FACTOR:g} times that of the clone, "
            f"{state.first_distance:.3g}; back to the best iterate with half the step"
        )

    def _improve(self, evaluated: Evaluated, reference: Actor) -> dict[str, float]:
        recipe, state = self.recipe, self.progress
        generator = np.random.default_rng((self.scene.seed, 2, 3, state.iteration))
        with torch.no_grad():
            alpha = choose_alpha(evaluated.at, evaluated.mean, evaluated.variance, self.budget())
            if recipe.improvement == "sampled":
                targets = sampled_targets(evaluated.at, evaluated.mean, evaluated.variance, alpha, generator)
            else:
                targets = closed_form_targets(evaluated.at, evaluated.mean, evaluated.variance, alpha)
        fit_mean(
            self.clone.layers, state.actor, evaluated.windows, targets, evaluated.mean, evaluated.variance,
            self._anchor,
            steps=recipe.improvement_steps, rate=recipe.improvement_rate, trust=recipe.trust_mean, generator=generator,
        )  # fmt: skip
        old_sd = np.exp(reference.log_sd)
        sd = fit_sd(targets, old_sd, floor=self._sd_floor(), trust=recipe.trust_sd)
        state.log_sd = np.log(sd).astype(np.float32)
        state.alpha = alpha
        with torch.no_grad():
            state.average.lerp_(state.actor.values.detach(), 1 - recipe.averaging)
            fitted = self.clone.layers(state.actor.values.detach(), evaluated.windows)
            missed = gaussian_kl_new_old(targets.mean, targets.covariance, fitted, torch.from_numpy(np.square(sd)))
        return {
            "alpha": alpha,
            "kl_step": mean_shift_kl(fitted, evaluated.mean, evaluated.variance),
            "improvement_kl": float(missed.mean()),
        }

    def keep_candidate(self, name: str) -> None:
        """Remember the present policy for the selection."""
        state = self.progress
        state.candidates[name] = (state.actor.values.detach().numpy().copy(), state.log_sd)

    def finish(self) -> dict[str, Actor]:
        """Return every remembered iterate, the best by roll-out distance and the average, by name."""
        state = self.progress
        layers = self.clone.layers
        found = {name: Actor(layers, torch.from_numpy(flat), sd) for name, (flat, sd) in state.candidates.items()}
        found["nearest"] = Actor(layers, state.best, state.best_log_sd)
        found["average"] = Actor(layers, state.average, state.log_sd)
        return found
