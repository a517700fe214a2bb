"""The human-operator model: crossover margins, delay, limb lag, coloured noise."""

from __future__ import annotations

import math

import numpy as np
import pytest

from nearhand.sim.disturbances import ColouredNoise, quantise
from nearhand.sim.operator import Delay, Lag, gain_margin, phase_margin_deg


@pytest.mark.parametrize(
    ("crossover", "delay_s", "phase", "gain"),
    [
        (4.0, 0.25, 32.704220486918, 1.5707963267949),
        (3.25, 0.36, 22.963937969694, 1.3425609630726),
        (2.5, 0.5, 18.380275608647, 1.2566370614359),
    ],
)
def test_margins_of_the_crossover_model(crossover: float, delay_s: float, phase: float, gain: float) -> None:
    """90° − ω_c·τ and π/(2ω_c·τ); McRuer & Jex 1967 give the model's form."""
    assert phase_margin_deg(crossover, delay_s) == pytest.approx(phase, abs=1e-9)
    assert gain_margin(crossover, delay_s) == pytest.approx(gain, abs=1e-9)


@pytest.mark.parametrize(
    ("crossover", "delay_s", "expected"), [(4.0, 0.25, 0.42602793029198), (3.0, 0.3, 0.47814733800273)]
)
def test_a_delayed_integrator_built_of_our_parts_has_the_closed_form_step_error(
    crossover: float, delay_s: float, expected: float
) -> None:
    """e' = −ω_c·e(t−τ): ∫e² = (1 + sin ω_cτ)/(2ω_c·cos ω_cτ) (Küchler & Mensch 1992, from memory; derived too)."""
    period_s = delay_s / 2000
    delay = Delay(delay_s, period_s)
    error = np.ones(1)
    # Before the step there was no error to see.
    delay.reset(np.zeros(1))
    square = 0.0
    for _ in range(round(12 / period_s)):
        square += period_s * float(error[0]) ** 2
        error = error - period_s * crossover * delay.pass_on(error)
    # Euler's rule is of first order in the step: about ω_c·dt/2 of relative error.
    assert square == pytest.approx(expected, rel=2e-3)


def test_the_delay_gives_back_whole_periods() -> None:
    delay = Delay(0.1, 0.02)
    delay.reset(np.zeros(1))
    given = [float(delay.pass_on(np.full(1, float(k)))[0]) for k in range(1, 9)]
    assert given == [0, 0, 0, 0, 0, 1, 2, 3]


def test_the_limb_rises_as_a_first_order_lag() -> None:
    """After one time constant 1 − 1/e; 10–90 % rise T·ln 9."""
    lag = Lag(0.1, 0.001)
    lag.reset(1)
    values = [float(lag.follow(np.ones(1))[0]) for _ in range(1000)]
    assert values[99] == pytest.approx(1 - math.exp(-1), abs=1e-12)
    rise_s = 0.001 * (np.searchsorted(values, 0.9) - np.searchsorted(values, 0.1))
    assert rise_s == pytest.approx(0.1 * math.log(9), abs=0.002)


@pytest.mark.parametrize(
    ("period_s", "time_s", "persistence", "drive"),
    [(0.02, 0.1, 0.81873075307798, 0.57417763276216), (0.01, 0.2, 0.95122942450071, 0.30848433017585)],
)
def test_coloured_noise_is_the_exact_first_order_process(
    period_s: float, time_s: float, persistence: float, drive: float
) -> None:
    noise = ColouredNoise(1.0, time_s, period_s)
    assert noise.persistence == pytest.approx(persistence, abs=1e-12)
    assert noise.drive_sd == pytest.approx(drive, abs=1e-12)
    generator = np.random.default_rng(1)
    noise.reset(20_000, generator)
    before = noise.next(generator)
    after = noise.next(generator)
    # 20,000 independent pairs: the correlation's standard error is below 0.0035 and the variance's below 0.01.
    assert np.corrcoef(before, after)[0, 1] == pytest.approx(persistence, abs=0.015)
    assert float(after.var()) == pytest.approx(1.0, abs=0.05)


def test_an_encoder_reads_whole_steps() -> None:
    assert quantise(np.array([0.0012, 0.0018, -0.0006]), 0.001) == pytest.approx([0.001, 0.002, -0.001])
    assert quantise(np.array([0.123]), 0.0)[0] == 0.123
