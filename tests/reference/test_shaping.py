"""Input shapers: amplitudes, times and the swing that they leave, by formula and on an integrated oscillator.

Singer & Seering 1990, ASME J. Dyn. Syst. Meas. Control 112:76–82 (formulas from memory; the residual's formula re-read
in a later open paper on the same shapers).
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from nearhand.sim.shaping import residual_vibration, zero_vibration, zero_vibration_derivative


@pytest.mark.parametrize(
    ("rope_m", "damping", "first", "second_s"),
    [
        (1.0, 0.0, 0.5, 1.0030333403553),
        (1.0, 0.01, 0.50785372836527, 1.003083495784),
        (1.0, 0.05, 0.53923823851091, 1.0042894877985),
        (0.8, 0.02, 0.51570593702979, 0.89731977499826),
    ],
)
def test_two_impulses(rope_m: float, damping: float, first: float, second_s: float) -> None:
    """A₁ = 1/(1+K), K = exp(−ζπ/√(1−ζ²)); the second half a damped period later."""
    amplitudes, times = zero_vibration(math.sqrt(9.81 / rope_m), damping)
    assert amplitudes == pytest.approx([first, 1 - first], abs=1e-12)
    assert times == pytest.approx([0.0, second_s], abs=1e-12)


@pytest.mark.parametrize("damping", [0.0, 0.01, 0.1])
def test_at_the_model_frequency_nothing_is_left(damping: float) -> None:
    for shaper in (zero_vibration, zero_vibration_derivative):
        amplitudes, times = shaper(3.0, damping)
        assert sum(amplitudes) == pytest.approx(1.0, abs=1e-12)
        assert residual_vibration(3.0, damping, amplitudes, times) == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("ratio", [0.8, 0.9, 0.95])
def test_robustness_to_a_wrong_frequency(ratio: float) -> None:
    """Undamped: |cos(πr/2)| is left by two impulses and its square by three, r the true over the model frequency."""
    expected = abs(math.cos(math.pi * ratio / 2))
    assert residual_vibration(ratio, 0.0, *zero_vibration(1.0)) == pytest.approx(expected, abs=1e-10)
    assert residual_vibration(ratio, 0.0, *zero_vibration_derivative(1.0)) == pytest.approx(expected**2, abs=1e-10)


def test_the_residual_is_that_of_an_integrated_oscillator() -> None:
    """Two half-size velocity impulses on y'' = −ω²y, integrated by SciPy."""
    frequency, model = 2.0, 2.3
    amplitudes, times = zero_vibration(model)
    state = np.zeros(2)
    state[1] += amplitudes[0]
    moved = solve_ivp(lambda _, y: [y[1], -(frequency**2) * y[0]], (0, times[1]), state, rtol=1e-10, atol=1e-12).y[
        :, -1
    ]
    moved[1] += amplitudes[1]
    left = math.hypot(moved[0] * frequency, moved[1])
    assert residual_vibration(frequency, 0.0, amplitudes, times) == pytest.approx(left, abs=1e-8)
