"""A policy at work: history, network and confidence gate in memory taken once, so that a query allocates little."""

from __future__ import annotations

import math

import numpy as np

from nearhand.service.envelope.limits import Float32
from nearhand.service.envelope.novelty import NoveltyScore
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
    """One policy with its confidence gate, ready to be asked.

    It gives what ``Policy.action`` and ``NoveltyScore`` give for the same window, but for rounding. The first layer and
    the whitening are one matrix that takes raw values, in double precision since these may be of any size; biases stand
    as last rows beside an input that is always 1; the last layer is in action units.

    Args:
        policy: the policy.
        novelty: its confidence gate, if it has one.
    """

    def __init__(self, policy: Policy, novelty: NoveltyScore | None = None) -> None:
        n, split = policy.observation_size, policy.observation_size * (1 + policy.past_observations)
        self._past_observations, self._past_actions = 1 + policy.past_observations, policy.past_actions
        self._raw = np.ones(policy.input_size + 1)
        self._observed = self._raw[:split].reshape(self._past_observations, n)
        self._acted = self._raw[split:-1].reshape(policy.past_actions, policy.action_size)
        times = (self._past_observations, self._past_actions)
        self._mean = np.concatenate(
            [np.tile(*pair) for pair in zip((policy.observation_mean, policy.action_middle), times, strict=True)]
        )
        self._scale = np.concatenate(
            [np.tile(*pair) for pair in zip((policy.observation_scale, policy.action_half), times, strict=True)]
        )
        weights = [np.vstack(pair).astype(np.float64) for pair in zip(policy.weights, policy.biases, strict=True)]
        with np.errstate(over="ignore", invalid="ignore"):
            weights[-1] *= policy.action_half
            weights[-1][-1] += policy.action_middle
        first = weights[0]
        self._split = first.shape[1]
        if novelty is not None:
            first = np.hstack([first, novelty.affine])
        with np.errstate(over="ignore", invalid="ignore"):
            first[:-1] /= self._scale.astype(np.float64)[:, None]
            first[-1] -= self._mean.astype(np.float64) @ first[:-1]
        self._novelty = novelty
        self._first = np.ascontiguousarray(first)
        self._seen = np.zeros(first.shape[1])
        self._later: list[tuple[Float32, Float32, Float32]] = []
        inputs = np.ones(self._split + 1, dtype=np.float32)
        self._hidden = inputs[:-1]
        for weight in weights[1:-1]:
            outputs = np.ones(weight.shape[1] + 1, dtype=np.float32)
            self._later.append((inputs, np.ascontiguousarray(weight, dtype=np.float32), outputs[:-1]))
            inputs = outputs
        self._inputs, self._last = inputs, np.ascontiguousarray(weights[-1], dtype=np.float32)
        self._deep = len(weights) > 1

    @property
    def window(self) -> Float32:
        """What was taken in, as the policy was trained to see it, (d,)."""
        return np.asarray((self._raw[:-1].astype(np.float32) - self._mean) / self._scale, dtype=np.float32)

    def look(self, observed: History, acted: History) -> float:
        """Take in the histories of observations and of applied actions; return the novelty's p-value, 1 without gate.

        Like ``propose``, it leaves to the caller to silence NumPy's warnings of overflow.
        """
        self._observed[:] = observed.newest(self._past_observations)
        if self._past_actions:
            self._acted[:] = acted.newest(self._past_actions)
        self._raw.dot(self._first, out=self._seen)
        return 1.0 if self._novelty is None else self._novelty.p_of_whitened(self._seen[self._split :])

    def propose(self) -> list[float] | None:
        """Return the policy's action, m numbers, for what was taken in, or None if it is not finite."""
        if self._deep:
            np.tanh(self._seen[: self._split].astype(np.float32), out=self._hidden)
            for inputs, weight, outputs in self._later:
                inputs.dot(weight, out=outputs)
                np.tanh(outputs, out=outputs)
            action = self._inputs.dot(self._last).tolist()
        else:
            action = self._seen[: self._split].astype(np.float32).tolist()
        return action if math.isfinite(sum(action)) else None
