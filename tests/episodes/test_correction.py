"""Corrections as training sees them."""

from __future__ import annotations

import numpy as np
import pytest

from nearhand.service.episodes.correction import TASK, Correction, as_fragment
from nearhand.service.episodes.episode import Episode


def episode(length: int = 50, period_s: float = 0.02, begin_s: float = 1e6) -> Episode:
    """Return an episode whose values are its row numbers."""
    rows = np.arange(length + 1, dtype=np.float32)[:, None]
    return Episode("e", "rig", "Ada", (begin_s + period_s * np.arange(length)).astype(np.float64), rows, rows[:-1])


@pytest.mark.parametrize(("transient_s", "first"), [(0.0, 0), (0.01, 1), (0.4, 20), (0.98, 49)])
def test_the_transient_is_dropped_and_the_rest_is_no_start(transient_s: float, first: int) -> None:
    fragment = as_fragment(episode(), Correction(3, transient_s))
    assert fragment is not None and fragment.fragment
    assert fragment.length == 50 - first
    assert fragment.observations[0, 0] == fragment.actions[0, 0] == first
    assert len(fragment.observations) == fragment.length + 1 and len(fragment.times_s) == fragment.length


def test_a_correction_that_is_all_transient_teaches_nothing() -> None:
    assert as_fragment(episode(), Correction(3, 1.0)) is None
    assert as_fragment(episode(0), Correction(3, 0.1)) is None


def test_an_ordinary_episode_is_no_correction() -> None:
    assert Correction.of("lift a slab", "version=3 transient_s=0.400") is None
    assert Correction.of(TASK, "version=3 transient_s=0.400; it swings") == Correction(3, 0.4)
