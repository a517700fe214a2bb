"""Jitter after RFC 3550, and the delay of an operator whose delay is known."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import butter, sosfiltfilt

from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.lag import estimate_lag, lagged_correlation, peak
from nearhand.service.episodes.timing import interarrival_jitter, judge_times
from nearhand.service.rigs import Rig


def test_interarrival_jitter_of_a_worked_example() -> None:
    """RFC 3550 section 6.4.1, computed by hand: D = 1, -2, 6, -5, 2 ms."""
    sent = np.array([0.0, 20, 40, 60, 80, 100])
    received = np.array([5.0, 26, 44, 70, 85, 107])
    expected = [0.0625, 0.18359375, 0.547119140625, 0.825424194336, 0.898835182190]
    np.testing.assert_allclose(interarrival_jitter(sent, received), expected, atol=1e-12)


def test_interarrival_jitter_settles_as_its_gain_says() -> None:
    """J_k = 4 (1 - (15/16)^k) when |D| is always 4 (RFC 3550, closed form)."""
    sent = np.arange(65, dtype=np.float64) * 20.0
    received = sent + np.where(np.arange(65) % 2, 4.0, 0.0)
    jitter = interarrival_jitter(sent, received)
    for k, expected in ((1, 0.25), (16, 2.5757034782), (32, 3.4928448545), (64, 3.9356984146)):
        assert jitter[k - 1] == pytest.approx(expected, abs=1e-9)


def test_even_times_have_no_jitter_and_too_few_are_no_error() -> None:
    even = judge_times(np.arange(100, dtype=np.float64) * 0.02, 0.02)
    assert (even.gaps, even.backward) == (0, 0)
    assert even.jitter == pytest.approx(0.0, abs=1e-9)
    assert even.mean_period_s == pytest.approx(0.02)
    for times in (np.zeros(0), np.zeros(1), np.zeros(5), np.array([np.nan, np.nan])):
        assert judge_times(times, 0.02).gaps == 0
    assert judge_times(np.zeros(5), 0.02).backward == 4


def band_limited(
    generator: np.random.Generator, length: int, rate_hz: int
) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """Return noise below 5 Hz."""
    noise = sosfiltfilt(butter(4, 5, fs=rate_hz, output="sos"), generator.standard_normal(length))
    return np.asarray(noise / noise.std())


@pytest.mark.parametrize("seed", range(4))
def test_a_known_delay_is_found_between_the_samples(seed: int) -> None:
    """137 ms at 100 Hz under 20 % noise, generated at 1 kHz so that the delay is no whole number of samples."""
    generator = np.random.default_rng(seed)
    signal = band_limited(generator, 60_000, 1000)
    first = signal[1000:59_000:10] + 0.2 * generator.standard_normal(5800)
    second = signal[1000 - 137 : 59_000 - 137 : 10] + 0.2 * generator.standard_normal(5800)
    lag, _ = peak(lagged_correlation(first[:, None], second[:, None], 50)[:, 0])
    assert 10 * lag == pytest.approx(137, abs=2.0)


def test_one_channel_gives_the_plain_cross_correlation() -> None:
    generator = np.random.default_rng(2)
    first, second = generator.standard_normal((2, 500))
    rows = np.arange(5, 499)
    expected = [abs(np.corrcoef(first[rows - k], second[rows])[0, 1]) for k in range(5)]
    found = lagged_correlation(first[:, None], second[:, None], 4)[1:6, 0]
    np.testing.assert_allclose(found, expected, atol=1e-12)


def operated(rig: Rig, delay: int, seed: int) -> Episode:
    """Return an open loop: observations move by themselves, the action is their combination some samples ago."""
    generator = np.random.default_rng(seed)
    observations = np.column_stack([band_limited(generator, 601, 50) for _ in range(3)])
    actions = np.zeros((600, 1))
    combined = observations @ np.array([0.3, -0.2, 0.1])
    actions[delay:, 0] = combined[: 600 - delay]
    actions += 0.05 * generator.standard_normal(actions.shape)
    return Episode(
        str(seed),
        rig.name,
        "ann",
        0.02 * np.arange(600, dtype=np.float64),
        observations.astype(np.float32),
        actions.astype(np.float32),
    )


def test_the_delay_of_a_combination_of_channels_is_found_with_its_interval(rig: Rig) -> None:
    lag = estimate_lag(rig, [operated(rig, 9, seed) for seed in range(12)])
    assert lag is not None
    assert lag.is_clear
    assert (lag.action, lag.n) == ("push", 12)
    assert lag.low_s <= 0.18 <= lag.high_s
    assert lag.lag_s == pytest.approx(0.18, abs=0.01)


def test_an_action_without_delay_is_not_called_late(rig: Rig) -> None:
    lag = estimate_lag(rig, [operated(rig, 0, seed) for seed in range(12)])
    assert lag is not None
    assert not lag.is_clear


def test_too_short_or_lifeless_episodes_give_no_delay(rig: Rig) -> None:
    still = Episode(
        "s", "cart", "a", np.arange(500, dtype=np.float64) * 0.02, np.zeros((501, 3), dtype=np.float32),
        np.zeros((500, 1), dtype=np.float32),
    )  # fmt: skip
    assert estimate_lag(rig, [still]) is None
    assert estimate_lag(rig, []) is None
