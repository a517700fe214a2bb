"""Two versions side by side: the same start states, the same disturbances, differences episode by episode."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.measure.closed_loop import Rollouts
from nearhand.service.measure.figures import figure
from nearhand.service.measure.intervals import mean_interval

Array = NDArray[np.float64]
FLIPS = 2_000
#: Differences smaller than this share of the larger magnitude are a draw.
DRAW = 1e-9


def sign_flip_p(gaps: Array, *, seed: int = 0) -> float:
    """Return the two-sided p-value of "differences are symmetric about 0", by flipping their signs.

    Exact up to the sampling of flips; needs no shape of the distribution.
    Source: Fisher's randomisation test of paired data, 1935 (from memory).
    """
    observed = abs(float(gaps.mean()))
    signs = np.random.default_rng(seed).choice([-1.0, 1.0], size=(FLIPS, len(gaps)))
    at_least = np.count_nonzero(np.abs((signs * gaps).mean(axis=1)) >= observed - 1e-12)
    return float((1 + at_least) / (FLIPS + 1))


def compare(mine: Rollouts, other: Rollouts, span: float | None) -> dict[str, dict[str, Any]]:
    """Return figures of mine less other, paired by episode: difference, wins, draws, losses, p-value.

    Args:
        span: the expert's lead over chance in task score, to normalise by; None leaves the score as it is.
    """
    columns: dict[str, tuple[Array, Array, str, str]] = {
        "score": (
            mine.score / (span or 1.0), other.score / (span or 1.0), "of the expert's lead" if span else "", "high",
        ),
    }  # fmt: skip
    for name, values in mine.outcomes.items():
        if name in other.outcomes:
            columns[name] = values, other.outcomes[name], "", "high" if name == "success" else "low"
    rates = [np.array([float(c["interventions"]) for c in side.counts]) / side.lengths for side in (mine, other)]
    columns["interventions_per_period"] = rates[0], rates[1], "", "low"
    return {f"closed_loop.{name}": _row(*column) for name, column in columns.items()}


def _row(mine: Array, other: Array, unit: str, better: str) -> dict[str, Any]:
    gaps = np.asarray(mine - other, dtype=np.float64)
    draws = np.abs(gaps) <= DRAW * np.maximum(np.abs(mine), np.abs(other))
    favour = gaps > 0 if better == "high" else gaps < 0
    return {
        **figure(mean_interval(gaps), unit, better),
        "wins": int((favour & ~draws).sum()),
        "draws": int(draws.sum()),
        "losses": int((~favour & ~draws).sum()),
        "p_same": sign_flip_p(gaps),
    }


def truncation_bound(mass: float, distances: Mapping[str, Any]) -> dict[str, float]:
    """Return how much what lies beyond the episodes' ends could change each feature distance.

    Normalised sums over endless episodes are φ∞ = (1−m)·φ_T + m·φ_tail with m = γᵀ, so |d∞ − d_T| ≤ m·(d_T + d_tail).
    The tails are taken to differ no more than the episodes do, at the upper end of the interval: 2·m·d_T.
    """
    return {
        name: 2 * mass * float(told["high"])
        for name, told in distances.items()
        if name.startswith("feature_distance.") and told.get("high") is not None and name.count(".") == 1
        and not name.endswith(("debiased", "p_same"))
    }  # fmt: skip
