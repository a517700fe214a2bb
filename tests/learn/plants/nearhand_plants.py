"""Two small plants and their experts, as a rig's package would bring them; found through entry points."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_discrete_are

from nearhand.service.simulators import Simulator, Step

Float64 = NDArray[np.float64]
GRAVITY = 9.81


class Plant:
    """Bookkeeping of a batch of episodes; a plant adds ``first`` and ``move``."""

    def __init__(self, period_s: float, max_steps: int, observation_size: int, action_size: int) -> None:
        self.period_s, self.max_steps = period_s, max_steps
        self.observation_size, self.action_size = observation_size, action_size

    def first(self, count: int, generator: np.random.Generator) -> Float64:
        """Return start states (B, states)."""
        raise AssertionError("a plant defines its start")

    def move(self, state: Float64, action: Float64) -> tuple[Float64, Float64, NDArray[np.bool_]]:
        """Return next states, the period's score, and which fell."""
        raise AssertionError("a plant defines its motion")

    def observe(self, state: Float64) -> Float64:
        """Return observations; the state itself unless a plant knows better."""
        return state

    def reset(self, count: int, *, seed: int) -> Float64:
        """Start episodes."""
        self.generator = np.random.default_rng(seed)
        self.state = self.first(count, self.generator)
        self.t = 0
        self.score = np.zeros(count)
        self.fallen = np.zeros(count, dtype=bool)
        return self.observe(self.state)

    def step(self, actions: Float64) -> Step:
        """Advance one period."""
        following, score, fell = self.move(self.state, actions)
        alive = ~self.fallen & (self.t < self.max_steps)
        self.state = np.where(alive[:, None], following, self.state)
        score = np.where(alive, score, 0.0)
        self.score += score
        self.fallen = self.fallen | (alive & fell)
        self.t += 1
        out = np.full(len(score), self.t >= self.max_steps) & ~self.fallen
        return Step(self.observe(self.state), score, self.fallen.copy(), out)

    def outcomes(self) -> dict[str, Float64]:
        """Return the total score, and whether it never fell."""
        return {"score": self.score.copy(), "success": (~self.fallen).astype(np.float64)}


class Pendulum(Plant):
    """A torque-limited pendulum that starts hanging; angle 0 is upright, |u| ≤ 3 N·m for 9.81 N·m of weight."""

    def __init__(self, options: Mapping[str, Any]) -> None:
        super().__init__(0.05, int(options.get("max_steps", 200)), 3, 1)

    def first(self, count: int, generator: np.random.Generator) -> Float64:
        """Return angles around hanging, and small rates."""
        angle = np.pi + generator.uniform(-0.6, 0.6, count)
        return np.stack([angle, generator.uniform(-0.5, 0.5, count)], axis=1)

    def observe(self, state: Float64) -> Float64:
        """Return cosine, sine and rate."""
        return np.stack([np.cos(state[:, 0]), np.sin(state[:, 0]), state[:, 1]], axis=1)

    def move(self, state: Float64, action: Float64) -> tuple[Float64, Float64, NDArray[np.bool_]]:
        """Integrate in five semi-implicit steps; the score is the height."""
        angle, rate = state[:, 0], state[:, 1]
        torque = np.clip(action[:, 0], -3, 3)
        for _ in range(5):
            rate = rate + (GRAVITY * np.sin(angle) + torque) * self.period_s / 5
            angle = angle + rate * self.period_s / 5
        return np.stack([angle, rate], axis=1), np.cos(angle), np.zeros(len(angle), dtype=bool)


class PendulumExpert:
    """Pumps energy until upright is in reach, then catches linearly; with a little hand noise."""

    def reset(self, observations: Float64, *, seed: int) -> None:
        """Begin."""
        self.generator = np.random.default_rng(seed)

    def act(self, observations: Float64) -> Float64:
        """Return torques (B, 1)."""
        angle, rate = np.arctan2(observations[:, 1], observations[:, 0]), observations[:, 2]
        energy = 0.5 * rate**2 + GRAVITY * (np.cos(angle) - 1)
        pump = np.where(np.abs(energy) < 0.2, 0.0, -np.sign(energy)) * np.tanh(rate / 0.3) * 3
        catch = -(22 * angle + 6 * rate)
        near = (np.abs(angle) < 0.35) & (np.abs(rate) < 1.5)
        torque = np.where(near, catch, pump) + 0.05 * self.generator.standard_normal(len(angle))
        return np.clip(torque, -3, 3)[:, None]


class DoubleIntegrator(Plant):
    """x' = Ax + Bu + noise with dt = 0.1; ``fall`` > 0 makes |position| beyond it a true terminal state."""

    A = np.array([[1.0, 0.1], [0.0, 1.0]])
    B = np.array([[0.005], [0.1]])

    def __init__(self, options: Mapping[str, Any]) -> None:
        super().__init__(0.1, int(options.get("max_steps", 60)), 2, 1)
        self.fall = float(options.get("fall", 0.0))

    def first(self, count: int, generator: np.random.Generator) -> Float64:
        """Return starts around the origin."""
        return generator.normal(0, 1, (count, 2))

    def move(self, state: Float64, action: Float64) -> tuple[Float64, Float64, NDArray[np.bool_]]:
        """Advance; the score is the negative quadratic cost."""
        noise = self.generator.normal(0, 0.01, state.shape)
        score = -(np.square(state).sum(axis=1) + 0.1 * np.square(action).sum(axis=1))
        following = state @ self.A.T + action @ self.B.T + noise
        return (
            following,
            score,
            (np.abs(following[:, 0]) > self.fall if self.fall else np.zeros(len(state), dtype=bool)),
        )


class SoftRegulator:
    """The entropy-regularised optimal controller of the double integrator, N(-Kx, s²); Q = I, R = 0.1, tau = 0.02."""

    def __init__(self) -> None:
        A, B = DoubleIntegrator.A, DoubleIntegrator.B
        R = 0.1 * np.eye(1)
        P = solve_discrete_are(A, B, np.eye(2), R)
        self.gain = np.linalg.solve(R + B.T @ P @ B, B.T @ P @ A)
        self.sd = float(np.sqrt(0.01 / (R + B.T @ P @ B)[0, 0]))

    def reset(self, observations: Float64, *, seed: int) -> None:
        """Begin."""
        self.generator = np.random.default_rng(seed)

    def act(self, observations: Float64) -> Float64:
        """Return a draw (B, 1)."""
        return -observations @ self.gain.T + self.sd * self.generator.standard_normal((len(observations), 1))


def make_pendulum(options: Mapping[str, Any]) -> Pendulum:
    """Build the pendulum."""
    return Pendulum(options)


def make_integrator(options: Mapping[str, Any]) -> DoubleIntegrator:
    """Build the double integrator."""
    return DoubleIntegrator(options)


def make_pendulum_expert(simulator: Simulator, options: Mapping[str, Any]) -> PendulumExpert:
    """Build the pendulum's expert."""
    return PendulumExpert()


def make_regulator(simulator: Simulator, options: Mapping[str, Any]) -> SoftRegulator:
    """Build the regulator."""
    return SoftRegulator()
