"""How regular a recording's clock is: gaps, jitter, times that do not go forward."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

#: An interval longer than this many periods is a gap: samples are missing.
GAP_PERIODS = 3.0
RFC_GAIN = 1 / 16


@dataclass(frozen=True, slots=True)
class Timing:
    """Figures of one recording's times.

    Attributes:
        gaps: number of intervals over GAP_PERIODS periods.
        longest_gap_s: the longest of them, 0 when there is none.
        backward: number of intervals that are zero or negative.
        jitter: standard deviation of the other intervals, as a fraction of the period.
        interarrival_jitter_s: their smoothed mean deviation at the end of the recording (RFC 3550).
        mean_period_s: their mean.
    """

    gaps: int
    longest_gap_s: float
    backward: int
    jitter: float
    interarrival_jitter_s: float
    mean_period_s: float


def interarrival_jitter(sent_s: NDArray[np.float64], received_s: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the running jitter estimate after each arrival but the first, (T-1,) seconds.

    D = (R_j - R_i) - (S_j - S_i); J += (|D| - J)/16.

    Source: RFC 3550, section 6.4.1.
    """
    from scipy.signal import lfilter  # here, so that the keeper, which needs GAP_PERIODS, does not load SciPy

    deviation = np.abs(np.diff(received_s) - np.diff(sent_s))
    return np.asarray(lfilter([RFC_GAIN], [1.0, RFC_GAIN - 1.0], deviation))


def judge_times(times_s: NDArray[np.float64], period_s: float) -> Timing:
    """Return the timing of samples (T,) that should be one period apart; non-finite times are left out."""
    intervals = np.diff(times_s[np.isfinite(times_s)])
    gaps = intervals[intervals > GAP_PERIODS * period_s]
    backward = int((intervals <= 0).sum())
    regular = intervals[(intervals > 0) & (intervals <= GAP_PERIODS * period_s)]
    if regular.size == 0:
        return Timing(len(gaps), float(gaps.max(initial=0.0)), backward, 0.0, 0.0, period_s)
    arrivals = np.concatenate([[0.0], np.cumsum(regular)]).astype(np.float64)
    jitter = interarrival_jitter(np.arange(arrivals.size, dtype=np.float64) * period_s, arrivals)
    return Timing(
        gaps=len(gaps),
        longest_gap_s=float(gaps.max(initial=0.0)),
        backward=backward,
        jitter=float(regular.std() / period_s),
        interarrival_jitter_s=float(jitter[-1]),
        mean_period_s=float(regular.mean()),
    )
