"""Behavioural cloning: a Gaussian policy fitted to the demonstrations by maximum likelihood, trained to convergence."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor

from nearhand.service.errors import LearningError
from nearhand.service.learn.demonstrations import Demonstration, blur_past_actions, hold_out, stack_pairs
from nearhand.service.learn.layers import Adam, Layers, cosine_rate, draw_batches
from nearhand.service.policy.network import Float32
from nearhand.service.recipes import CloneRecipe

#: How often, over a fit, the held-out error is looked at.
LOOKS = 40
#: The latest look within so much of the best likelihood is taken: the held-out error is a noisy figure, and on unstable
#: plants a well converged fit drives better than its action error tells.
PATIENCE_NATS = 0.1
LOG_TWO_PI = float(np.log(2 * np.pi))
#: Degrees of freedom of the heavy-tailed error model, how many scales are tried, and -log of its density at zero.
FREEDOM, SCALES = 2.0, 60
T_CONSTANT = 0.5 * float(np.log(8.0))


@dataclass(frozen=True)
class Actor:
    """A Gaussian policy over the stacked window: parameters of the mean and the standard deviation per channel."""

    layers: Layers
    flat: Tensor
    log_sd: Float32

    def mean(self, windows: Float32) -> Float32:
        """Return u (N, m) in half ranges."""
        with torch.no_grad():
            return np.asarray(self.layers(self.flat, torch.from_numpy(windows)).numpy())


@dataclass(frozen=True)
class Clone:
    """A cloned actor, the steps it took, and its errors along the way.

    ``held_out`` are the indices of the episodes kept out for early stopping. ``probe`` is the actor that never saw
    them: ``actor`` itself if they were ``spared``, another one or None if all were fitted.
    ``curves`` holds ``train_nll`` and ``held_out_nll`` (nats per channel and sample, at each look).
    """

    actor: Actor
    probe: Actor | None
    steps: int
    held_out: tuple[int, ...]
    spared: bool
    curves: dict[str, list[float]]
    note: str


Tell = Callable[[float, dict[str, float]], None]


def residual_sd(actor_mean: Float32, actions: Float32, weights: Float32, floor: float) -> Float32:
    """Return the maximum-likelihood standard deviation per channel, (m,), never below ``floor``."""
    square = np.mean(weights[:, None] * np.square(actions - actor_mean, dtype=np.float64), axis=0)
    return np.asarray(np.maximum(np.sqrt(square), floor), dtype=np.float32)


def held_out_nll(actor: Actor, demonstrations: Sequence[Demonstration], floor: float) -> float:
    """Return the negative log-likelihood per channel and sample of whole episodes under a heavy-tailed error model.

    A Student-t with two degrees of freedom at its best scale, per channel. An expert that switches between two ways of
    driving leaves a few huge errors wherever the policy switches a moment earlier or later; under a Gaussian these few
    outweigh all the rest and favour a blurred, under-trained network that drives worse. The scale is that of the
    episodes asked about: training residuals say nothing of new episodes once the network nearly interpolates.

    Source: Student-t regression (Lange, Little & Taylor 1989; from memory).
    """
    errors = np.concatenate([np.abs(item.actions - actor.mean(item.windows[:-1])) for item in demonstrations])
    scales = np.geomspace(floor, max(10 * floor, 4.0), SCALES)[:, None, None]
    ratio = np.square(errors.astype(np.float64) / scales) / FREEDOM
    nll = np.log(scales[:, :, 0]) + 0.5 * (FREEDOM + 1) * np.log1p(ratio).mean(axis=1) + T_CONSTANT
    return float(nll.min(axis=0).mean())


def held_out_sd(actor: Actor, demonstrations: Sequence[Demonstration], floor: float) -> Float32:
    """Return the root mean square error per channel, (m,), each episode counting alike; never below ``floor``."""
    square = [np.square(item.actions - actor.mean(item.windows[:-1]), dtype=np.float64) for item in demonstrations]
    mean = np.mean([one.mean(axis=0) for one in square], axis=0)
    return np.asarray(np.maximum(np.sqrt(mean), floor), dtype=np.float32)


def _fit(
    layers: Layers,
    train: Sequence[Demonstration],
    held_out: Sequence[Demonstration],
    recipe: CloneRecipe,
    history: int,
    seed: Sequence[int],
    tell: Tell,
    stopped: Callable[[], bool],
) -> tuple[Actor, int, dict[str, list[float]]]:
    """Fit one network; return the latest look near the best held-out one, or the last if none is held out."""
    generator = np.random.default_rng(seed)
    windows, actions, weights = stack_pairs(train)
    targets, row_weights = torch.from_numpy(actions), torch.from_numpy(weights)
    optimiser = Adam(layers.draw(generator, last_gain=0.1), decay=recipe.weight_decay * layers.decay_mask())
    flat = optimiser.values.requires_grad_()
    floor = float(recipe.sd_floor**2)
    every = max(recipe.steps // LOOKS, 1)
    looks: list[tuple[float, int, Tensor]] = []
    curves: dict[str, list[float]] = {"train_nll": [], "held_out_nll": []}
    batches: list[np.ndarray[tuple[int], np.dtype[np.int64]]] = []
    for step in range(1, recipe.steps + 1):
        if not batches:
            batches = list(draw_batches(generator, len(windows), recipe.batch))
        picked = batches.pop()
        rows = torch.from_numpy(picked)
        seen = torch.from_numpy(blur_past_actions(windows[picked], history, recipe.past_action_noise, generator))
        errors = torch.square(layers(flat, seen) - targets[rows])
        # The likelihood with the best standard deviation put in: every channel counts in its own spread.
        loss = 0.5 * torch.log((row_weights[rows, None] * errors).mean(dim=0) + floor).sum()
        (gradient,) = torch.autograd.grad(loss, flat)
        optimiser.step(gradient, cosine_rate(recipe.learning_rate, step - 1, recipe.steps))
        if step % every == 0 or step == recipe.steps:
            if stopped():
                raise LearningError("stopped while cloning; the folder can be taken up again", code="learn.stopped")
            actor = Actor(layers, flat.detach(), np.zeros(targets.shape[1], dtype=np.float32))
            sd = residual_sd(actor.mean(windows), actions, weights, recipe.sd_floor)
            figures = {"train_nll": float(np.mean(np.log(sd)) + 0.5 * LOG_TWO_PI + 0.5)}
            if held_out:
                figures["held_out_nll"] = held_out_nll(actor, held_out, recipe.sd_floor)
                if not np.isfinite(figures["held_out_nll"]):
                    raise LearningError(
                        "cloning diverged; lower the recipe's clone.learning_rate", code="learn.diverged"
                    )
                looks.append((figures["held_out_nll"], step, flat.detach().clone()))
            for name, value in figures.items():
                curves[name].append(value)
            tell(step / recipe.steps, figures)
    if not held_out:
        return Actor(layers, flat.detach().clone(), np.log(sd)), recipe.steps, curves
    limit = min(nll for nll, _, _ in looks) + PATIENCE_NATS
    _, steps, chosen = next(look for look in reversed(looks) if look[0] <= limit)
    actor = Actor(layers, chosen, np.zeros(targets.shape[1], dtype=np.float32))
    return Actor(layers, chosen, np.log(held_out_sd(actor, held_out, recipe.sd_floor))), steps, curves


def clone(
    demonstrations: Sequence[Demonstration],
    recipe: CloneRecipe,
    seed: int,
    tell: Tell,
    stopped: Callable[[], bool],
    *,
    history: int = 0,
    probing: bool = False,
) -> Clone:
    """Fit a policy to the demonstrations, stopping early by whole episodes that were kept out.

    With fewer than ``recipe.spare_from`` episodes none is spared: the error on one or two episodes is too noisy a guide
    (it would stop far too soon on plants that the clone drives well), so all are fitted for all the recipe's steps.

    Args:
        demonstrations, recipe, seed, tell, stopped: see there.
        history: columns of past actions at the end of a window.
        probing: if no episode is spared, fit a second network that did not see some of them, to compare with.

    Raises:
        LearningError: the fit diverged, or it was told to stop.
    """
    count = len(demonstrations)
    d, m = demonstrations[0].windows.shape[1], demonstrations[0].actions.shape[1]
    layers = Layers((d, *recipe.hidden, m))
    indices: tuple[int, ...] = ()
    if count > 1:
        indices = tuple(int(i) for i in hold_out(count, recipe.held_out, np.random.default_rng((seed, 1, 1))))
    kept = [item for index, item in enumerate(demonstrations) if index not in indices]
    held = [demonstrations[index] for index in indices]
    if count >= recipe.spare_from:
        actor, steps, curves = _fit(layers, kept, held, recipe, history, (seed, 1, 2), tell, stopped)
        return Clone(actor, actor, steps, indices, True, curves, f"{len(held)} of {count} episodes kept out")
    part = 0.5 if probing and held else 1.0
    actor, steps, curves = _fit(
        layers,
        demonstrations,
        (),
        recipe,
        history,
        (seed, 1, 2),
        lambda done, figures: tell(part * done, figures),
        stopped,
    )
    probe = None
    if part < 1:
        probe, _, _ = _fit(
            layers,
            kept,
            (),
            recipe,
            history,
            (seed, 1, 2),
            lambda done, figures: tell(0.5 + part * done, figures),
            stopped,
        )
    return Clone(actor, probe, steps, indices, False, curves, "too few episodes to spare one: all fitted to the end")
