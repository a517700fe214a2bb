"""A policy at work: its window and its network in memory that is taken once, so that a query allocates little."""

from __future__ import annotations

import math

import numpy as np

from nearhand.service.envelope.limits import Float32
from nearhand.service.policy.network import Policy

#: As far back as any policy can look.
DEPTH = 17
#: Rows between two moves of the whole history.
ROOM = 512


class History:
    """The last rows, newest first and next to each other in memory.

    Args:
        width: of a row.
    """

    def __init__(self, width: int) -> None:
        self._rows = np.zeros((DEPTH + ROOM, width), dtype=np.float32)
        self._top = ROOM

    def fill(self, row: Float32) -> None:
        """Begin anew, as if the row (width,) had always been."""
        self._rows[:] = row
        self._top = ROOM

    def push(self, row: Float32) -> None:
        """Put a row (width,) first."""
        if not self._top:
            self._rows[ROOM + 1 :] = self._rows[: DEPTH - 1]
            self._top = ROOM + 1
        self._top -= 1
        self._rows[self._top] = row

    def newest(self, count: int) -> Float32:
        """Return the ``count`` newest rows, at most DEPTH; a view."""
        rows: Float32 = self._rows[self._top : self._top + count]
        return rows


class Serving:
    """One policy, ready to be asked; gives what ``Policy.action`` gives for the same window, but for rounding.

    The biases stand as last rows of the weights, beside an input that is always 1; the last layer is in action units.

    Args:
        policy: the policy.
    """

    def __init__(self, policy: Policy) -> None:
        self._policy = policy
        n, split = policy.observation_size, policy.observation_size * (1 + policy.past_observations)
        inputs = np.ones(policy.input_size + 1, dtype=np.float32)
        inputs[:-1] = 0.0
        self.window: Float32 = inputs[:-1]
        self._observed = self.window[:split].reshape(1 + policy.past_observations, n)
        self._acted = self.window[split:].reshape(policy.past_actions, policy.action_size)
        weights = [np.vstack(pair) for pair in zip(policy.weights, policy.biases, strict=True)]
        weights[-1] = weights[-1] * policy.action_half
        weights[-1][-1] += policy.action_middle
        self._layers: list[tuple[Float32, Float32, Float32]] = []
        for weight in weights[:-1]:
            outputs = np.ones(weight.shape[1] + 1, dtype=np.float32)
            self._layers.append((inputs, np.ascontiguousarray(weight, dtype=np.float32), outputs[:-1]))
            inputs = outputs
        self._inputs, self._last = inputs, np.ascontiguousarray(weights[-1], dtype=np.float32)

    def look(self, observed: History, acted: History) -> None:
        """Fill the window from the histories of observations and of applied actions."""
        policy = self._policy
        np.subtract(observed.newest(len(self._observed)), policy.observation_mean, out=self._observed)
        np.divide(self._observed, policy.observation_scale, out=self._observed)
        if len(self._acted):
            np.subtract(acted.newest(len(self._acted)), policy.action_middle, out=self._acted)
            np.divide(self._acted, policy.action_half, out=self._acted)

    def propose(self) -> Float32 | None:
        """Return the policy's action (m,) for the window, or None if it is not finite."""
        for inputs, weight, outputs in self._layers:
            inputs.dot(weight, out=outputs)
            np.tanh(outputs, out=outputs)
        action: Float32 = self._inputs.dot(self._last)
        return action if math.isfinite(sum(action.tolist())) else None
