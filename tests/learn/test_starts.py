"""Matching where roll-outs start to where the demonstrations did."""

from __future__ import annotations

import numpy as np
import pytest

from nearhand.service.learn.starts import EFFECTIVE_SHARE, Wanted, balance, nearest_seed
from nearhand.service.simulators import make_simulator


def test_shares_meet_the_wanted_mean_and_stay_spread_out(generator: np.random.Generator) -> None:
    starts = generator.normal(0, 1, (200, 2))
    shown = generator.normal([0.4, -0.3], 0.8, (30, 2))
    shares = balance(starts, shown, np.ones(30))
    assert shares.sum() == pytest.approx(1.0)
    assert (shares >= 0).all()
    before = np.abs(starts.mean(axis=0) - shown.mean(axis=0)).max()
    after = np.abs(shares @ starts - shown.mean(axis=0)).max()
    assert after < 0.05 * before
    assert 1 / np.square(shares).sum() >= EFFECTIVE_SHARE * 200


def test_shares_are_the_tilted_ones_of_a_single_moment() -> None:
    # Two places only: matching the mean fixes the shares, whatever the method; here 0 and 1 with 3:1 wanted.
    starts = np.array([[0.0], [0.0], [1.0], [1.0]])
    shown = np.array([[0.0], [0.0], [0.0], [1.0]])
    np.testing.assert_allclose(balance(starts, shown, np.ones(4)), [0.375, 0.375, 0.125, 0.125], atol=1e-3)


def test_impossible_starts_are_only_approached(generator: np.random.Generator) -> None:
    starts = generator.normal(0, 1, (40, 2))
    shares = balance(starts, np.full((3, 2), 50.0), np.ones(3))
    assert np.isfinite(shares).all()
    assert 1 / np.square(shares).sum() >= EFFECTIVE_SHARE * 40 - 1e-6


def test_chosen_seed_starts_nearer_than_an_average_one() -> None:
    simulator = make_simulator("test-integrator", {})
    shown = np.random.default_rng(2).normal([0.5, -0.5], 0.7, (4, 2))
    wanted = Wanted(shown, np.ones(4), tries=40)
    chosen = nearest_seed(simulator, 16, 7, wanted)
    assert chosen == nearest_seed(simulator, 16, 7, wanted)
    gap = np.abs(simulator.reset(16, seed=chosen).mean(axis=0) - shown.mean(axis=0)).sum()
    usual = np.mean([np.abs(simulator.reset(16, seed=s).mean(axis=0) - shown.mean(axis=0)).sum() for s in range(40)])
    assert gap < 0.7 * usual
