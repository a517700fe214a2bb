"""Occupancies, telescoping, absorbing states, features, and the sampled objective against the exact one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import torch

from nearhand.service.learn.cloning import Actor
from nearhand.service.learn.critic import QuadraticCritic
from nearhand.service.learn.demonstrations import Demonstration, blur_past_actions
from nearhand.service.learn.features import discounted_means, effective_discount, fit_features
from nearhand.service.learn.layers import Layers
from nearhand.service.learn.objective import Sample, Setting, objective, project_cost, residuals, tilting_strength
from nearhand.service.learn.offline import as_rollouts
from nearhand.service.learn.sampling import draw_sample, mean_features, occupancy, systematic

DISCOUNT = 0.9


def demonstrations(generator: np.random.Generator, *, ended: bool = True) -> list[Demonstration]:
    """Return episodes of different lengths, the first of which ends in a true terminal state."""
    return [
        Demonstration(
            generator.standard_normal((length + 1, 3)).astype(np.float32),
            generator.standard_normal((length, 2)).astype(np.float32),
            1.0,
            ended and index == 0,
        )
        for index, length in enumerate((7, 12, 12))
    ]


def draw(generator: np.random.Generator, *, ended: bool = True, transitions: int = 1000) -> Sample:
    """Return the sample of those episodes."""
    shown = demonstrations(generator, ended=ended)
    layers = Layers((3, 4, 2))
    actor = Actor(layers, layers.draw(generator), np.zeros(2, dtype=np.float32))
    return draw_sample(fit_features(3, shown), as_rollouts(shown), actor, DISCOUNT, transitions, generator)


def test_features_are_standardised_on_the_demonstrations(generator: np.random.Generator) -> None:
    shown = demonstrations(generator)
    features = fit_features(3, shown)
    values = features(np.concatenate([d.windows[:-1] for d in shown]), np.concatenate([d.actions for d in shown]))
    np.testing.assert_allclose(values.mean(axis=0), 0, atol=1e-5)
    np.testing.assert_allclose(values.std(axis=0), 1, atol=1e-4)
    # 5 coordinates, 15 products, ranks and their squares.
    assert features.count == 5 + 15 + 5 + 5


def test_rank_features_resolve_a_small_miss_where_the_expert_lingers() -> None:
    generator = np.random.default_rng(3)
    travel = np.linspace(3, 0, 200)
    lingering = 0.003 * generator.standard_normal(200)
    windows = np.concatenate([travel, lingering, [0.0]])[:, None].astype(np.float32)
    features = fit_features(1, [Demonstration(windows, np.zeros((400, 1), dtype=np.float32), 1.0, False)])
    at, missed = (features(np.array([[x]], dtype=np.float32), np.zeros((1, 1), dtype=np.float32)) for x in (0.0, 0.03))
    moved = np.abs(missed - at)[0]
    linear, rank = moved[0], moved[features.count - 4]
    assert rank > 10 * linear


def test_wild_states_leave_features_finite_and_bounded(generator: np.random.Generator) -> None:
    features = fit_features(3, demonstrations(generator))
    wild = features(np.full((1, 3), 1e30, dtype=np.float32), np.full((1, 2), -1e30, dtype=np.float32))
    assert np.isfinite(wild).all()
    assert np.abs(wild).max() < 1000


def test_absorbing_mass_after_a_terminal_and_none_after_a_time_limit(generator: np.random.Generator) -> None:
    shown = demonstrations(generator)
    _, absorbed = discounted_means(fit_features(3, shown), shown, DISCOUNT, 12)
    # (1-g) sum_{t >= T} g^t = g^T, out of a total of one; a cut episode has no such mass.
    np.testing.assert_allclose(absorbed, [DISCOUNT**7, 0, 0], atol=1e-12)
    mass = occupancy(as_rollouts(shown), DISCOUNT)
    assert mass.weights.sum() + mass.absorbing == pytest.approx(1.0)
    assert mass.weights[0, 7:].sum() == 0
    ratio = mass.weights[1, 1:] / mass.weights[1, :-1]
    np.testing.assert_allclose(ratio, DISCOUNT, rtol=1e-12)


def test_roll_outs_and_demonstrations_of_the_same_episodes_have_the_same_means(generator: np.random.Generator) -> None:
    shown = demonstrations(generator, ended=False)[1:]
    features = fit_features(3, shown)
    means, absorbed = discounted_means(features, shown, DISCOUNT, 12)
    found = mean_features(features, as_rollouts(shown), DISCOUNT)
    np.testing.assert_allclose(found, np.append(means.mean(axis=0), absorbed.mean()), atol=1e-6)


@pytest.mark.parametrize("ended", [False, True])
def test_flow_term_telescopes_over_complete_episodes(ended: bool, generator: np.random.Generator) -> None:
    # sum over all transitions of w (V - g V') equals the first-and-last form, terminals and time limits alike.
    sample = draw(generator, ended=ended)
    values = torch.from_numpy(generator.standard_normal(len(sample.windows)).astype(np.float32))
    absorbing = torch.tensor(0.7)
    weights = torch.exp(sample.log_weight)
    following = torch.where(sample.ends, absorbing, values[sample.there])
    long = (weights[:-1] * (values[sample.here] - DISCOUNT * following)).sum()
    long = long + weights[-1] * (1 - DISCOUNT) * absorbing
    short = (sample.flow_first * values[sample.first]).sum() - (sample.flow_last * values[sample.last]).sum()
    assert float(short) == pytest.approx(float(long), abs=1e-6)
    assert float(weights.sum()) == pytest.approx(1.0, abs=1e-6)
    assert bool(sample.ends.any()) is ended


def test_gradients_are_feature_mismatch_and_flow_violation(generator: np.random.Generator) -> None:
    sample = draw(generator)
    critic = QuadraticCritic(3, 2, (5,), gain=1.0)
    flat = critic.draw(generator) + 0.1 * torch.from_numpy(generator.standard_normal(critic.layers.count)).float()
    flat.requires_grad_()
    k = sample.features.shape[1] + 1
    cost = torch.from_numpy(generator.standard_normal(k).astype(np.float32) * 0.1).requires_grad_()
    absorbing = torch.tensor(0.3, requires_grad=True)
    expert = torch.from_numpy(generator.standard_normal(k).astype(np.float32))
    setting = Setting(0.8, 1.2, DISCOUNT, torch.tensor([0.5, 0.3]), expert)

    def gain(w: torch.Tensor, value: torch.Tensor) -> torch.Tensor:
        delta, values, _ = residuals(critic, flat, w, value, sample, setting)
        return objective(delta, values, w, value, sample, setting)

    for_cost, for_absorbing = torch.autograd.grad(gain(cost, absorbing), (cost, absorbing))
    with torch.no_grad():
        delta, _, _ = residuals(critic, flat, cost, absorbing, sample, setting)
        tilted = torch.softmax(sample.log_weight - setting.eta * delta, dim=0)
        lived = tilted[:-1] @ sample.features
        np.testing.assert_allclose(for_cost, torch.cat([lived, tilted[-1:]]) - expert, atol=1e-5)
        entering = tilted[:-1][sample.ends].sum()
        violation = DISCOUNT * entering + DISCOUNT * tilted[-1] - tilted[-1]
        assert float(for_absorbing) == pytest.approx(float(violation), abs=1e-5)


def test_systematic_resampling_keeps_every_expected_count(generator: np.random.Generator) -> None:
    weights = generator.dirichlet(np.ones(20))
    counts = np.bincount(systematic(weights, 1000, generator), minlength=20)
    assert np.abs(counts - 1000 * weights).max() <= 1  # by construction, floor or ceiling of the expectation


def test_tilting_strength_keeps_its_share_of_samples(generator: np.random.Generator) -> None:
    log_weight = torch.full((400,), -float(np.log(400)))
    delta = torch.from_numpy(generator.standard_t(2, 400).astype(np.float32))
    eta, spread = tilting_strength(log_weight, delta, 0.6)
    assert spread == pytest.approx(float(delta.std(unbiased=False)), rel=1e-4)
    tilted = torch.softmax(log_weight - eta * delta, dim=0)
    assert float(1 / tilted.square().sum()) / 400 >= 0.6
    assert eta <= 1 / spread + 1e-6


def test_cost_is_projected_on_the_ball_and_left_alone_inside() -> None:
    outside, inside = torch.tensor([3.0, 4.0]), torch.tensor([0.3, 0.4])
    project_cost(outside)
    project_cost(inside)
    np.testing.assert_allclose(outside, [0.6, 0.8], atol=1e-7)
    np.testing.assert_allclose(inside, [0.3, 0.4], atol=1e-7)


def test_automatic_discount_reaches_over_the_episode() -> None:
    assert effective_discount(0.97, [100]) == 0.97
    assert effective_discount(0.0, [300, 300]) == pytest.approx(0.99)
    assert effective_discount(0.0, [5]) == 0.9


def test_blurring_touches_past_actions_alone(generator: np.random.Generator) -> None:
    rows = generator.standard_normal((50, 7)).astype(np.float32)
    blurred = blur_past_actions(rows, 2, 0.3, generator)
    np.testing.assert_array_equal(blurred[:, :5], rows[:, :5])
    moved = blurred[:, 5:] - rows[:, 5:]
    np.testing.assert_allclose(moved[:, 0], moved[:, 1], atol=1e-6)
    assert 0.2 < float(moved.std()) < 0.4
    assert blur_past_actions(rows, 0, 0.3, generator) is rows


def test_episode_weights_become_shares(generator: np.random.Generator) -> None:
    shown = [
        replace(item, weight=weight) for item, weight in zip(demonstrations(generator), (1.0, 3.0, 0.0), strict=True)
    ]
    np.testing.assert_allclose(as_rollouts(shown).shares, [0.25, 0.75, 0.0])
