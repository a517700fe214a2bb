"""Equations of motion of the travelling crane: a trolley with a load on a rope, as a nonlinear pendulum.

theta is measured from the downward vertical; the load hangs at (x + L·sin theta, −L·cos theta). With trolley mass M,
load mass m, rope length L, trolley friction b, swing friction c and horizontal wind acceleration w of the load::

    (M + m)·x'' + m·L·(theta''·cos theta − theta'²·sin theta) = F − b·x' + m·w
    m·L²·theta'' + m·L·x''·cos theta + m·g·L·sin theta       = −c·theta' + m·w·L·cos theta

Source: Lagrange's equations of the two bodies, derived here; tests hold them against published linearisations and an
independent integrator. All functions work on arrays of one shape, one entry per episode.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
GRAVITY = 9.81


def swing_acceleration(
    theta: Array, theta_rate: Array, trolley_acceleration: Array, rope: Array, swing_friction: Array, wind: Array
) -> Array:
    """Return theta'' (rad/s²) when the trolley's acceleration is imposed.

    Args:
        swing_friction: c/(m·L²), 1/s.
        wind: w, m/s².
    """
    pull = GRAVITY * np.sin(theta) + (trolley_acceleration - wind) * np.cos(theta)
    return -pull / rope - swing_friction * theta_rate


def free_accelerations(
    theta: Array, velocity: Array, theta_rate: Array, force: Array, *, trolley: Array, load: Array, rope: Array,
    friction: Array, swing_friction: Array, wind: Array,
) -> tuple[Array, Array]:  # fmt: skip
    """Return (x'', theta'') when a force drives the trolley; solves the two equations for both at once.

    Args:
        force: F, N.
        trolley, load: M and m, kg.
        rope: L, m.
        friction: b, N·s/m.
        swing_friction: c, N·m·s.
        wind: w, m/s².
    """
    sine, cosine = np.sin(theta), np.cos(theta)
    push = force - friction * velocity + load * rope * theta_rate**2 * sine + load * wind
    turn = -load * GRAVITY * rope * sine - swing_friction * theta_rate + load * wind * rope * cosine
    determinant = load * rope**2 * (trolley + load * sine**2)
    acceleration = (load * rope**2 * push - load * rope * cosine * turn) / determinant
    angular = ((trolley + load) * turn - load * rope * cosine * push) / determinant
    return acceleration, angular


def driving_force(
    theta: Array, velocity: Array, theta_rate: Array, acceleration: Array, *, trolley: Array, load: Array, rope: Array,
    friction: Array,
) -> Array:  # fmt: skip
    """Return the force F (N) that gives the trolley this acceleration, without wind and swing friction.

    F = (M + m·sin²θ)·x'' + b·x' − m·g·sin θ·cos θ − m·L·θ'²·sin θ: the two equations with θ'' eliminated, the inverse
    of :func:`free_accelerations`.
    """
    sine, cosine = np.sin(theta), np.cos(theta)
    inertia = (trolley + load * sine**2) * acceleration
    force: Array = inertia + friction * velocity - load * GRAVITY * sine * cosine - load * rope * theta_rate**2 * sine
    return force


def rk4(derivative: Callable[[Array], Array], state: Array, step_s: float) -> Array:
    """Advance ``state`` by one step of the classical fourth-order Runge–Kutta method."""
    first = derivative(state)
    second = derivative(state + step_s / 2 * first)
    third = derivative(state + step_s / 2 * second)
    fourth = derivative(state + step_s * third)
    advanced: Array = state + step_s / 6 * (first + 2 * (second + third) + fourth)
    return advanced
