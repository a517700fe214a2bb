"""Clocks: the real monotonic one and a fake one for tests.

Every deadline is measured on the receiver's own monotonic clock; wall time is only ever written down, never compared.
"""

from __future__ import annotations

import datetime
import time
from typing import Protocol


class Clock(Protocol):
    """Something that tells monotonic nanoseconds."""

    def now_ns(self) -> int:
        """Return monotonic time in nanoseconds."""
        ...


class MonotonicClock:
    """The machine's monotonic clock."""

    def now_ns(self) -> int:
        """Return ``time.monotonic_ns()``."""
        return time.monotonic_ns()


class FakeClock:
    """A clock that moves only when told to."""

    def __init__(self, start_ns: int = 0) -> None:
        self._now_ns = start_ns

    def now_ns(self) -> int:
        """Return the set time."""
        return self._now_ns

    def advance_s(self, seconds: float) -> None:
        """Move forward by ``seconds``."""
        self._now_ns += round(seconds * 1e9)


def utc_now() -> str:
    """Return the wall time as ISO 8601 with milliseconds, for records."""
    return datetime.datetime.now(datetime.UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
