"""Regulator gains against closed forms, published examples and residuals."""

from __future__ import annotations

import math

import numpy as np
import pytest

from nearhand.sim.lqr import Array, continuous_gain, discrete_gain, zero_order_hold

INTEGRATOR = np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([[0.0], [1.0]])


@pytest.mark.parametrize(("q1", "q2", "r"), [(1.0, 1.0, 1.0), (1.0, 0.0, 1.0), (4.0, 1.0, 0.25)])
def test_continuous_double_integrator(q1: float, q2: float, r: float) -> None:
    """K = [√(q₁/r), √(q₂/r + 2√(q₁/r))]; Anderson & Moore 1990, ch. 3 (from memory), derivable by hand."""
    gain, _ = continuous_gain(*INTEGRATOR, np.diag([q1, q2]), np.array([[r]]))
    assert gain[0] == pytest.approx([math.sqrt(q1 / r), math.sqrt(q2 / r + 2 * math.sqrt(q1 / r))], abs=1e-9)


def test_discrete_scalar_is_the_golden_ratio() -> None:
    """p = 1 + p − p²/(1+p) has p = (1+√5)/2."""
    one = np.ones((1, 1))
    gain, p = discrete_gain(one, one, one, one)
    assert (p[0, 0], gain[0, 0]) == pytest.approx(((1 + math.sqrt(5)) / 2, (math.sqrt(5) - 1) / 2), abs=1e-12)


@pytest.mark.parametrize(
    ("period_s", "expected", "radius"),
    [
        (0.1, [0.9170745631141, 1.6355961850466], 0.91707456311409),
        (0.02, [0.98282891334097, 1.7121946441865], 0.98282891334094),
    ],
)
def test_discrete_double_integrator(period_s: float, expected: list[float], radius: float) -> None:
    """Values computed with ``scipy.linalg.solve_discrete_are``; with q₁ = R the closed loop's |pole| equals K₁."""
    a, b = zero_order_hold(*INTEGRATOR, period_s)
    assert b[:, 0] == pytest.approx([period_s**2 / 2, period_s], abs=1e-12)
    gain, p = discrete_gain(a, b, np.eye(2), np.eye(1))
    assert gain[0] == pytest.approx(expected, abs=1e-9)
    assert max(abs(np.linalg.eigvals(a - b @ gain))) == pytest.approx(radius, abs=1e-9)
    assert _residual(a, b, np.eye(2), np.eye(1), p) < 1e-8


def test_underactuated_course_example_and_its_discounted_form() -> None:
    """A = [[1,1],[0,1]], B = [0,1], Q = I, R = 1: closed form of Tedrake's Underactuated Robotics notes."""
    a, b = np.array([[1.0, 1.0], [0.0, 1.0]]), np.array([[0.0], [1.0]])
    gain, p = discrete_gain(a, b, np.eye(2), np.eye(1))
    assert p == pytest.approx(np.array([[2.9471230, 2.3692054], [2.3692054, 4.6131343]]), abs=1e-6)
    assert gain[0] == pytest.approx([0.4220824, 1.2439289], abs=1e-6)
    discounted, _ = discrete_gain(a, b, np.eye(2), np.eye(1), discount=0.95)
    assert discounted[0] == pytest.approx([0.4055864, 1.2140467], abs=1e-6)


def test_textbook_cart_pendulum() -> None:
    """Model, weights and gains of a public university control tutorial on the inverted pendulum.

    M = .5, m = .2, b = .1, I = .006, l = .3, g = 9.8; gains continuous and sampled at 0.01 s as printed there.
    """
    a = np.array(
        [
            [0, 1, 0, 0],
            [0, -0.18181818181818, 2.6727272727273, 0],
            [0, 0, 0, 1],
            [0, -0.45454545454545, 31.181818181818, 0],
        ]
    )
    b = np.array([[0], [1.8181818181818], [0], [4.5454545454545]])
    q, r = np.diag([5000.0, 0.0, 100.0, 0.0]), np.eye(1)
    gain, _ = continuous_gain(a, b, q, r)
    assert gain[0] == pytest.approx([-70.7107, -37.8345, 105.5298, 20.9238], abs=1e-4)
    sampled_a, sampled_b = zero_order_hold(a, b, 0.01)
    assert sampled_a[1] == pytest.approx([0, 0.9982, 0.0267, 0.0001], abs=1e-4)
    sampled, _ = discrete_gain(sampled_a, sampled_b, q, r)
    assert sampled[0] == pytest.approx([-61.9933, -33.5040, 95.0597, 18.8300], abs=1e-4)


def test_accelerated_crane() -> None:
    """x'' = u, θ'' = −(g·θ + u)/L with L = 0.8 m at 50 Hz; gain computed with SciPy, checked by its residual."""
    a = np.array([[0, 1, 0, 0], [0, 0, 0, 0], [0, 0, 0, 1], [0, 0, -9.81 / 0.8, 0]], dtype=np.float64)
    b = np.array([[0.0], [1.0], [0.0], [-1 / 0.8]])
    q, r = np.diag([10.0, 1.0, 20.0, 1.0]), np.array([[0.5]])
    sampled = zero_order_hold(a, b, 0.02)
    gain, p = discrete_gain(*sampled, q, r)
    expected = [4.2284636702711, 3.9716378765282, -6.4136045637, -1.1617667322618]
    assert gain[0] == pytest.approx(expected, abs=1e-7)
    assert _residual(*sampled, q, r, p) < 1e-6


def _residual(a: Array, b: Array, q: Array, r: Array, p: Array) -> float:
    """Return how far P is from solving P = Q + A'PA − A'PB(R+B'PB)⁻¹B'PA."""
    inner = np.linalg.solve(r + b.T @ p @ b, b.T @ p @ a)
    return float(np.abs(q + a.T @ p @ a - a.T @ p @ b @ inner - p).max())
