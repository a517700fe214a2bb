"""Behavioural cloning: a Gaussian policy fitted to the demonstrations by maximum likelihood, trained to convergence."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import torch
from torch import Tensor

from nearhand.service.errors import LearningError
from nearhand.service.learn.demonstrations import Demonstration, hold_out, stack_pairs
from nearhand.service.learn.layers import Adam, Layers, cosine_rate, draw_batches
from nearhand.service.policy.network import Float32
from nearhand.service.recipes import CloneRecipe

#: How often, over a fit, the held-out error is looked at.
LOOKS = 40
#: The latest look within so much of the best likelihood is taken: the held-out error is a noisy figure, and on unstable
#: plants a well converged fit drives better than its action error tells.
PATIENCE_NATS = 0.1
LOG_TWO_PI = float(np.log(2 * np.pi))


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
    them: ``actor`` itself if they were spared for good, another one if all were fitted in the end, None if there was
    but one episode. ``curves`` holds ``train_nll`` and ``held_out_nll`` (nats per channel and sample, at each look).
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
    return np.maximum(np.sqrt(square), floor).astype(np.float32)


def held_out_nll(actor: Actor, demonstrations: Sequence[Demonstration], floor: float) -> float:
    """Return the negative log-likelihood per channel and sample on whole episodes, at these episodes' own spread.

    The standard deviation is the best one for the episodes asked about: that of the training residuals says nothing
    about new episodes once the network nearly interpolates, and would make any later look appear worse.
    """
    sd = held_out_sd(actor, demonstrations, floor)
    return float(np.mean(np.log(sd)) + 0.5 * LOG_TWO_PI + 0.5)


def held_out_sd(actor: Actor, demonstrations: Sequence[Demonstration], floor: float) -> Float32:
    """Return the root mean square error per channel, (m,), each episode counting alike; never below ``floor``."""
    square = [np.square(item.actions - actor.mean(item.windows[:-1]), dtype=np.float64) for item in demonstrations]
    mean = np.mean([one.mean(axis=0) for one in square], axis=0)
    return np.maximum(np.sqrt(mean), floor).astype(np.float32)


def _fit(
    layers: Layers,
    train: Sequence[Demonstration],
    held_out: Sequence[Demonstration],
    recipe: CloneRecipe,
    seed: Sequence[int],
    stop_at: int | None,
    tell: Tell,
    stopped: Callable[[], bool],
) -> tuple[Actor, int, dict[str, list[float]]]:
    """Fit one network; return the latest look near the best held-out one, or step ``stop_at`` if none is held out."""
    generator = np.random.default_rng(seed)
    windows, actions, weights = stack_pairs(train)
    inputs, targets, row_weights = (torch.from_numpy(array) for array in (windows, actions, weights))
    optimiser = Adam(layers.draw(generator, last_gain=0.1), decay=recipe.weight_decay * layers.decay_mask())
    flat = optimiser.values.requires_grad_()
    floor = float(recipe.sd_floor**2)
    every = max(recipe.steps // LOOKS, 1)
    looks: list[tuple[float, int, Tensor]] = []
    curves: dict[str, list[float]] = {"train_nll": [], "held_out_nll": []}
    end = recipe.steps if stop_at is None else stop_at
    batches: list[np.ndarray[tuple[int], np.dtype[np.int64]]] = []
    for step in range(1, end + 1):
        if not batches:
            batches = list(draw_batches(generator, len(windows), recipe.batch))
        rows = torch.from_numpy(batches.pop())
        errors = torch.square(layers(flat, inputs[rows]) - targets[rows])
        # The likelihood with the best standard deviation put in: every channel counts in its own spread.
        loss = 0.5 * torch.log((row_weights[rows, None] * errors).mean(dim=0) + floor).sum()
        (gradient,) = torch.autograd.grad(loss, flat)
        optimiser.step(gradient, cosine_rate(recipe.learning_rate, step - 1, recipe.steps))
        if step % every == 0 or step == end:
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
            tell(step / end, figures)
    if not held_out:
        return Actor(layers, flat.detach().clone(), np.log(sd)), end, curves
    limit = min(nll for nll, _, _ in looks) + PATIENCE_NATS
    _, steps, chosen = next(look for look in reversed(looks) if look[0] <= limit)
    actor = Actor(layers, chosen, np.zeros(targets.shape[1], dtype=np.float32))
    return Actor(layers, chosen, np.log(held_out_sd(actor, held_out, recipe.sd_floor))), steps, curves


def clone(
    demonstrations: Sequence[Demonstration], recipe: CloneRecipe, seed: int, tell: Tell, stopped: Callable[[], bool]
) -> Clone:
    """Fit a policy to the demonstrations, stopping early by whole episodes that were kept out.

    With fewer than ``recipe.spare_from`` episodes none can be spared for good: the stopping step is found with some
    kept out, then all are fitted for that long. A single episode is fitted for all the recipe's steps.

    Raises:
        LearningError: the fit diverged, or it was told to stop.
    """
    count = len(demonstrations)
    d, m = demonstrations[0].windows.shape[1], demonstrations[0].actions.shape[1]
    layers = Layers((d, *recipe.hidden, m))
    if count == 1:
        actor, steps, curves = _fit(layers, demonstrations, (), recipe, (seed, 1, 0), None, tell, stopped)
        note = "one episode: nothing could be kept out, all steps were taken"
        return Clone(actor, None, steps, (), False, curves, note)
    out = hold_out(count, recipe.held_out, np.random.default_rng((seed, 1, 1)))
    kept = [item for index, item in enumerate(demonstrations) if index not in out]
    held = [demonstrations[index] for index in out]
    spare = count >= recipe.spare_from
    part = 1.0 if spare else 0.5
    actor, steps, curves = _fit(
        layers, kept, held, recipe, (seed, 1, 2), None, lambda done, figures: tell(part * done, figures), stopped
    )
    indices = tuple(int(index) for index in out)
    if spare:
        return Clone(actor, actor, steps, indices, True, curves, f"{len(held)} of {count} episodes kept out")
    probe = actor
    actor, _, again = _fit(
        layers, demonstrations, (), recipe, (seed, 1, 2), steps, lambda done, f: tell(0.5 + 0.5 * done, f), stopped
    )
    curves = {name: values + again[name] for name, values in curves.items()}
    note = f"steps chosen with {len(held)} of {count} episodes out, then all fitted"
    return Clone(actor, probe, steps, indices, False, curves, note)
