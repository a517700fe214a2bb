"""Corrections: episodes that an operator drove after taking the rig over from a policy, and how they are marked.

The mark is the episode's task, with the particulars at the head of its notes, so that a correction travels like any
other episode, through every table and export.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace

import numpy as np

from nearhand.service.episodes.episode import Episode

TASK = "correction"
#: For so long after taking over, the operator is still finding into it (Kelly et al. 2018 report 0.3 to 0.5 s).
TRANSIENT_S = 0.4
HEAD = re.compile(r"^version=(?P<version>\d{1,9}) transient_s=(?P<transient>\d{1,4}(?:\.\d{1,6})?)(?:; |$)")


@dataclass(frozen=True, slots=True)
class Correction:
    """What is particular about a correction.

    Attributes:
        version: that was taken over from, 0 if none acted.
        transient_s: the part at its start that shows the change of driver and not how to drive.
    """

    version: int
    transient_s: float = TRANSIENT_S

    def notes(self, text: str = "") -> str:
        """Return the notes of the episode: these particulars, then free text."""
        head = f"version={self.version} transient_s={self.transient_s:.3f}"
        return f"{head}; {text}" if text else head

    @classmethod
    def of(cls, task: str, notes: str) -> Correction | None:
        """Return what an episode's task and notes say, or None if it is no correction."""
        found = HEAD.match(notes) if task == TASK else None
        return None if found is None else cls(int(found["version"]), float(found["transient"]))


def as_fragment(episode: Episode, correction: Correction) -> Episode | None:
    """Return a correction as training sees it: without its transient, and as no start; None if nothing is left.

    The rule of correction by take-over: the first moments show the change of driver and not how to drive, and where the
    operator took over is no place where the task begins (Kelly et al. 2018, HG-DAgger, from memory).
    """
    if not episode.length:
        return None
    begin = int(np.searchsorted(episode.times_s, episode.times_s[0] + correction.transient_s - 1e-9))
    if begin >= episode.length:
        return None
    return replace(
        episode, times_s=episode.times_s[begin:], observations=episode.observations[begin:],
        actions=episode.actions[begin:], fragment=True,
    )  # fmt: skip
