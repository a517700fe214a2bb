"""What trimming buys when 30 % of the demonstrations are clumsy.

The same clone recipe is taught with all episodes alike, with trimmed ones (no label), with a few labels, and with the
good episodes alone, which nobody knows in practice. The task's score is measured on fresh episodes and nowhere used.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from nearhand.service.episodes.episode import Episode
from nearhand.service.learn.comparison.trials import builtin_rig, demonstrate, distilled, scores
from nearhand.service.learn.demonstrations import blank_policy, read_demonstrations, rest_action
from nearhand.service.learn.features import discounted_means, effective_discount, fit_features
from nearhand.service.learn.robust import trimmed_weights
from nearhand.service.rigs import Rig

GOOD, CLUMSY, EPISODES = 14, 6, 100
#: Labelled episodes of the second weighting: two good, two clumsy.
LABELS = {0: True, 1: True, GOOD: False, GOOD + 1: False}
RECIPE = {"method": "clone", "clone": {"steps": 5000}}


def episode_features(rig: Rig, episodes: Sequence[Episode]) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """Return each episode's discounted mean features (E, k)."""
    shown = read_demonstrations(blank_policy(rig, episodes), rest_action(rig), episodes)
    lengths = [item.length for item in shown]
    features = fit_features(len(rig.observations), shown)
    return discounted_means(features, shown, effective_discount(0.0, lengths), max(lengths))[0]


def run(seeds: int = 3) -> dict[str, Any]:
    """Measure; return bench, figures, ratios and targets.

    Args:
        seeds: each with demonstrations of its own.
    """
    rig = builtin_rig("crane")
    found: dict[str, list[float]] = {}
    caught, lost = [], []
    for seed in range(seeds):
        good = demonstrate(rig, "designed", GOOD, 700 + 10 * seed)
        mixed = good + demonstrate(rig, "clumsy", CLUMSY, 800 + 10 * seed)
        each = episode_features(rig, mixed)
        trimmed, labelled = trimmed_weights(each), trimmed_weights(each, LABELS)
        caught.append(float((trimmed[GOOD:] == 0).mean()))
        lost.append(float((trimmed[:GOOD] == 0).mean()))
        lessons = {"all alike": mixed, "good alone": good}
        for name, weights in (("trimmed", trimmed), ("labelled", labelled)):
            lessons[name] = [replace(one, weight=w) for one, w in zip(mixed, weights, strict=True) if w > 0]
        for name, episodes in lessons.items():
            _, policies, _ = distilled(rig, {**RECIPE, "seed": seed}, episodes)
            score = scores(rig, policies["clone"], EPISODES, 95_000 + seed)
            found.setdefault(name, []).append(float(score.mean()))
    figures = {f"score, {name}": float(np.mean(values)) for name, values in found.items()}
    figures |= {f"worst seed, {name}": float(np.min(values)) for name, values in found.items()}
    figures |= {"clumsy episodes trimmed": float(np.mean(caught)), "good episodes trimmed": float(np.mean(lost))}
    alike = figures["score, all alike"]
    ratios = {f"{name} to all alike": figures[f"score, {name}"] / alike for name in found if name != "all alike"}
    gain = {name: figures[f"score, {name}"] - alike for name in ("trimmed", "labelled")}
    targets = {
        f"score gained over all alike, {name}": {"goal": 0.0, "value": one, "met": one >= 0}
        for name, one in gain.items()
    }
    return {"bench": "mixed-demonstrators", "figures": figures, "ratios": ratios, "targets": targets}
