"""The crane's equations against closed forms, conservation laws and an independent integrator.

Reference states: computed with SciPy's DOP853 at relative tolerance 1e-12 for M = 5 kg, m = 2 kg, L = 0.8 m, g = 9.81.
Finite-amplitude period: Landau & Lifshitz, Mechanics, section 11 (from memory), by complete elliptic integral (SciPy).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import ellipk

from nearhand.sim.crane_dynamics import GRAVITY, Array, driving_force, free_accelerations, rk4, swing_acceleration

TROLLEY, LOAD, ROPE = (np.full(1, value) for value in (5.0, 2.0, 0.8))
ZERO = np.zeros(1)


def accelerations(
    theta: float, velocity: float, rate: float, force: float, friction: float, turn: float
) -> list[float]:
    """Return (x'', theta'') of the reference crane."""
    found = free_accelerations(
        np.full(1, theta), np.full(1, velocity), np.full(1, rate), np.full(1, force), trolley=TROLLEY, load=LOAD,
        rope=ROPE, friction=np.full(1, friction), swing_friction=np.full(1, turn), wind=ZERO,
    )  # fmt: skip
    return [float(value[0]) for value in found]


@pytest.mark.parametrize(
    ("state", "force", "free", "rubbed"),
    [
        ((0.3, 0.2, -0.5), 4.0, (1.8662757674672, -5.8524682084751), (1.8419319948701, -5.8194913406689)),
        ((1.2, -0.4, 1.5), -10.0, (-0.0027259041235529, -11.427894601052), (0.033904611817226, -11.456205040429)),
        ((math.pi / 2, 0.0, 1.0), 0.0, (8 / 35, -GRAVITY / 0.8), (8 / 35, -12.2703125)),
    ],
)
def test_accelerations_solve_the_two_by_two_mass_matrix(
    state: tuple[float, float, float], force: float, free: tuple[float, float], rubbed: tuple[float, float]
) -> None:
    """Expected values: NumPy's solution of the 2×2 system; at 90° exactly m·L·θ'²/(M+m) and −g/L."""
    assert accelerations(*state, force, 0.0, 0.0) == pytest.approx(free, abs=1e-9)
    assert accelerations(*state, force, 0.6, 0.01) == pytest.approx(rubbed, abs=1e-9)


def test_the_driving_force_is_the_one_that_gives_the_reference_accelerations() -> None:
    """The inverse, on the same states: forces 4 N and −10 N from NumPy's accelerations, trolley friction 0.6."""
    for theta, velocity, rate, free, force in (
        (0.3, 0.2, -0.5, 1.8662757674672, 4.0),
        (1.2, -0.4, 1.5, -0.0027259041235529, -10.0),
    ):
        found = driving_force(
            np.full(1, theta), np.full(1, velocity), np.full(1, rate), np.full(1, free), trolley=TROLLEY, load=LOAD,
            rope=ROPE, friction=np.full(1, 0.6),
        )  # fmt: skip
        assert found[0] == pytest.approx(force + 0.6 * velocity, abs=1e-9)


def test_the_linearisation_is_the_textbook_one() -> None:
    """x'' = (F + m·g·θ)/M, θ'' = −(F + (M+m)·g·θ)/(M·L): slopes 3.924, −17.1675 in θ and 0.2, −0.25 in F."""
    small = 1e-6
    by_angle = [value / small for value in accelerations(small, 0.0, 0.0, 0.0, 0.0, 0.0)]
    by_force = [value / small for value in accelerations(0.0, 0.0, 0.0, small, 0.0, 0.0)]
    assert by_angle == pytest.approx([3.924, -17.1675], abs=1e-6)
    assert by_force == pytest.approx([0.2, -0.25], abs=1e-6)


@pytest.mark.parametrize(
    ("trolley", "load", "rope", "frequency"),
    [(5.0, 2.0, 0.8, 4.1433681950799), (10.0, 5.0, 1.0, 3.8360135557633), (1000.0, 5000.0, 6.0, 3.1320919526732)],
)
def test_a_free_trolley_swings_faster_by_the_square_root_of_one_plus_the_mass_ratio(
    trolley: float, load: float, rope: float, frequency: float
) -> None:
    """ω = √((M+m)·g/(M·L)) for small swings of a force-driven crane; from the linearised Lagrangian."""
    small = 1e-6
    _, angular = free_accelerations(
        np.full(1, small), ZERO, ZERO, ZERO, trolley=np.full(1, trolley), load=np.full(1, load), rope=np.full(1, rope),
        friction=ZERO, swing_friction=ZERO, wind=ZERO,
    )  # fmt: skip
    assert math.sqrt(-float(angular[0]) / small) == pytest.approx(frequency, rel=1e-9)


def crane_derivative(state: Array) -> Array:
    """x, theta, x', theta' of the free reference crane."""
    acceleration, angular = free_accelerations(
        state[1], state[2], state[3], ZERO, trolley=TROLLEY, load=LOAD, rope=ROPE, friction=ZERO, swing_friction=ZERO,
        wind=ZERO,
    )  # fmt: skip
    return np.stack((state[2], state[3], acceleration, angular))


def energy(state: Array) -> float:
    """Kinetic and potential energy of the reference crane, J."""
    _, theta, velocity, rate = state[:, 0]
    moving = 0.5 * 7.0 * velocity**2 + 2.0 * 0.8 * velocity * rate * math.cos(theta) + 0.5 * 2.0 * 0.64 * rate**2
    return float(moving - 2.0 * GRAVITY * 0.8 * math.cos(theta))


@pytest.mark.parametrize(("step_s", "drift_j"), [(0.02, 1.5e-5), (0.01, 5.1e-7), (0.005, 2.0e-8)])
def test_free_motion_agrees_with_the_reference_integrator_and_keeps_energy_and_momentum(
    step_s: float, drift_j: float
) -> None:
    state = np.array([[0.0], [0.8], [0.3], [0.0]])
    before = energy(state)
    worst = 0.0
    for _ in range(round(10 / step_s)):
        state = rk4(crane_derivative, state, step_s)
        worst = max(worst, abs(energy(state) - before))
    assert before == pytest.approx(-10.620508509913, abs=1e-9)
    assert worst < drift_j
    momentum = 7.0 * state[2, 0] + 2.0 * 0.8 * state[3, 0] * math.cos(state[1, 0])
    assert momentum == pytest.approx(2.1, abs=1e-5)
    # DOP853's state at 10 s; the tolerance is the method's own global error at the coarsest step.
    reference = [3.0004271209575, 0.79732156553404, 0.33734290635984, -0.23385231732478]
    assert state[:, 0] == pytest.approx(reference, abs=2e-5)


def arithmetic_geometric_mean(first: float, second: float) -> float:
    """Return AGM(a, b)."""
    while abs(first - second) > 1e-15 * first:
        first, second = (first + second) / 2, math.sqrt(first * second)
    return first


@pytest.mark.parametrize("degrees", [10, 30, 60, 90])
def test_the_period_at_large_amplitude_is_the_elliptic_integral(degrees: float) -> None:
    """T/T₀ = (2/π)·K(sin²(θ₀/2)); SciPy's ``ellipk`` takes the parameter m = k²."""
    amplitude = math.radians(degrees)
    rope, step_s = np.ones(1), 1e-3
    state, time_s = np.array([[amplitude], [0.0]]), 0.0

    def derivative(now: Array) -> Array:
        return np.stack((now[1], swing_acceleration(now[0], now[1], ZERO, rope, ZERO, ZERO)))

    while state[0, 0] > 0:
        before = float(state[0, 0])
        state = rk4(derivative, state, step_s)
        time_s += step_s
    # The angle is linear to 1e-9 within the last step: interpolate the crossing.
    quarter_s = time_s - step_s * float(state[0, 0]) / (float(state[0, 0]) - before)
    expected_s = 2 * math.pi / math.sqrt(GRAVITY) * (2 / math.pi) * ellipk(math.sin(amplitude / 2) ** 2)
    # A second way to the same figure: T₀ over the arithmetic-geometric mean of 1 and cos(θ₀/2).
    mean = arithmetic_geometric_mean(1.0, math.cos(amplitude / 2))
    assert expected_s == pytest.approx(2 * math.pi / math.sqrt(GRAVITY) / mean, rel=1e-12)
    assert 4 * quarter_s == pytest.approx(expected_s, rel=1e-6)


@pytest.mark.parametrize(
    ("rope_m", "push", "pulse_s", "expected"), [(1.0, 0.5, 1.0, 0.10193564904245), (0.8, 0.3, 0.7, 0.057554583652754)]
)
def test_an_acceleration_pulse_leaves_the_swing_of_the_linear_formula(
    rope_m: float, push: float, pulse_s: float, expected: float
) -> None:
    """Residual amplitude (2a/g)·|sin(ω·t/2)| of the linear pendulum; here the nonlinear one at a hundredth of it."""
    scale, steps = 0.01, 1000
    rope = np.full(1, rope_m)

    def derivative(now: Array) -> Array:
        return np.stack((now[1], swing_acceleration(now[0], now[1], np.full(1, scale * push), rope, ZERO, ZERO)))

    state = np.zeros((2, 1))
    for _ in range(steps):
        state = rk4(derivative, state, pulse_s / steps)
    frequency = math.sqrt(GRAVITY / rope_m)
    assert math.hypot(state[0, 0], state[1, 0] / frequency) / scale == pytest.approx(expected, rel=1e-5)


def test_rk4_is_of_fourth_order_with_the_textbook_errors() -> None:
    """y' = −y: errors at t = 1 for h = 0.1, 0.05 (closed form; Hairer, Nørsett & Wanner, from memory)."""
    errors = []
    for step_s in (0.1, 0.05):
        state = np.ones((1, 1))
        for _ in range(round(1 / step_s)):
            state = rk4(lambda now: -now, state, step_s)
        errors.append(abs(float(state[0, 0]) - math.exp(-1)))
    assert errors == pytest.approx([3.3324105608301e-07, 1.9976097331842e-08], rel=1e-6)
    assert math.log2(errors[0] / errors[1]) == pytest.approx(4.06, abs=0.01)
