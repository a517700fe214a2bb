"""How often the gate lets through what it should not, and how good a version must be to pass it.

Release decisions are simulated with the very functions that the service decides with: per-episode values of a version
whose true figure is known, their interval, the gate's verdict. The values are drawn with the shapes that such figures
have: a score with a tail of failures, a share of successes, a count of interventions with a long tail, squared action
errors of unequal episodes. The reference in the same run is a gate that looks at the plain value instead.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.rigs import Bound

Array = NDArray[np.float64]
Draw = Callable[[np.random.Generator, int, float], Any]
#: How far beyond the bound the false versions are, as a share of the bound.
BEYOND = 0.001
EPISODES = (10, 20, 50, 100)
LEVEL = 0.05
#: For the power: true values this far inside the bound, as a share of it.
INSIDE = (0.02, 0.05, 0.1, 0.2, 0.4)


@dataclass(frozen=True)
class Kind:
    """One kind of figure: its bound and how its interval comes about from episodes with a true value."""

    bound: Bound
    measure: Draw


def _score(generator: np.random.Generator, n: int, true: float) -> Any:
    """Most episodes near the top, one in eight far below: mean ``true``."""
    from nearhand.service.measure.intervals import mean_interval

    failed = generator.random(n) < 0.125
    values = np.where(failed, true - 0.35, true + 0.05) + 0.03 * generator.standard_normal(n)
    return mean_interval(values, seed=int(generator.integers(2**31)))


def _success(generator: np.random.Generator, n: int, true: float) -> Any:
    from nearhand.service.measure.intervals import proportion_interval

    return proportion_interval(int((generator.random(n) < true).sum()), n)


def _interventions(generator: np.random.Generator, n: int, true: float) -> Any:
    """A gamma law with a standard deviation as large as its mean."""
    from nearhand.service.measure.intervals import mean_interval

    return mean_interval(generator.gamma(1.0, true, n), seed=int(generator.integers(2**31)))


def _action_error(generator: np.random.Generator, n: int, true: float) -> Any:
    """Root mean square of episodes whose mean squares scatter by half."""
    from nearhand.service.measure.intervals import bootstrap

    squares = true**2 * generator.gamma(4.0, 0.25, n)
    seed = int(generator.integers(2**31))
    return bootstrap(lambda rows: math.sqrt(float(squares[rows].mean())), n, seed=seed)


KINDS = {
    "closed_loop.score": Kind(Bound(figure="closed_loop.score", at_least=0.8), _score),
    "closed_loop.success": Kind(Bound(figure="closed_loop.success", at_least=0.5), _success),
    "closed_loop.interventions_per_minute": Kind(
        Bound(figure="closed_loop.interventions_per_minute", at_most=60.0), _interventions
    ),
    "action_error.rmse_fraction": Kind(Bound(figure="action_error.rmse_fraction", at_most=0.1), _action_error),
}


def run(count: int = 500) -> dict[str, Any]:
    """Simulate; return bench, figures, ratios and targets.

    Args:
        count: decisions per kind of figure and number of episodes.
    """
    figures: dict[str, float] = {}
    ratios: dict[str, float] = {}
    targets: dict[str, tuple[float, float]] = {}
    for name, kind in KINDS.items():
        generator = np.random.default_rng(7)
        for n in EPISODES:
            released, by_value = _decisions(generator, kind, _true(kind.bound, -BEYOND), n, count)
            figures[f"{name}, {n} episodes: falsely released"] = released / count
            figures[f"{name}, {n} episodes: falsely released, upper end"] = _upper(released, count)
            ratios[f"{name}, {n} episodes: to a gate on the value"] = released / max(by_value, 1)
            # At most 5 % is kept unless even the exact lower end of what was seen lies above it.
            targets[f"{name}, {n} episodes: falsely released"] = (_lower(released, count), LEVEL)
            for inside in INSIDE:
                passed, _ = _decisions(generator, kind, _true(kind.bound, inside), n, max(100, count // 5))
                figures[f"{name}, {n} episodes: passes {100 * inside:g} % inside"] = passed / max(100, count // 5)
    return {
        "bench": "gate", "figures": figures, "ratios": ratios,
        "targets": {n: {"value": value, "goal": goal, "met": value <= goal} for n, (value, goal) in targets.items()},
    }  # fmt: skip


def _true(bound: Bound, inside: float) -> float:
    """Return the true value that lies a share of the bound inside it; negative is beyond."""
    if bound.at_least is not None:
        return bound.at_least * (1 + inside)
    assert bound.at_most is not None
    return bound.at_most * (1 - inside)


def _decisions(generator: np.random.Generator, kind: Kind, true: float, n: int, count: int) -> tuple[int, int]:
    """Return how many of ``count`` decisions release, by the gate and by the plain value."""
    from nearhand.service.measure.figures import figure
    from nearhand.service.measure.gate import judge

    released = by_value = 0
    for _ in range(count):
        interval = kind.measure(generator, n, true)
        told = figure(interval, "", "high" if kind.bound.at_least is not None else "low")
        released += judge([kind.bound], {"figures": {kind.bound.figure: told}}, None)[0]["met"]
        if kind.bound.at_least is not None:
            by_value += interval.value >= kind.bound.at_least
        else:
            by_value += interval.value <= (kind.bound.at_most or 0.0)
    return released, by_value


def _upper(hits: int, n: int) -> float:
    from scipy.stats import beta

    return 1.0 if hits == n else float(beta.ppf(0.95, hits + 1, n - hits))


def _lower(hits: int, n: int) -> float:
    from scipy.stats import beta

    return 0.0 if hits == 0 else float(beta.ppf(0.05, hits, n - hits + 1))
