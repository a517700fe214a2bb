"""One episode of expert and policy from the same start, for a person to look at."""

from __future__ import annotations

from typing import Any

import numpy as np

from nearhand.service.measure.closed_loop import Array, Rollouts
from nearhand.service.rigs import Rig

MOST_POINTS = 400


def side_by_side(rig: Rig, expert: Rollouts | None, policy: Rollouts | None) -> dict[str, Any]:
    """Return the episode in which the two differ by the median amount, and where in it they differ most.

    The difference is the root mean square over channels, each as a fraction of its range.
    """
    if expert is None or policy is None:
        return {}
    ranges = np.array([channel.high - channel.low for channel in rig.observations])
    gaps = []
    for index in range(len(policy.lengths)):
        both = int(min(policy.lengths[index], expert.lengths[index]))
        gap = (policy.observations[:both, index] - expert.observations[:both, index]) / ranges
        gaps.append(np.sqrt((gap**2).mean(axis=1)))
    order = np.argsort([float(gap.mean()) for gap in gaps])
    chosen = int(order[len(order) // 2])
    worst = int(np.argmax(gaps[chosen]))
    return {
        "episode": chosen,
        "period_s": rig.timing.period_s,
        "differ_most_at_s": worst * rig.timing.period_s,
        "observations": [{"name": channel.name, "unit": channel.unit} for channel in rig.observations],
        "actions": [{"name": channel.name, "unit": channel.unit} for channel in rig.actions],
        "expert": _trace(rig, *expert.episode(chosen)),
        "policy": _trace(rig, *policy.episode(chosen)),
    }


def _trace(rig: Rig, observations: Array, actions: Array) -> dict[str, Any]:
    every = max(1, -(-len(actions) // MOST_POINTS))
    rows = range(0, len(actions), every)
    return {
        "times_s": [round(row * rig.timing.period_s, 6) for row in rows],
        "observations": [[round(float(value), 6) for value in observations[row]] for row in rows],
        "actions": [[round(float(value), 6) for value in actions[row]] for row in rows],
    }
