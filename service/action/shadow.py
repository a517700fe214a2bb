"""A version beside whoever acts: what it would have done for each observation, and what was truly done.

It looks after the reply has left, reads the governor's own histories, and has no way to an action.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from nearhand.service.action.serving import History, Serving
from nearhand.service.bus.arrays import WIRE_DTYPE
from nearhand.service.policy.network import Policy

#: Kept while no keeper drains; older rows are lost, which shows as a gap in their numbers.
MOST_ROWS = 8_192
BY_FALLBACK, BY_POLICY, BY_OPERATOR = 0, 1, 2


class Shadow:
    """One rig's shadow.

    Args:
        version: its number.
        policy: its policy.
        number: number of the last row that an earlier shadow of this rig has written in this process' life.

    Attributes:
        version: as given.
        number: of the last row written.
    """

    def __init__(self, version: int, policy: Policy, number: int = 0) -> None:
        self.version = version
        self.number = self._first = number
        self._serving = Serving(policy)
        self._would = np.zeros((MOST_ROWS, policy.action_size), dtype=WIRE_DTYPE)
        self._done = np.zeros((MOST_ROWS, policy.action_size), dtype=WIRE_DTYPE)
        self._driver = np.zeros(MOST_ROWS, dtype=np.uint8)
        self._waiting: tuple[list[float], int] | None = None

    def restart(self) -> None:
        """Another session, or an observation that was not taken in: what was done for the last one stays unknown."""
        self._waiting = None

    def look(self, observed: History, acted: History, driver: int) -> None:
        """Take in the newest observation; the newest action is what was done for the one before it.

        Args:
            driver: who acts for the newest observation.
        """
        if self._waiting is not None:
            would, by = self._waiting
            row = self.number % MOST_ROWS
            self._would[row], self._done[row], self._driver[row] = would, acted.newest(1)[0], by
            self.number += 1
        self._serving.look(observed, acted)
        proposed = self._serving.propose()
        self._waiting = None if proposed is None else (proposed, driver)

    def after(self, number: int, most: int) -> dict[str, Any]:
        """Return at most ``most`` rows after a number: version, first (number), would, done, driver as bytes."""
        first = max(number, self._first, self.number - MOST_ROWS)
        count = max(0, min(most, self.number - first))
        rows = np.arange(first, first + count) % MOST_ROWS
        return {
            "version": self.version, "first": first + 1, "count": count, "would": self._would[rows].tobytes(),
            "done": self._done[rows].tobytes(), "driver": self._driver[rows].tobytes(),
        }  # fmt: skip
