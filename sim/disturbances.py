"""Coloured noise and quantisation, for batches of episodes."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


class ColouredNoise:
    """First-order coloured noise, sampled exactly: n ← φ·n + σ√(1−φ²)·e with φ = exp(−dt/T).

    Source: exact discretisation of the Ornstein–Uhlenbeck process (any textbook on stochastic processes).

    Args:
        sd: stationary standard deviation.
        time_constant_s: T.
        period_s: dt.
    """

    def __init__(self, sd: float, time_constant_s: float, period_s: float) -> None:
        self._sd = sd
        self.persistence = math.exp(-period_s / time_constant_s)
        self.drive_sd = sd * math.sqrt(1.0 - self.persistence**2)
        self._value: Array = np.zeros(0)

    def reset(self, count: int, generator: np.random.Generator) -> None:
        """Begin in the stationary state."""
        self._value = self._sd * generator.standard_normal(count)

    def next(self, generator: np.random.Generator) -> Array:
        """Return the next values (B,)."""
        self._value = self.persistence * self._value + self.drive_sd * generator.standard_normal(len(self._value))
        return self._value


def quantise(values: Array, step: float) -> Array:
    """Return the values as an encoder of that resolution reads them; 0 for none."""
    return np.asarray(np.round(values / step) * step) if step > 0 else values
