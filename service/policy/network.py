"""A policy in NumPy: history, normalisation, a small network, action units."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Float32 = NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Policy:
    """A Gaussian policy's mean, ready to run; made by training or read from a file.

    The input is the stacked window: the present observation, then ``past_observations`` earlier ones (newest first),
    then ``past_actions`` earlier actions (newest first, scaled to [-1, 1]). Observations are standardised:
    (o - observation_mean) / observation_scale. Hidden layers use tanh; the output u is linear, and the action is
    action_middle + action_half·u, not limited: limiting is the envelope's duty.

    Attributes:
        weights: per layer (inputs, outputs) float32.
        biases: per layer (outputs,) float32.
        observation_mean, observation_scale: (n,) float32.
        action_middle, action_half: (m,) float32, half > 0.
        log_sd: (m,) float32, standard deviation of u on the log scale; used in training and likelihoods, not served.
    """

    weights: tuple[Float32, ...]
    biases: tuple[Float32, ...]
    observation_mean: Float32
    observation_scale: Float32
    action_middle: Float32
    action_half: Float32
    log_sd: Float32
    past_observations: int = 0
    past_actions: int = 0

    @property
    def observation_size(self) -> int:
        """Number n of observation channels."""
        return int(self.observation_mean.shape[0])

    @property
    def action_size(self) -> int:
        """Number m of action channels."""
        return int(self.action_middle.shape[0])

    @property
    def input_size(self) -> int:
        """Width of the stacked window."""
        return self.observation_size * (1 + self.past_observations) + self.action_size * self.past_actions

    def mean(self, window: Float32) -> Float32:
        """Return u (…, m), in units of half a range, for stacked windows (…, input_size)."""
        hidden = window
        for weight, bias in zip(self.weights[:-1], self.biases[:-1], strict=True):
            hidden = np.tanh(hidden @ weight + bias)
        return np.asarray(hidden @ self.weights[-1] + self.biases[-1], dtype=np.float32)

    def action(self, window: Float32) -> Float32:
        """Return the mean action (…, m) in the rig's units."""
        return np.asarray(self.action_middle + self.action_half * self.mean(window), dtype=np.float32)


class Window:
    """The history of a batch of B episodes, as the policy wants it; shape (B, input_size), newest first.

    Call ``start`` with the first observation, then alternate ``acted`` (the action that was truly applied) and
    ``observed`` (what followed). Before there is a history, the first observation and the action ``rest`` fill it.
    """

    def __init__(self, policy: Policy, count: int, rest: Float32) -> None:
        self._policy = policy
        self._n = policy.observation_size
        self._m = policy.action_size
        self._first_action = self._n * (1 + policy.past_observations)
        self._rest = ((rest - policy.action_middle) / policy.action_half).astype(np.float32)
        self.values: Float32 = np.zeros((count, policy.input_size), dtype=np.float32)

    def _scaled(self, observations: NDArray[np.floating]) -> Float32:
        return np.asarray(
            (observations - self._policy.observation_mean) / self._policy.observation_scale, dtype=np.float32
        )

    def start(self, observations: NDArray[np.floating]) -> Float32:
        """Begin with first observations (B, n); return the window."""
        self.values[:, : self._first_action] = np.tile(self._scaled(observations), 1 + self._policy.past_observations)
        if self._policy.past_actions:
            self.values[:, self._first_action :] = np.tile(self._rest, self._policy.past_actions)
        return self.values

    def acted(self, actions: NDArray[np.floating]) -> None:
        """Note the actions (B, m), in the rig's units, that were applied."""
        if self._policy.past_actions:
            block = self.values[:, self._first_action :]
            block[:, self._m :] = block[:, : -self._m].copy()
            block[:, : self._m] = (actions - self._policy.action_middle) / self._policy.action_half

    def observed(self, observations: NDArray[np.floating]) -> Float32:
        """Take in the next observations (B, n); return the window."""
        block = self.values[:, : self._first_action]
        if self._policy.past_observations:
            block[:, self._n :] = block[:, : -self._n].copy()
        block[:, : self._n] = self._scaled(observations)
        return self.values


def episode_windows(policy: Policy, observations: Float32, actions: Float32, rest: Float32) -> Float32:
    """Return the windows (T+1, input_size) that the policy would have seen along a recorded episode.

    Args:
        policy: only its normalisation and history sizes are used.
        observations: (T+1, n).
        actions: (T, m), as recorded.
        rest: (m,) action before the episode began.
    """
    window = Window(policy, 1, rest)
    rows = np.empty((observations.shape[0], policy.input_size), dtype=np.float32)
    rows[0] = window.start(observations[:1])[0]
    for t in range(actions.shape[0]):
        window.acted(actions[t : t + 1])
        rows[t + 1] = window.observed(observations[t + 1 : t + 2])[0]
    return rows
