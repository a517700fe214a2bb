"""What the action server remembers for the keeper: numbered occurrences, until they are drained."""

from __future__ import annotations

from collections import deque
from typing import Any

from nearhand.service.clock import utc_now

#: Kept while no keeper drains; older ones are lost, and counted.
MOST_OCCURRENCES = 10_000


class Occurrences:
    """Trips, arms, latches, loads and sessions, numbered from 1 in this process' life."""

    def __init__(self) -> None:
        self._kept: deque[dict[str, Any]] = deque()
        self._number = 0
        self.lost = 0

    def note(self, rig: str, what: str, detail: dict[str, Any]) -> None:
        """Remember one."""
        self._number += 1
        self._kept.append({"number": self._number, "utc": utc_now(), "rig": rig, "what": what, "detail": detail})
        if len(self._kept) > MOST_OCCURRENCES:
            self._kept.popleft()
            self.lost += 1

    @property
    def is_empty(self) -> bool:
        """Whether the keeper has taken over everything."""
        return not self._kept

    def after(self, number: int, most: int) -> tuple[dict[str, Any], ...]:
        """Forget those up to ``number`` and return at most ``most`` of the rest, oldest first."""
        while self._kept and self._kept[0]["number"] <= number:
            self._kept.popleft()
        return tuple(item for item, _ in zip(self._kept, range(most), strict=False))
