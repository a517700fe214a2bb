"""The entropy-regularised linear-quadratic regulator: closed forms, and the trainer's parts on it.

Minimise E sum g^t [x'Qx + u'Ru + tau log pi]: pi = N(-Kx, (tau/2)(R + g B'PB)^-1) with P of the discounted Riccati
equation. Source: Guo, Li & Xu, arXiv 2311.14168 (Gaussian optimum); values computed with scipy.linalg.
"""

from __future__ import annotations

import numpy as np
import pytest
import torch
from scipy.linalg import solve_discrete_are

from nearhand.service.learn.cloning import clone
from nearhand.service.learn.critic import Coefficients, improved_gaussian, soft_minimum
from nearhand.service.learn.demonstrations import Demonstration
from nearhand.service.recipes import CloneRecipe

Array = np.ndarray[tuple[int, ...], np.dtype[np.float64]]
A, B = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[0.0], [1.0]])
Q, R, G, TAU = np.eye(2), np.eye(1), 0.95, 0.2
NOISE = 0.01 * np.eye(2)


def solve() -> tuple[Array, Array, Array]:
    """Return P, the gain K and M = R + g B'PB of the discounted problem."""
    P = solve_discrete_are(np.sqrt(G) * A, np.sqrt(G) * B, Q, R)
    M = R + G * B.T @ P @ B
    return P, np.linalg.solve(M, G * B.T @ P @ A), M


def soft_q(states: Array, P: Array, offset: float) -> Coefficients:
    """Return x'Qx + u'Ru + g E V(Ax + Bu + w) with V = x'Px + offset, as the critic's coefficients."""
    M = R + G * B.T @ P @ B
    level = np.einsum("ni,ij,nj->n", states, Q + G * A.T @ P @ A, states) + G * (np.trace(P @ NOISE) + offset)
    slope = 2 * G * states @ A.T @ P @ B
    factor = np.broadcast_to(np.linalg.cholesky(M), (len(states), 1, 1)).copy()
    return Coefficients(torch.from_numpy(level), torch.from_numpy(slope), torch.from_numpy(factor))


def test_riccati_solution_has_the_textbook_values() -> None:
    P, K, M = solve()
    np.testing.assert_allclose(P, [[2.8233672, 2.2289536], [2.2289536, 4.4430004]], atol=1e-7)
    np.testing.assert_allclose(K, [[0.4055864, 1.2140467]], atol=1e-7)
    assert TAU / 2 / M[0, 0] == pytest.approx(0.01915397, abs=1e-8)


def test_improvement_from_a_flat_reference_is_the_soft_optimal_policy() -> None:
    # π ∝ N(0, huge) exp(-Q/tau): temperature 1/tau, mean -Kx, variance (tau/2)/M.
    P, K, M = solve()
    states = np.random.default_rng(1).normal(0, 1, (20, 2))
    mean, covariance = improved_gaussian(
        soft_q(states, P, 0.0),
        torch.zeros(20, 1, dtype=torch.float64),
        torch.tensor([1e9], dtype=torch.float64),
        1 / TAU,
    )
    np.testing.assert_allclose(mean, -states @ K.T, atol=1e-8)
    np.testing.assert_allclose(covariance[:, 0, 0], TAU / 2 / M[0, 0], rtol=1e-8)


def test_soft_value_satisfies_its_own_bellman_equation() -> None:
    # (1-g) v0 = g tr(PW) - (tau/2) log((pi tau)^dim / det M); at x = (1, -.5) V = 7.3205102, v0 = 5.6153465.
    P, _, M = solve()
    offset = (G * np.trace(P @ NOISE) - TAU / 2 * np.log(np.pi * TAU / M[0, 0])) / (1 - G)
    assert offset == pytest.approx(5.6153465, abs=1e-7)
    states = np.array([[1.0, -0.5], [0.3, 2.0]])
    wide = 1e9
    value = soft_minimum(
        soft_q(states, P, offset),
        torch.zeros(2, 1, dtype=torch.float64),
        torch.tensor([wide], dtype=torch.float64),
        1 / TAU,
    )
    # The soft minimum is relative to N(0, wide); the entropy of the problem is relative to Lebesgue measure.
    value = value - TAU * 0.5 * np.log(2 * np.pi * wide)
    wanted = np.einsum("ni,ij,nj->n", states, P, states) + offset
    np.testing.assert_allclose(value, wanted, atol=1e-5)
    assert wanted[0] == pytest.approx(7.3205102, abs=1e-7)


def test_proximal_step_from_a_gaussian_reference_weighs_gains_by_precision() -> None:
    # Double integrator dt = .1, Q = I, R = 1, g = .95, alpha = .5, reference N(-(.5, 1)x, .2); derived and computed.
    A1, B1 = np.array([[1.0, 0.1], [0.0, 1.0]]), np.array([[0.005], [0.1]])
    P = solve_discrete_are(np.sqrt(G) * A1, np.sqrt(G) * B1, np.eye(2), np.eye(1))
    M = 1 + G * (B1.T @ P @ B1)
    states = np.eye(2)
    slope = torch.from_numpy(2 * G * states @ A1.T @ P @ B1)
    factor = torch.from_numpy(np.broadcast_to(np.sqrt(M), (2, 1, 1)).copy())
    at = Coefficients(torch.zeros(2, dtype=torch.float64), slope, factor)
    reference = torch.from_numpy(-states @ np.array([[0.5], [1.0]]))
    mean, covariance = improved_gaussian(at, reference, torch.tensor([0.2], dtype=torch.float64), 1 / 0.5)
    np.testing.assert_allclose(-mean[:, 0], [0.54437481836776, 1.1019488290926], atol=1e-9)
    np.testing.assert_allclose(covariance[:, 0, 0], 0.10484898574832, atol=1e-9)


def test_clone_of_the_soft_optimal_expert_finds_its_gain_and_spread() -> None:
    # Maximum likelihood on N(-Kx, s²): the mean is linear and the residual is the expert's own spread.
    _, K, M = solve()
    sd = float(np.sqrt(TAU / 2 / M[0, 0]))
    generator = np.random.default_rng(5)
    demonstrations = []
    for _ in range(10):
        state, states, actions = generator.normal(0, 1, 2), [], []
        for _ in range(80):
            states.append(state)
            actions.append(-K @ state + sd * generator.standard_normal(1))
            state = A @ state + B @ actions[-1] + 0.1 * generator.standard_normal(2)
        windows = np.asarray([*states, state], dtype=np.float32)
        demonstrations.append(Demonstration(windows, np.asarray(actions, dtype=np.float32), 1.0, False))
    made = clone(demonstrations, CloneRecipe(steps=3000), 0, lambda done, figures: None, lambda: False)
    assert float(np.exp(made.actor.log_sd[0])) == pytest.approx(sd, rel=0.12)
    probe = generator.normal(0, 0.5, (200, 2)).astype(np.float32)
    fitted = np.linalg.lstsq(probe, -made.actor.mean(probe), rcond=None)[0][:, 0]
    # 640 samples of noise sd .138 over states of sd about .5: gain errors near .01, the network's bend a few more.
    np.testing.assert_allclose(fitted, K[0], atol=0.06)
