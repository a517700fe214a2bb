"""Input shapers that leave no swing: impulses that a command is convolved with.

Source: Singer & Seering 1990, ASME J. Dyn. Syst. Meas. Control 112:76–82 (formulas from memory; the residual is checked
against an integrated oscillator in the tests).
"""

from __future__ import annotations

import math
from collections.abc import Sequence


def zero_vibration(frequency: float, damping: float = 0.0) -> tuple[list[float], list[float]]:
    """Return (amplitudes, times) of the two-impulse shaper.

    Args:
        frequency: natural frequency, rad/s.
        damping: damping ratio, below 1.
    """
    root = math.sqrt(1 - damping**2)
    k = math.exp(-damping * math.pi / root)
    return [1 / (1 + k), k / (1 + k)], [0.0, math.pi / (frequency * root)]


def zero_vibration_derivative(frequency: float, damping: float = 0.0) -> tuple[list[float], list[float]]:
    """Return (amplitudes, times) of the three-impulse shaper, robust to a wrong frequency."""
    root = math.sqrt(1 - damping**2)
    k = math.exp(-damping * math.pi / root)
    half_s = math.pi / (frequency * root)
    whole = (1 + k) ** 2
    return [1 / whole, 2 * k / whole, k * k / whole], [0.0, half_s, 2 * half_s]


def residual_vibration(frequency: float, damping: float, amplitudes: Sequence[float], times: Sequence[float]) -> float:
    """Return the swing that the impulses leave, as a fraction of what one unit impulse leaves."""
    damped = frequency * math.sqrt(1 - damping**2)
    weights = [a * math.exp(damping * frequency * t) for a, t in zip(amplitudes, times, strict=True)]
    cosine = sum(w * math.cos(damped * t) for w, t in zip(weights, times, strict=True))
    sine = sum(w * math.sin(damped * t) for w, t in zip(weights, times, strict=True))
    return math.exp(-damping * frequency * times[-1]) * math.hypot(cosine, sine)
