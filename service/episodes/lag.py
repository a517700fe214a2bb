"""How long an action takes to follow the observations, estimated from demonstrations."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from nearhand.service.episodes.episode import Episode
from nearhand.service.rigs import Rig

MOST_LAG_S = 1.0
LEAST_SAMPLES = 50
#: Channels considered on each side: the ones that vary most within their range.
MOST_CHANNELS = 12
#: Observations of the same moment that explain this share of an action's variance leave no room for a delay.
EXPLAINED_AT_ONCE = 0.98


@dataclass(frozen=True, slots=True)
class Lag:
    """The delay of the action channel that follows the observations best.

    Attributes:
        action: name of the channel.
        lag_s: mean over episodes; low_s, high_s: its 95 % interval (Student's t over episodes), equal when n is 1.
        correlation: mean of the correlations at the peak.
        correlation_at_once: the same with the observations of the same moment.
        is_clear: the delay explains the actions much better than no delay; if not, ``lag_s`` means nothing.
        n: number of episodes.
    """

    action: str
    lag_s: float
    low_s: float
    high_s: float
    correlation: float
    correlation_at_once: float
    is_clear: bool
    n: int


def lagged_correlation(
    observations: NDArray[np.float64], actions: NDArray[np.float64], most_lag: int
) -> NDArray[np.float64]:
    """Return the multiple correlation of each action with the observations k samples before it.

    With one observation channel it is the absolute cross-correlation; with several it is that of the best linear
    combination, so that feedback of a whole state is not mistaken for a delay of one of its channels.

    Args:
        observations: (T, n).
        actions: (T, m).
        most_lag: K.

    Returns:
        (K + 3, m) for k = -1 … K + 1, all over the same actions.
    """
    rows = np.arange(most_lag + 1, observations.shape[0] - 1)
    wanted = actions[rows] - actions[rows].mean(axis=0)
    size = np.linalg.norm(wanted, axis=0)
    wanted = wanted / np.where(size > 0, size, 1.0)
    result = np.zeros((most_lag + 3, actions.shape[1]))
    for place, lag in enumerate(range(-1, most_lag + 2)):
        past = observations[rows - lag]
        basis, _ = np.linalg.qr(past - past.mean(axis=0))
        result[place] = np.linalg.norm(basis.T @ wanted, axis=0)
    return result


def peak(correlation: NDArray[np.float64]) -> tuple[float, float]:
    """Return where the correlation peaks, in samples, refined by a parabola through three points, and its value there.

    Args:
        correlation: for lags -1 … K + 1; the peak is sought in 0 … K.
    """
    index = 1 + int(np.argmax(correlation[1:-1]))
    before, at, after = correlation[index - 1 : index + 2]
    bend = before - 2 * at + after
    shift = 0.5 * (before - after) / bend if bend < 0 else 0.0
    return max(0.0, index - 1 + float(np.clip(shift, -0.5, 0.5))), float(at)


def _liveliest(values: NDArray[np.floating]) -> list[int]:
    spread = values.std(axis=0)
    return [int(index) for index in np.argsort(-spread, kind="stable") if spread[index] > 0][:MOST_CHANNELS]


def estimate_lag(rig: Rig, episodes: Sequence[Episode]) -> Lag | None:
    """Return the delay from observation to action, or None without an episode that is long, finite and lively enough.

    The operator acts in a closed loop, so that the peak is biased towards the loop's own rhythm: it is a hint, not a
    measurement of reaction time.
    """
    most_lag = max(1, round(MOST_LAG_S / rig.timing.period_s))
    usable = [
        episode
        for episode in episodes
        if episode.length >= max(LEAST_SAMPLES, 2 * most_lag)
        and np.isfinite(episode.observations).all()
        and np.isfinite(episode.actions).all()
    ]
    if not usable:
        return None
    n_range = np.array([channel.high - channel.low for channel in rig.observations])
    m_range = np.array([channel.high - channel.low for channel in rig.actions])
    inputs = _liveliest(np.concatenate([episode.observations for episode in usable]) / n_range)
    outputs = _liveliest(np.concatenate([episode.actions for episode in usable]) / m_range)
    if not inputs or not outputs:
        return None
    peaks = np.zeros((len(usable), len(outputs), 3))
    for e, episode in enumerate(usable):
        observations = (episode.observations[:-1, inputs] / n_range[inputs]).astype(np.float64)
        correlation = lagged_correlation(observations, episode.actions[:, outputs].astype(np.float64), most_lag)
        peaks[e] = [(*peak(column), column[1]) for column in correlation.T]
    best = int(np.argmax(peaks[..., 1].mean(axis=0)))
    lags = peaks[:, best, 0] * rig.timing.period_s
    mean, n = float(lags.mean()), len(usable)
    half = float(stats.t.ppf(0.975, n - 1) * lags.std(ddof=1) / np.sqrt(n)) if n > 1 else 0.0
    left = 1 - peaks[:, best, 1:].mean(axis=0) ** 2
    return Lag(
        action=rig.actions[outputs[best]].name,
        lag_s=mean,
        low_s=max(0.0, mean - half),
        high_s=mean + half,
        correlation=float(peaks[:, best, 1].mean()),
        correlation_at_once=float(peaks[:, best, 2].mean()),
        is_clear=bool(left[1] > 1 - EXPLAINED_AT_ONCE and left[0] < left[1] / 2),
        n=n,
    )
