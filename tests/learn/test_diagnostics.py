"""Figures beside a run: what starts explain, excitation, and the first-order duality gap, against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
import torch

from nearhand.service.learn.diagnostics import dual_gap, excitation, start_free_share


def test_share_that_starts_leave_is_that_of_the_noise(generator: np.random.Generator) -> None:
    # y = start + noise of variance s² in each of two features: s²/(1 + s²) of the variance is left.
    starts = generator.normal(size=(4000, 2))
    each = starts + 0.5 * generator.normal(size=(4000, 2))
    equal = np.full(4000, 1 / 4000)
    assert start_free_share(each, starts, equal) == pytest.approx(0.2, abs=0.02)
    assert start_free_share(generator.normal(size=(4000, 2)), starts, equal) == pytest.approx(1.0, abs=0.01)
    assert start_free_share(each[:5], starts[:5], np.full(5, 0.2)) == 1.0


def test_excitation_is_the_smallest_eigenvalue_of_the_weighted_moments(generator: np.random.Generator) -> None:
    rows, weights = generator.normal(size=(50, 4)), generator.dirichlet(np.ones(50))
    wanted = np.linalg.eigvalsh((rows.T * weights) @ rows)[0]
    log_weight = torch.from_numpy(np.append(np.log(weights), -np.inf))
    assert excitation(torch.from_numpy(rows), log_weight) == pytest.approx(wanted, rel=1e-9)
    rows[:, 3] = rows[:, 2]
    assert excitation(torch.from_numpy(rows), log_weight) == pytest.approx(0.0, abs=1e-12)


def test_dual_gap_bounds_what_a_linear_objective_misses_on_the_ball(generator: np.random.Generator) -> None:
    slope, w = torch.from_numpy(generator.normal(size=5)), torch.from_numpy(0.1 * generator.normal(size=5))
    nothing = torch.zeros(3, dtype=torch.float64)
    # max over the ball of <g, w'> is |g|, attained at g/|g|.
    assert dual_gap(w, slope, nothing, 1.0) == pytest.approx(float(slope.norm() - slope @ w))
    assert dual_gap(slope / slope.norm(), slope, nothing, 1.0) == pytest.approx(0.0, abs=1e-12)
    assert dual_gap(slope / slope.norm(), slope, torch.tensor([3.0, 4.0]).double(), 0.5) == pytest.approx(2.5)
