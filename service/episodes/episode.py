"""One demonstration in memory."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Split = Literal["train", "held-out", "calibration"]


@dataclass(frozen=True, slots=True)
class Episode:
    """A complete recorded run.

    Attributes:
        episode: identifier.
        rig: name of the rig.
        operator: who or what drove.
        times_s: (T,) float64, the rig's time of each sample.
        observations: (T+1, n) float32 in the rig's units; the last row is what followed the last action.
        actions: (T, m) float32 in the rig's units, as applied.
        terminated: the run ended in a true terminal state; otherwise it was cut by time or by the operator.
        outcome: ``success``, ``failure``, ``cut`` or ``unknown``.
        split: which use it is reserved for.
        weight: its weight in training.
        fragment: it did not begin where episodes of the task begin, so it says how to drive there and nothing of starts
            or of the whole task.
    """

    episode: str
    rig: str
    operator: str
    times_s: NDArray[np.float64]
    observations: NDArray[np.float32]
    actions: NDArray[np.float32]
    terminated: bool = False
    outcome: str = "unknown"
    split: Split = "train"
    weight: float = 1.0
    fragment: bool = False

    @property
    def length(self) -> int:
        """Number T of control periods."""
        return int(self.actions.shape[0])


#: The division repeats over the closed episodes of one operator, in order of closing: half trains, a sixth is held out
#: for measuring, a third calibrates the confidence gate.
SPLIT_PATTERN: tuple[Split, ...] = ("train", "held-out", "train", "calibration", "train", "calibration")


def split_of(index: int) -> Split:
    """Return the use of an operator's ``index``-th closed episode of a rig; fixed once, by order alone."""
    return SPLIT_PATTERN[index % len(SPLIT_PATTERN)]
