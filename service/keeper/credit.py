"""Flow control of the intake lane: how many chunks one recording may have under way."""

from __future__ import annotations

from nearhand.service.clock import Clock

BUDGET_BYTES = 32 * 1024 * 1024
MOST_CHUNKS = 32
RECENT_NS = 5_000_000_000


class Credit:
    """Divides a budget of bytes over the recordings that were heard of within the last seconds."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._heard_ns: dict[str, int] = {}
        self._chunk_bytes: dict[str, int] = {}

    def heard(self, episode: str, size: int) -> None:
        """Note a request of ``size`` bytes for a recording."""
        self._heard_ns[episode] = self._clock.now_ns()
        self._chunk_bytes[episode] = max(size, self._chunk_bytes.get(episode, 0))

    def forget(self, episode: str) -> None:
        """Note that a recording has ended."""
        self._heard_ns.pop(episode, None)
        self._chunk_bytes.pop(episode, None)

    def chunks(self, episode: str) -> int:
        """Return how many chunks the recording may send ahead of its acknowledgements; at least 1."""
        horizon_ns = self._clock.now_ns() - RECENT_NS
        for name in [name for name, heard_ns in self._heard_ns.items() if heard_ns < horizon_ns]:
            self.forget(name)
        share = BUDGET_BYTES // max(1, len(self._heard_ns))
        return max(1, min(MOST_CHUNKS, share // max(1, self._chunk_bytes.get(episode, 1))))
