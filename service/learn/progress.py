"""An online run's state on disk: everything that one iteration hands to the next."""

from __future__ import annotations

import numpy as np
import torch

from nearhand.service.jobs.folder import JobFolder
from nearhand.service.learn.checkpoints import read_checkpoint, write_checkpoint
from nearhand.service.learn.online import OnlineProximalPoint

NAME = "proximal"
OPTIMISERS = ("actor", "critic", "cost", "absorbing")
NUMBERS = ("iteration", "alpha", "first_distance", "best_distance", "lost", "caution", "steps", "curves", "messages")


def save_progress(folder: JobFolder, run: OnlineProximalPoint, identity: str) -> None:
    """Write the run's checkpoint."""
    state = run.progress
    arrays: dict[str, object] = {"log_sd": state.log_sd, "best_log_sd": state.best_log_sd}
    arrays |= {"average": state.average.numpy(), "best": state.best.numpy(), "cost_sum": state.cost_sum}
    steps = {}
    for name in OPTIMISERS:
        optimiser = getattr(state, name)
        arrays |= optimiser.state(name)
        steps[name] = optimiser.steps
    for name, (flat, log_sd) in state.candidates.items():
        arrays[f"candidate.{name}.flat"], arrays[f"candidate.{name}.log_sd"] = flat, log_sd
    facts = {name: getattr(state, name) for name in NUMBERS}
    facts |= {"identity": identity, "optimiser_steps": steps, "candidates": list(state.candidates)}
    write_checkpoint(folder, NAME, arrays, facts)


def restore_progress(folder: JobFolder, run: OnlineProximalPoint, identity: str) -> bool:
    """Put a run back to where its checkpoint left it; return whether there was one.

    Raises:
        StoreError: the checkpoint is damaged.
    """
    found = read_checkpoint(folder, NAME, identity)
    if found is None:
        return False
    arrays, facts = found
    state = run.progress
    for name in OPTIMISERS:
        getattr(state, name).restore(name, arrays, facts["optimiser_steps"][name])
    for name in NUMBERS:
        setattr(state, name, facts[name])
    state.log_sd = np.asarray(arrays["log_sd"], dtype=np.float32)
    state.best_log_sd = np.asarray(arrays["best_log_sd"], dtype=np.float32)
    state.average, state.best = torch.from_numpy(arrays["average"]), torch.from_numpy(arrays["best"])
    state.cost_sum = np.asarray(arrays["cost_sum"], dtype=np.float64)
    state.candidates = {
        name: (arrays[f"candidate.{name}.flat"], arrays[f"candidate.{name}.log_sd"]) for name in facts["candidates"]
    }
    return True
