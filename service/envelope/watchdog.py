"""Freshness, measured on the receiver's own monotonic clock alone."""

from __future__ import annotations

#: How fast the smallest seen transit is allowed to grow again, so that two clocks may drift apart.
REBASE = 1e-4


class Watchdog:
    """Tells whether observations come in time.

    ``gap`` is the time since the last query. ``excess`` is how much longer a query was under way than the quickest one
    of the session: receiving minus sending time, less the smallest such difference seen, so that the two clocks need
    not agree.

    Args:
        deadline_s: longest gap and longest excess.

    Attributes:
        excess_ns: of the last query.
    """

    def __init__(self, deadline_s: float) -> None:
        self._deadline_ns = round(deadline_s * 1e9)
        self._received_ns: int | None = None
        self._smallest_ns: float | None = None
        self.excess_ns = 0.0

    def forget(self) -> None:
        """A new session: other clock, no gap."""
        self._received_ns = None
        self._smallest_ns = None

    def pause(self) -> None:
        """Count no gap until the next query."""
        self._received_ns = None

    def is_overdue(self, now_ns: int) -> bool:
        """Tell whether the gap is longer than the deadline."""
        return self._received_ns is not None and now_ns - self._received_ns > self._deadline_ns

    def due_ns(self) -> int | None:
        """Return when the gap will be too long, or None while nothing is expected."""
        return None if self._received_ns is None else self._received_ns + self._deadline_ns + 1

    def received(self, sent_ns: int, now_ns: int) -> bool:
        """Note a query; return whether it was under way for too long."""
        transit_ns = now_ns - sent_ns
        if self._smallest_ns is None:
            self._smallest_ns = transit_ns
        elif self._received_ns is not None:
            self._smallest_ns += REBASE * (now_ns - self._received_ns)
        self._smallest_ns = min(self._smallest_ns, transit_ns)
        self._received_ns = now_ns
        self.excess_ns = transit_ns - self._smallest_ns
        return self.excess_ns > self._deadline_ns
