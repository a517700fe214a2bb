"""How fast one client may ask: a token bucket per client, in bounded memory."""

from __future__ import annotations

from collections import OrderedDict

from nearhand.service.clock import Clock

#: Most clients told apart; the one that was heard of longest ago is forgotten, and begins anew.
MOST_CLIENTS = 1_000


class Meter:
    """Counts requests per client against a rate, averaged over a second.

    Args:
        per_s: requests per second, and how many may come at once after a pause.
        clock: whose time counts.
    """

    def __init__(self, per_s: float, clock: Clock) -> None:
        self._per_s = per_s
        self._clock = clock
        self._left: OrderedDict[bytes, tuple[float, int]] = OrderedDict()
        self.refused = 0

    def admits(self, client: bytes) -> bool:
        """Count a request and return whether it is within the rate."""
        now_ns = self._clock.now_ns()
        left, then_ns = self._left.pop(client, (self._per_s, now_ns))
        left = min(self._per_s, left + (now_ns - then_ns) * 1e-9 * self._per_s)
        within = left >= 1.0
        self._left[client] = (left - 1.0 if within else left), now_ns
        if len(self._left) > MOST_CLIENTS:
            self._left.popitem(last=False)
        self.refused += not within
        return within
