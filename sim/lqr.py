"""Linear-quadratic regulators: exact discretisation and gains, by SciPy's Riccati solvers."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm, solve_continuous_are, solve_discrete_are

Array = NDArray[np.float64]


def zero_order_hold(a: Array, b: Array, period_s: float) -> tuple[Array, Array]:
    """Return (A_d, B_d) of x' = A·x + B·u with u held for a period, by the exponential of the joint matrix."""
    n, m = a.shape[0], b.shape[1]
    joint = np.zeros((n + m, n + m))
    joint[:n, :n], joint[:n, n:] = a, b
    power = expm(joint * period_s)
    return power[:n, :n], power[:n, n:]


def discrete_gain(a: Array, b: Array, q: Array, r: Array, *, discount: float = 1.0) -> tuple[Array, Array]:
    """Return (K, P): u = −K·x minimises Σ discountᵗ (x'Qx + u'Ru); P solves the discounted Riccati equation.

    Solved with √discount·A and √discount·B in ``scipy.linalg.solve_discrete_are``.
    """
    root = np.sqrt(discount)
    a, b = root * a, root * b
    p = solve_discrete_are(a, b, q, r)
    return np.linalg.solve(r + b.T @ p @ b, b.T @ p @ a), p


def continuous_gain(a: Array, b: Array, q: Array, r: Array) -> tuple[Array, Array]:
    """Return (K, P) of the continuous regulator: K = R⁻¹B'P."""
    p = solve_continuous_are(a, b, q, r)
    return np.linalg.solve(r, b.T @ p), p
