"""What a distillation may be told: method, seed, and how much work to put into each part; checked once, then frozen."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, Positive, sentence

Fraction = Annotated[FiniteFloat, Field(gt=0, lt=1)]
Width = Annotated[int, Field(ge=1, le=512)]


class CloneRecipe(Frozen):
    """Maximum likelihood on the demonstrations.

    ``steps`` bounds the gradient steps; with the default the network is trained to convergence, with a few it is
    under-trained. ``hidden`` are the widths of the tanh layers of every version's network. ``sd_floor`` is the smallest
    standard deviation of the action, in half ranges. ``held_out`` is the part of the training episodes kept out for
    early stopping and for choosing, once there are at least ``spare_from`` of them. ``past_action_noise`` is added to
    the past actions of the input, in half ranges, so that the policy looks at the machine instead of repeating itself.
    """

    steps: Annotated[int, Field(ge=1, le=1_000_000)] = 10_000
    hidden: tuple[Width, ...] = Field(default=(64, 64), min_length=1, max_length=4)
    batch: Annotated[int, Field(ge=8, le=65_536)] = 512
    learning_rate: Positive = 3e-3
    weight_decay: Annotated[FiniteFloat, Field(ge=0)] = 1e-4
    sd_floor: Positive = 0.01
    held_out: Fraction = 0.1
    past_action_noise: Annotated[FiniteFloat, Field(ge=0)] = 0.3
    spare_from: Annotated[int, Field(ge=2)] = 6


class OnlineRecipe(Frozen):
    """Proximal-point iterations with roll-outs in the rig's simulator.

    ``discount`` 0 means: an effective horizon of a third of an episode. ``kl_first`` and ``kl_last`` bound the mean
    divergence of each improvement, annealed geometrically over the run. ``sd_start`` is the least standard deviation
    of the explored actions at the first iteration and ``sd_floor`` at the last, in half ranges. ``ess_floor`` is the
    least share of effective samples under the tilted weights. ``anchor`` weighs the cloning term of the improvement.
    The critic starts from nothing, so the first evaluation takes ``first_inner_steps`` instead of ``inner_steps``.
    ``pieces`` is how many pieces of work each batch of roll-outs is divided into, for whoever brings more cores.
    """

    iterations: Annotated[int, Field(ge=1, le=10_000)] = 40
    episodes: Annotated[int, Field(ge=2, le=4096)] = 32
    transitions: Annotated[int, Field(ge=64, le=1_000_000)] = 6000
    discount: Annotated[FiniteFloat, Field(ge=0, lt=1)] = 0.0
    critic_hidden: tuple[Width, ...] = Field(default=(64, 64), min_length=1, max_length=4)
    inner_steps: Annotated[int, Field(ge=1, le=10_000)] = 40
    first_inner_steps: Annotated[int, Field(ge=1, le=10_000)] = 200
    learning_rate: Positive = 3e-3
    kl_first: Positive = 0.05
    kl_last: Positive = 0.005
    improvement_steps: Annotated[int, Field(ge=1, le=10_000)] = 30
    improvement_rate: Positive = 1e-3
    improvement: Literal["closed-form", "sampled"] = "closed-form"
    trust_mean: Positive = 0.1
    trust_sd: Positive = 0.01
    sd_start: Positive = 0.1
    sd_floor: Positive = 0.03
    ess_floor: Fraction = 0.5
    anchor: Annotated[FiniteFloat, Field(ge=0)] = 1.0
    averaging: Fraction = 0.9
    pieces: Annotated[int, Field(ge=1, le=256)] = 1


class OfflineRecipe(Frozen):
    """One dual-smoothing solve around the demonstrations, without a simulator.

    ``reference_sd`` is the spread of the broad reference policy in half ranges; ``temperature`` multiplies 1/sd of the
    Bellman residual to give the tilting strength, until ``ess_floor`` binds.
    """

    steps: Annotated[int, Field(ge=1, le=100_000)] = 1500
    transitions: Annotated[int, Field(ge=64, le=1_000_000)] = 4000
    discount: Annotated[FiniteFloat, Field(ge=0, lt=1)] = 0.0
    learning_rate: Positive = 1e-3
    reference_sd: Positive = 1.0
    alpha: Positive = 1.0
    temperature: Positive = 0.3
    ess_floor: Fraction = 0.5


class SelectionRecipe(Frozen):
    """Which iterates are tried, and in how many fresh roll-outs each."""

    every: Annotated[int, Field(ge=1, le=10_000)] = 8
    episodes: Annotated[int, Field(ge=2, le=4096)] = 64
    segments: Annotated[int, Field(ge=1, le=64)] = 4


class Recipe(Frozen):
    """Everything a distillation may be told; an empty map is a valid recipe."""

    method: Literal["clone", "proximal-online", "proximal-offline"] = "proximal-online"
    seed: Annotated[int, Field(ge=0, lt=2**31)] = 0
    clone: CloneRecipe = CloneRecipe()
    online: OnlineRecipe = OnlineRecipe()
    offline: OfflineRecipe = OfflineRecipe()
    selection: SelectionRecipe = SelectionRecipe()


def recipe_from_map(content: Mapping[str, Any]) -> Recipe:
    """Check a recipe, as read from TOML or received with a request.

    Raises:
        ConfigError: a field is unknown or wrong; the message names it.
    """
    try:
        return Recipe.model_validate(dict(content))
    except ValidationError as error:
        raise ConfigError(f"the recipe: {sentence(error)}", code="config.recipe") from error
