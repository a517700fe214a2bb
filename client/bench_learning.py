"""How well imitation does from few demonstrations, against cloning and other methods on one budget.

Each contest runs in a worker process of its own: demonstrations by the rig's expert, training by each method from the
same clone, scores of fresh start states (0 is chance, 1 the expert). Means and worst seeds are given; the score enters
no training and no selection.
"""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from nearhand.client.options import rig_text
from nearhand.service.errors import ConfigError, LinkError

WORKER = "nearhand.service.learn.comparison"
OURS, BASELINE = "proximal-online", "clone"
RIVALS = ("feature-matching", "adversarial", "inverse-soft-q")
#: Contests of one seed take minutes at most; a worker that takes longer than this is stuck.
TIMEOUT_S = 3600.0
#: Less of everything, to see the whole benchmark run; its figures mean nothing.
QUICK: dict[str, Any] = {
    "clone": {"steps": 400},
    "online": {"iterations": 4, "episodes": 4, "first_inner_steps": 40, "transitions": 1000},
    "selection": {"every": 2, "episodes": 8},
}


@dataclass(frozen=True)
class Row:
    """One line of the table: rig, demonstrations, goals for our mean and worst seed, dynamics to score under besides.

    ``recipe`` is what is changed of the standard one, to keep within the row's budget of simulator steps, ``budget``.
    """

    rig: str
    demonstrations: int
    mean: float
    worst: float | None = None
    recipe: Mapping[str, Any] = field(default_factory=dict)
    budget: int | None = None
    shifts: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    gains: bool = False

    @property
    def name(self) -> str:
        """What figures are listed under."""
        return f"{self.rig}/{self.demonstrations}"


#: The yard ends, so that start states are half as far again instead of twice.
CRANE_SHIFTS = {
    "farther": {"distance_low_m": 10.5, "distance_high_m": 15.0},
    "longer-rope": {"rope_scale": 1.3},
}
SWINGING = {"online": {"episodes": 24}, "selection": {"every": 16}}
BALANCING = {"online": {"episodes": 6}, "selection": {"every": 20, "episodes": 16}}
ROWS = (
    Row("pendulum", 3, 0.95, 0.90, SWINGING, 300_000),
    Row("pendulum", 10, 0.98, 0.95, SWINGING, 300_000),
    Row("crane", 1, 0.95),
    Row("crane", 3, 0.98, shifts=CRANE_SHIFTS),
    Row("crane", 10, 0.99),
    Row("double-pendulum", 1, 0.97, None, BALANCING, 200_000),
    Row("double-pendulum", 3, 0.99, None, BALANCING, 200_000),
    Row("two-carts", 1, 0.99, gains=True),
)


def run(rigs: str = "", seeds: int = 5, quick: bool = False, methods: str = "") -> dict[str, Any]:
    """Hold the contests; return bench, figures, ratios, targets and the single results.

    Args:
        rigs: names of rigs, or of rows such as ``crane/3``, with commas between; all rows when empty.
        seeds: contests a row, seeds 1 to this.
        methods: those to run, with commas between; all when empty. ``proximal-online`` and its clone always run.
        quick: spend next to nothing, to see it run.

    Raises:
        ConfigError: an unknown rig or row.
        LinkError: a worker failed.
    """
    wanted = [name for name in rigs.split(",") if name]
    known = {row.rig for row in ROWS} | {row.name for row in ROWS}
    if unknown := [name for name in wanted if name not in known]:
        raise ConfigError(
            f"no row of the learning benchmark is called {unknown[0]!r}; known: {', '.join(sorted(known))}"
        )
    told = tuple(name for name in methods.split(",") if name) or (BASELINE, OURS, "proximal-offline", *RIVALS)
    if unknown := [name for name in told if name not in (BASELINE, OURS, "proximal-offline", *RIVALS)]:
        raise ConfigError(f"no method is called {unknown[0]!r}; known: {', '.join((BASELINE, OURS, *RIVALS))}")
    figures: dict[str, float] = {}
    ratios: dict[str, float] = {}
    targets: dict[str, dict[str, Any]] = {}
    results: dict[str, list[dict[str, Any]]] = {}
    for row in ROWS:
        if wanted and row.rig not in wanted and row.name not in wanted:
            continue
        results[row.name] = [contest(row, seed, quick, told) for seed in range(1, seeds + 1)]
        enter(row, results[row.name], figures, ratios, targets)
    return {"bench": "learning", "figures": figures, "ratios": ratios, "targets": targets, "results": results}


def contest(row: Row, seed: int, quick: bool, methods: tuple[str, ...]) -> dict[str, Any]:
    """Hold one contest in a worker process and return its scores.

    Raises:
        LinkError: the worker failed.
    """
    rig, _ = rig_text(row.rig)
    recipe = QUICK if quick else dict(row.recipe)
    question = {
        "rig": rig.model_dump(mode="json"), "demonstrations": row.demonstrations, "seed": seed, "recipe": recipe,
        "methods": tuple(dict.fromkeys((OURS, *methods))), "shifts": row.shifts, "gains": row.gains,
    }  # fmt: skip
    words = [sys.executable, "-m", WORKER]
    done = subprocess.run(words, input=json.dumps(question), capture_output=True, text=True, timeout=TIMEOUT_S)
    if done.returncode != 0:
        raise LinkError(f"the worker of {row.name}, seed {seed}, failed: {done.stderr.strip()[-800:]}")
    answer: dict[str, Any] = json.loads(done.stdout.strip().splitlines()[-1])
    return answer


def enter(
    row: Row,
    results: list[dict[str, Any]],
    figures: dict[str, float],
    ratios: dict[str, float],
    targets: dict[str, dict[str, Any]],
) -> None:
    """Enter a row's means, worst seeds, ratios to the references and goals."""
    for kind in ("scores", "cost_ratios", "gain_errors", "steps", "wall_s"):
        if kind == "cost_ratios" and not row.gains:
            continue
        for method in results[0][kind]:
            values = [float(result[kind][method]) for result in results]
            figures[f"{row.name} {method} {kind} mean"] = sum(values) / len(values)
            if kind in ("scores", "cost_ratios", "gain_errors"):
                figures[f"{row.name} {method} {kind} worst"] = min(values) if kind == "scores" else max(values)
    gains = [result["scores"][OURS] - result["scores"][BASELINE] for result in results]
    figures[f"{row.name} gain over clone, least"] = min(gains)
    arrived = {name: [result["arrivals"].get(name) for result in results] for name in (OURS, *RIVALS)}
    means = {name: sum(steps) / len(steps) for name, steps in arrived.items() if None not in steps}
    figures |= {f"{row.name} {name} steps to .95": steps for name, steps in means.items()}
    rivals = [means[name] for name in RIVALS if name in means]
    if OURS in means and rivals and min(rivals) > 0:
        ratios[f"{row.name} steps to .95, ours to the best other"] = means[OURS] / min(rivals)
    mean = figures[f"{row.name} {OURS} scores mean"]
    targets[f"{row.name} mean"] = {"value": mean, "goal": row.mean, "met": mean >= row.mean}
    if row.worst is not None:
        worst = figures[f"{row.name} {OURS} scores worst"]
        targets[f"{row.name} worst seed"] = {"value": worst, "goal": row.worst, "met": worst >= row.worst}
    if row.budget is not None:
        spent = max(float(result["steps"][OURS]) for result in results)
        targets[f"{row.name} simulator steps"] = {"value": spent, "goal": row.budget, "met": spent <= row.budget}
    if row.rig == "crane":
        # What is compared is noise-free: the same start states drive both versions.
        targets[f"{row.name} never below the clone"] = {"value": min(gains), "goal": 0.0, "met": min(gains) >= 0.0}
    if row.gains:
        ratio = figures[f"{row.name} {OURS} cost_ratios mean"]
        clone = figures[f"{row.name} {BASELINE} cost_ratios mean"]
        targets[f"{row.name} cost ratio"] = {"value": ratio, "goal": clone, "met": ratio <= clone}
    for shift in row.shifts:
        ours, clone = (figures[f"{row.name} {name}@{shift} scores mean"] for name in (OURS, BASELINE))
        lost = figures[f"{row.name} {BASELINE} scores mean"] - clone
        ratios[f"{row.name} {shift}, ours to the clone"] = ours / clone if clone else 0.0
        if lost >= 0.1:
            targets[f"{row.name} {shift}"] = {"value": ours, "goal": 0.9, "met": ours >= 0.9}
