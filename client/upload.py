"""What to say to the service about one episode, and what its answers mean: values and times, no sockets."""

from __future__ import annotations

import zlib
from typing import Literal

import numpy as np

from nearhand.client.spool import SpoolFile
from nearhand.service.bus.intake_messages import Ack, Chunk, CloseEpisode, DiscardEpisode
from nearhand.service.bus.message import Message
from nearhand.service.errors import NearhandError

#: A chunk is cut at this many samples, or when its first sample has waited this long.
CHUNK_SAMPLES = 256
MOST_CHUNK_SAMPLES = 1024
CHUNK_AGE_S = 0.2
#: How long to wait for progress before asking the service what it holds; doubles while it stays silent.
PATIENCE_S = 0.5
MOST_PATIENCE_S = 5.0

State = Literal["waiting", "closed", "discarded", "rejected"]
#: Answers after which the same thing may work a little later.
PASSING = ("store", "error")
PASSING_CODES = frozenset(
    {"wire.crc", "unknown.episode", "refused.key", "refused.rate", "refused.storage", "refused.open_episodes"}
)


class Upload:
    """Brings one spool file to the service: open, chunks as credit allows, close.

    Each chunk's boundaries are fixed in the spool, on disk, before it is sent, so that whoever sends it again sends
    the same bytes. Nothing is removed before the service has said that the episode is closed.

    Args:
        spool: the episode's file, which it owns from here on.

    Attributes:
        state: ``waiting`` until the service has settled the matter.
        acknowledged: samples that the service holds durably.
        reason: the last thing that stood in the way.
    """

    def __init__(self, spool: SpoolFile) -> None:
        self.spool = spool
        self.state: State = "waiting"
        self.acknowledged = 0
        self.reason = ""
        self._opened = False
        self._ending_sent = False
        self._durable = 0
        self._next = 0
        self._credit = 1
        self._patience_s = PATIENCE_S
        self._due_s = 0.0
        self._oldest_unmarked_s: float | None = None
        self._synced = 0

    @property
    def is_over(self) -> bool:
        """Whether the service has settled the matter."""
        return self.state != "waiting"

    @property
    def samples(self) -> int:
        """How many samples are to be delivered, as far as known."""
        ending = self.spool.ending
        return self.spool.samples if ending is None else ending.samples

    def cut_chunks(self, now_s: float) -> None:
        """Fix chunk boundaries over what the spool holds.

        While the episode goes on, its newest sample is held back: should the writer die, the observation of that
        sample is what the last delivered action brought.

        Raises:
            StoreError: the spool's disk refuses.
        """
        ending = self.spool.ending
        if ending is not None and ending.discarded:
            return
        end = max(0, self.spool.samples - 1) if ending is None else ending.samples
        marked = self.spool.marks[-1] if self.spool.marks else 0
        if end <= marked:
            return
        if self._oldest_unmarked_s is None:
            self._oldest_unmarked_s = now_s
        old = ending is not None or now_s - self._oldest_unmarked_s >= CHUNK_AGE_S
        while end - marked >= CHUNK_SAMPLES or (old and end > marked):
            marked = min(end, marked + MOST_CHUNK_SAMPLES)
            self.spool.mark(marked)
            self._oldest_unmarked_s = None

    def next_message(self, now_s: float) -> Message | None:
        """Return what to send now, if anything; call ``sent`` once it is on its way.

        Raises:
            StoreError: the spool's disk refuses, or its content was damaged.
        """
        ending = self.spool.ending
        if self.is_over:
            return None
        if ending is not None and ending.discarded:
            return DiscardEpisode(episode=self.spool.head.episode) if now_s >= self._due_s else None
        if not self._opened:
            return self.spool.head if now_s >= self._due_s else None
        marks = self.spool.marks
        under_way = self._next - self._durable
        if (under_way or self._ending_sent or not self._credit) and now_s >= self._due_s:
            self._opened = False
            return self.spool.head
        if self._next < len(marks) and under_way < self._credit:
            return self._chunk(self._next)
        complete = ending is not None and (marks[-1] if marks else 0) == ending.samples
        if complete and self._durable == len(marks) and not self._ending_sent:
            assert ending is not None
            return CloseEpisode(
                episode=self.spool.head.episode, chunks=len(marks), samples=ending.samples, outcome=ending.outcome,
                terminated=ending.terminated, final_obs=ending.final_obs,
            )  # fmt: skip
        return None

    def sent(self, message: Message, now_s: float) -> None:
        """Note that a message is on its way."""
        if isinstance(message, Chunk):
            if self._next == self._durable:
                self._due_s = now_s + self._patience_s
            self._next += 1
            return
        self._ending_sent = isinstance(message, CloseEpisode)
        self._due_s = now_s + self._patience_s
        if not self._ending_sent:
            self._patience_s = min(2 * self._patience_s, MOST_PATIENCE_S)

    def on_ack(self, ack: Ack, now_s: float) -> None:
        """Take in an acknowledgement."""
        self._patience_s = PATIENCE_S
        ending = self.spool.ending
        if ack.state == "closed":
            self.acknowledged = ack.samples
            if ending is None or ending.discarded or ending.samples != ack.samples:
                self._reject(f"the service holds a closed episode of this name with {ack.samples} samples")
            else:
                self.state = "closed"
            return
        if ack.state == "discarded":
            if ending is not None and ending.discarded:
                self.state = "discarded"
            else:
                self._reject("the service has discarded the episode")
            return
        self._credit = ack.credit
        fresh = not self._opened
        if fresh:
            self._opened, self._ending_sent = True, False
            self._durable = self._next = ack.durable
        if fresh or ack.durable > self._durable:
            self._durable = ack.durable
            self._next = max(self._next, ack.durable)
            self._due_s = now_s + self._patience_s
            self.acknowledged = ack.samples
            self.reason = ""
        marks = self.spool.marks
        if self._durable > len(marks) or (self._durable and marks[self._durable - 1] != ack.samples and fresh):
            self._reject(
                f"the service holds {ack.durable} chunks with {ack.samples} samples, which is not what this spool sent"
            )

    def on_error(self, code: str, message: str, now_s: float) -> None:
        """Take in an error reply: wait and try again, or give this episode up."""
        ending = self.spool.ending
        if code == "unknown.episode" and ending is not None and ending.discarded:
            self.state = "discarded"
        elif code.split(".", 1)[0] in PASSING or code in PASSING_CODES:
            self.reason = message
            if self._opened:
                self._opened = False
                self._due_s = now_s + self._patience_s
        else:
            self._reject(f"{code}: {message}")

    def give_up(self, error: NearhandError) -> None:
        """Give the episode up because its own spool has failed; what is in the file stays there."""
        self._reject(f"{error.code}: {error.message}")

    def _reject(self, reason: str) -> None:
        self.state, self.reason = "rejected", reason

    def _chunk(self, number: int) -> Chunk:
        marks = self.spool.marks
        if self._synced < len(marks):
            self.spool.sync()
            self._synced = len(marks)
        start, stop = marks[number - 1] if number else 0, marks[number]
        rows = self.spool.read(start, stop)
        times, obs, act = (np.ascontiguousarray(rows[name]).tobytes() for name in ("time", "obs", "act"))
        crc = zlib.crc32(act, zlib.crc32(obs, zlib.crc32(times)))
        return Chunk(
            episode=self.spool.head.episode, chunk=number, count=stop - start, times=times, obs=obs, act=act, crc=crc
        )
