"""Distil again from a recovered cost alone: other dynamics, no demonstrations, the same proximal-point step.

The cost is fixed, so the evaluation has the critic alone and the flow constraint as its only gradient; improvement,
trust regions and annealing are those of the imitation. What is returned is cheaper under that cost than the policy that
it began with, in fresh roll-outs, or it is that policy.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import dataclass, field
from statistics import NormalDist

import numpy as np
import torch

from nearhand.service.errors import LearningError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.learn.checkpoints import read_checkpoint, write_checkpoint
from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.critic import QuadraticCritic
from nearhand.service.learn.features import Float64
from nearhand.service.learn.improvement import (
    Anchor,
    choose_alpha,
    closed_form_targets,
    fit_mean,
    fit_sd,
    mean_shift_kl,
)
from nearhand.service.learn.layers import Adam, Layers
from nearhand.service.learn.objective import Setting, effective_share, objective, residuals, tilting_strength
from nearhand.service.learn.recovered_cost import RecoveredCost
from nearhand.service.learn.rollouts import MakeSimulator, Rollouts, roll_out, served
from nearhand.service.learn.sampling import draw_sample
from nearhand.service.policy.network import Float32, Policy
from nearhand.service.recipes import Recipe
from nearhand.service.rigs import Rig

#: One-sided confidence that a candidate is cheaper than the beginning, before it may replace it.
CONFIDENCE = 0.95
NAME = "from-cost"
OPTIMISERS = ("actor", "critic", "absorbing")


@dataclass(frozen=True)
class Task:
    """What a re-distillation works with: the machine as it now is, the cost, who begins, where it runs."""

    rig: Rig
    cost: RecoveredCost
    start: Policy
    make: MakeSimulator
    executor: Executor
    recipe: Recipe
    identity: str = ""


@dataclass(frozen=True)
class Cheaper:
    """The policy returned, its name, why, mean costs of the beginning and of the choice, curves, simulated periods."""

    policy: Policy
    name: str
    reason: str
    costs: dict[str, float]
    curves: dict[str, list[float]]
    steps: int


@dataclass
class _State:
    actor: Adam
    log_sd: Float32
    critic: Adam
    absorbing: Adam
    average: torch.Tensor
    alpha: float = 1.0
    iteration: int = 0
    steps: int = 0
    curves: dict[str, list[float]] = field(default_factory=dict)
    candidates: dict[str, Float32] = field(default_factory=dict)


def actor_of(policy: Policy) -> Actor:
    """Return a policy's network as an actor that can be taught."""
    widths = (policy.input_size, *(int(bias.shape[0]) for bias in policy.biases))
    parts = [part for w, b in zip(policy.weights, policy.biases, strict=True) for part in (w.ravel(), b)]
    flat = torch.from_numpy(np.concatenate(parts).astype(np.float32))
    return Actor(Layers(widths), flat, policy.log_sd.astype(np.float32))


class CostOnly:
    """One run; ``iterate`` makes one step and returns its figures."""

    def __init__(self, task: Task) -> None:
        self.task = task
        self.begin = actor_of(task.start)
        d, m = task.start.input_size, task.start.action_size
        discount = task.cost.discount
        self._critic = QuadraticCritic(d, m, task.recipe.online.critic_hidden, gain=float((1 - discount) ** -0.5))
        norm = float(np.linalg.norm(task.cost.weights))
        if norm < 1e-9:
            raise LearningError("the recovered cost prices nothing; distil for more iterations", code="learn.cost")
        # A positive factor does not change what is cheapest; at norm one the critic's scale is the imitation's.
        self._weights = torch.from_numpy((task.cost.weights / norm).astype(np.float32))
        self._horizon = int(task.make().max_steps)
        seed = task.recipe.seed
        self.state = _State(
            actor=Adam(self.begin.flat.clone()),
            log_sd=np.maximum(self.begin.log_sd, np.log(task.recipe.online.sd_start)).astype(np.float32),
            critic=Adam(self._critic.draw(np.random.default_rng((seed, 6, 0)))),
            absorbing=Adam(torch.zeros(1)),
            average=self.begin.flat.clone(),
        )

    def _roll(self, actor: Actor, count: int, seed: tuple[int, ...], *, noisy: bool) -> Rollouts:
        task = self.task
        found = roll_out(
            task.executor, task.make, task.rig, served(task.start, actor), count, self._horizon, seed,
            noisy=noisy, parts=task.recipe.online.pieces,
        )  # fmt: skip
        self.state.steps += found.steps
        return found

    def _part(self) -> float:
        return self.state.iteration / max(self.task.recipe.online.iterations - 1, 1)

    def iterate(self) -> dict[str, float]:
        """Make one iteration.

        Raises:
            LearningError: the objective is no longer finite, or the simulator failed.
        """
        task, state, recipe = self.task, self.state, self.task.recipe.online
        key = (task.recipe.seed, 6)
        reference = Actor(self.begin.layers, state.actor.values.detach().clone(), state.log_sd)
        rollouts = self._roll(reference, recipe.episodes, (*key, 1, state.iteration), noisy=True)
        generator = np.random.default_rng((*key, 2, state.iteration))
        sample = draw_sample(task.cost.features, rollouts, reference, task.cost.discount, recipe.transitions, generator)
        variance = torch.from_numpy(np.exp(2 * reference.log_sd))
        critic, absorbing = state.critic.values.requires_grad_(), state.absorbing.values.requires_grad_()
        nothing = torch.zeros_like(self._weights)
        setting = Setting(1.0, state.alpha, task.cost.discount, variance, nothing)
        eta, value = 1.0, float("nan")
        inner = recipe.inner_steps if state.iteration else max(recipe.first_inner_steps, recipe.inner_steps)
        for step in range(inner):
            delta, values, _ = residuals(self._critic, critic, self._weights, absorbing[0], sample, setting)
            if step % 10 == 0:
                eta, _ = tilting_strength(sample.log_weight, delta.detach(), recipe.ess_floor)
                setting = Setting(eta, state.alpha, task.cost.discount, variance, nothing)
            gain = objective(delta, values, self._weights, absorbing[0], sample, setting)
            value = float(gain.detach())
            if not np.isfinite(value):
                raise LearningError("the objective is no longer finite; lower online.learning_rate")
            gradients = torch.autograd.grad(gain, (critic, absorbing))
            for optimiser, gradient in zip((state.critic, state.absorbing), gradients, strict=True):
                optimiser.step(-gradient, recipe.learning_rate)
        windows, mean = sample.windows[sample.here], sample.mean[sample.here]
        with torch.no_grad():
            delta, _, at = residuals(self._critic, critic, self._weights, absorbing[0], sample, setting)
            at = at.at(sample.here)
            budget = recipe.kl_first * (recipe.kl_last / recipe.kl_first) ** self._part()
            alpha = choose_alpha(at, mean, variance, float(budget))
            targets = closed_form_targets(at, mean, variance, alpha)
        picked = windows.numpy()
        rest = Anchor(picked, mean, torch.ones(len(picked)), 0.0, batch=min(64, len(picked)))
        fit_mean(
            self.begin.layers, state.actor, windows, targets, mean, variance, rest,
            steps=recipe.improvement_steps, rate=recipe.improvement_rate, trust=recipe.trust_mean, generator=generator,
        )  # fmt: skip
        floor = float(recipe.sd_start * (recipe.sd_floor / recipe.sd_start) ** self._part())
        state.log_sd = np.log(fit_sd(targets, np.exp(reference.log_sd), floor=floor, trust=recipe.trust_sd)).astype(
            np.float32
        )
        state.alpha = alpha
        with torch.no_grad():
            state.average.lerp_(state.actor.values.detach(), 1 - recipe.averaging)
            fitted = self.begin.layers(state.actor.values.detach(), windows)
        state.iteration += 1
        every = self.task.recipe.selection.every
        if state.iteration % every == 0 or state.iteration == recipe.iterations:
            state.candidates[f"iterate-{state.iteration}"] = state.actor.values.detach().numpy().copy()
        figures = {
            "cost": float(rollouts.shares @ self._costs(rollouts)),
            "objective": value,
            "gradient_critic": float(torch.linalg.vector_norm(gradients[0])),
            "ess": effective_share(sample.log_weight, delta, eta),
            "kl_step": mean_shift_kl(fitted, mean, variance),
            "eta": eta,
            "alpha": alpha,
        }
        for name, one in figures.items():
            state.curves.setdefault(name, []).append(one)
        return figures

    def _costs(self, rollouts: Rollouts) -> Float64:
        return self.task.cost.of_episodes(rollouts.windows, rollouts.applied, rollouts.lengths, rollouts.terminated)

    def finish(self) -> Cheaper:
        """Return the cheapest candidate if fresh roll-outs, from the same starts, surely confirm it; else the start."""
        state, recipe = self.state, self.task.recipe
        actors = {"start": self.begin} | {
            name: Actor(self.begin.layers, torch.from_numpy(flat), state.log_sd)
            for name, flat in {**state.candidates, "average": state.average.numpy()}.items()
        }

        def cost(name: str, stage: int) -> Float64:
            return self._costs(
                self._roll(actors[name], recipe.selection.episodes, (recipe.seed, 6, 3, stage), noisy=False)
            )

        first = {name: float(cost(name, 0).mean()) for name in actors}
        name = min(first, key=lambda one: first[one])
        if name == "start":
            return self._chosen(actors, "start", "no iterate was cheaper than the policy it began with", first)
        ours, begun = cost(name, 1), cost("start", 1)
        gap = ours - begun
        sure = NormalDist().cdf(-float(gap.mean()) / max(float(gap.std(ddof=1)) / np.sqrt(len(gap)), 1e-12))
        both = f"mean cost {ours.mean():.4g} against {begun.mean():.4g} in {len(gap)} fresh pairs, sure to {sure:.1%}"
        if sure >= CONFIDENCE:
            return self._chosen(actors, name, f"cheapest under the recovered cost: {both}", first)
        return self._chosen(actors, "start", f"{name} is not surely cheaper: {both}; the beginning is kept", first)

    def _chosen(self, actors: dict[str, Actor], name: str, reason: str, costs: dict[str, float]) -> Cheaper:
        state = self.state
        return Cheaper(served(self.task.start, actors[name]), name, reason, costs, state.curves, state.steps)

    def save(self, folder: JobFolder) -> None:
        """Write the checkpoint."""
        state = self.state
        arrays: dict[str, object] = {"log_sd": state.log_sd, "average": state.average.numpy()}
        for name in OPTIMISERS:
            arrays |= getattr(state, name).state(name)
        arrays |= {f"candidate.{name}": flat for name, flat in state.candidates.items()}
        facts = {
            "identity": self.task.identity, "iteration": state.iteration, "steps": state.steps, "alpha": state.alpha,
            "curves": state.curves, "candidates": list(state.candidates),
            "optimiser_steps": {name: getattr(state, name).steps for name in OPTIMISERS},
        }  # fmt: skip
        write_checkpoint(folder, NAME, arrays, facts)

    def restore(self, folder: JobFolder) -> None:
        """Go back to where the checkpoint of the same identity left it, if there is one."""
        found = read_checkpoint(folder, NAME, self.task.identity)
        if found is None:
            return
        arrays, facts = found
        state = self.state
        for name in OPTIMISERS:
            getattr(state, name).restore(name, arrays, facts["optimiser_steps"][name])
        state.log_sd, state.average = arrays["log_sd"], torch.from_numpy(arrays["average"])
        state.candidates = {name: arrays[f"candidate.{name}"] for name in facts["candidates"]}
        for name in ("iteration", "steps", "alpha", "curves"):
            setattr(state, name, facts[name])


def distil_from_cost(
    task: Task,
    folder: JobFolder | None,
    tell: Callable[[float, dict[str, float]], None],
    stopped: Callable[[], bool],
) -> Cheaper:
    """Run all iterations and choose.

    Args:
        task: see there.
        folder: where the checkpoint is kept; None keeps none.
        tell, stopped: progress, and whether to stop.

    Raises:
        LearningError: diverged or stopped.
    """
    run = CostOnly(task)
    if folder is not None:
        run.restore(folder)
    total = task.recipe.online.iterations
    while run.state.iteration < total:
        if stopped():
            raise LearningError("stopped; the folder can be taken up again", code="learn.stopped")
        figures = run.iterate()
        if folder is not None:
            run.save(folder)
        tell(run.state.iteration / total, figures)
    return run.finish()
