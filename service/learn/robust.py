"""Weights for episodes of mixed quality: whole episodes are trimmed by how far they lie from all the others."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from nearhand.service.learn.features import Float64

#: Median absolute deviations, scaled to a normal sd, beyond which an episode is trimmed without any label.
TRIM_AT = 3.5


def leave_one_out(each: Float64, kept: NDArray[np.bool_]) -> Float64:
    """Return each episode's distance (E,) from the coordinate-wise median of the other kept ones.

    Args:
        each: (E, k) mean features of each episode.
        kept: (E,) which may serve as the others.
    """
    found = np.empty(len(each))
    for index in range(len(each)):
        others = kept.copy()
        others[index] = False
        found[index] = np.linalg.norm(each[index] - np.median(each[others], axis=0)) if others.any() else 0.0
    return found


def trimmed_weights(each: Float64, labels: Mapping[int, bool] | None = None) -> Float64:
    """Return a weight for each episode (E,): 0 for a trimmed or bad one, else 1.

    Without labels an episode goes whose distance exceeds the median by ``TRIM_AT`` scaled absolute deviations, until
    nothing changes. A few labels put the limit half-way between the farthest good and the nearest bad labelled
    episode, and the distance is then measured from the good ones. A label is never overruled, and less than half of
    the unlabelled episodes are trimmed without labels: a majority is not an outlier.

    Source: median absolute deviation, 1.4826 for a normal (Hampel 1974); least trimmed squares' idea (Rousseeuw 1984).
    """
    count = len(each)
    told = dict(labels or {})
    good = [index for index, fine in told.items() if fine]
    bad = [index for index, fine in told.items() if not fine]
    kept = np.ones(count, dtype=bool)
    if good and bad:
        kept[:] = False
        kept[good] = True
        far = leave_one_out(each, kept)
        kept = far <= (max(far[good]) + min(far[bad])) / 2
    else:
        for _ in range(count):
            far = leave_one_out(each, kept)
            middle = float(np.median(far[kept]))
            spread = 1.4826 * float(np.median(np.abs(far[kept] - middle)))
            limit = max(middle + TRIM_AT * max(spread, 1e-9), float(np.sort(far)[count // 2]))
            now = far <= limit
            if (now == kept).all():
                break
            kept = now
    kept[good] = True
    kept[bad] = False
    return kept.astype(np.float64)
