"""What makes a human operator: delay, limbs with inertia, and remnant noise.

Around crossover, operator and machine together behave as ω_c·exp(−jω·τ)/(jω).
Source: McRuer & Jex 1967, IEEE Trans. HFE-8:231–249 (form re-read; parameter values are ranges from memory).
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def phase_margin_deg(crossover: float, delay_s: float) -> float:
    """Return the phase margin, degrees, of ω_c·exp(−jω·τ)/(jω): 90° − ω_c·τ."""
    return 90.0 - math.degrees(crossover * delay_s)


def gain_margin(crossover: float, delay_s: float) -> float:
    """Return the gain margin π/(2·ω_c·τ)."""
    return math.pi / (2.0 * crossover * delay_s)


class Delay:
    """Gives back what it was given some whole number of periods ago; the first value before that.

    Args:
        delay_s, period_s: the delay is rounded to whole periods.
    """

    def __init__(self, delay_s: float, period_s: float) -> None:
        self.periods = round(delay_s / period_s)
        self._values: list[Array] = []
        self._next = 0

    def reset(self, first: Array) -> None:
        """Fill the buffer with the first value."""
        self._values = [first.copy() for _ in range(self.periods + 1)]
        self._next = 0

    def pass_on(self, value: Array) -> Array:
        """Take in the present value and return the delayed one."""
        self._values[self._next] = value.copy()
        self._next = (self._next + 1) % len(self._values)
        return self._values[self._next]


class Lag:
    """First-order lag 1/(T·s + 1), sampled exactly for a held input: y ← y + (1 − exp(−dt/T))·(u − y)."""

    def __init__(self, time_constant_s: float, period_s: float) -> None:
        self._share = 1.0 - math.exp(-period_s / time_constant_s)
        self._value: Array = np.zeros(0)

    def reset(self, count: int) -> None:
        """Begin at zero."""
        self._value = np.zeros(count)

    def follow(self, wanted: Array) -> Array:
        """Return the lagged value (B,)."""
        self._value = self._value + self._share * (wanted - self._value)
        return self._value
