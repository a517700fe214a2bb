"""The intake lane: everything that waits goes into one transaction, and only then is it acknowledged."""

from __future__ import annotations

import traceback
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.bus.arrays import unpack_rows
from nearhand.service.bus.codec import decode_map, from_map
from nearhand.service.bus.intake_messages import INTAKE_REQUESTS, Ack, Chunk, CloseEpisode, DiscardEpisode, OpenEpisode
from nearhand.service.bus.message import Message
from nearhand.service.clock import Clock
from nearhand.service.errors import ConflictError, NearhandError, RefusedError, StoreError, WireError
from nearhand.service.keeper.access import Access
from nearhand.service.keeper.credit import Credit
from nearhand.service.keeper.lane import Lane, Request, error_reply
from nearhand.service.keeper.ledger import Ledger, log_line
from nearhand.service.store.episodes import ChunkRow, EpisodeRow

MAX_BATCH = 256
MAX_BATCH_BYTES = 16 * 1024 * 1024


class Intake:
    """Takes episodes in.

    Args:
        ledger: where they are stored.
        lane: where they arrive.
        clock: for the credit.
        access: what the key of the present request may do.
    """

    def __init__(self, ledger: Ledger, lane: Lane, clock: Clock, access: Access) -> None:
        self._ledger = ledger
        self._lane = lane
        self._credit = Credit(clock)
        self._access = access

    def serve(self) -> int:
        """Store and answer what waits, up to a bound; return how many requests that were."""
        batch: list[Request] = []
        size = 0
        while len(batch) < MAX_BATCH and size < MAX_BATCH_BYTES:
            request = self._lane.receive()
            if request is None:
                break
            batch.append(request)
            size += sum(map(len, request.frames))
        if not batch:
            return 0
        try:
            with self._ledger.transaction():
                replies = [self._answer(request) for request in batch]
        except StoreError as error:
            self._count(error)
            log_line(f"intake-failed code={error.code} requests={len(batch)} message={error.message!r}")
            replies = [error_reply(error, _readable(request)) for request in batch]
        self._ledger.counters["intake.transactions"] += 1
        for request, reply in zip(batch, replies, strict=True):
            self._lane.reply(request, reply)
        return len(batch)

    def _answer(self, request: Request) -> Message:
        """Return the reply to one request, its changes done or undone; a failing store ends the whole batch."""
        self._ledger.counters["intake.requests"] += 1
        table: dict[str, Any] | None = None
        try:
            frame = request.frame()
            table = decode_map(frame, self._lane.limits)
            self._access.begin("intake", request)
            message = from_map(table, INTAKE_REQUESTS)
            self._access.require("teach", "intake", message.kind)
            with self._ledger.transaction():
                return self._ack(self._do(message), len(frame))
        except StoreError:
            raise
        except NearhandError as error:
            self._count(error)
            return error_reply(error, table)
        except Exception as error:
            log_line(f"intake-defect message={error!r}\n{traceback.format_exc()}")
            self._ledger.counters["errors.internal"] += 1
            return error_reply(NearhandError("an internal error; see the service's log", code="error.internal"), table)

    def _count(self, error: NearhandError) -> None:
        self._ledger.counters["intake.errors"] += 1
        self._ledger.counters[f"errors.{error.code}"] += 1

    def _ack(self, row: EpisodeRow, size: int) -> Ack:
        if row.state == "open":
            self._credit.heard(row.episode, size)
        else:
            self._credit.forget(row.episode)
        return Ack.model_validate(
            {
                "episode": row.episode, "durable": row.chunks, "samples": row.samples,
                "credit": self._credit.chunks(row.episode), "state": row.state,
            }
        )  # fmt: skip

    def _do(self, message: Message) -> EpisodeRow:
        if isinstance(message, Chunk):
            return self._chunk(message)
        if isinstance(message, OpenEpisode):
            return self._open(message)
        if isinstance(message, CloseEpisode):
            return self._close(message)
        assert isinstance(message, DiscardEpisode)
        return self._discard(message)

    def _open(self, message: OpenEpisode) -> EpisodeRow:
        stored = self._ledger.store.rigs.get(message.rig)
        sizes = (len(stored.rig.observations), len(stored.rig.actions))
        if (message.observations, message.actions) != sizes:
            raise ConflictError(
                f"episode {message.episode} announces {message.observations} observation and {message.actions} action "
                f"channels; rig {message.rig} has {sizes[0]} and {sizes[1]}",
                code="conflict.channels",
            )
        row = self._ledger.store.episodes.find(message.episode)
        if row is None:
            limits = self._lane.limits
            if self._ledger.store.episodes.open_count() >= limits.open_episodes:
                raise RefusedError(
                    f"{limits.open_episodes} episodes are open already; close or discard some, or raise the limit "
                    "open_episodes",
                    code="refused.open_episodes",
                )
            self._ledger.counters["intake.episodes"] += 1
            return self._ledger.store.episodes.open(
                message.episode, rig=message.rig, rig_digest=stored.digest, operator=message.operator,
                task=message.task, notes=message.notes, started_utc=message.started_utc,
                observations=message.observations, actions=message.actions,
            )  # fmt: skip
        if (row.rig, row.operator, row.started_utc) != (message.rig, message.operator, message.started_utc):
            raise ConflictError(
                f"episode {message.episode} exists already, by {row.operator!r} on rig {row.rig}, "
                f"started {row.started_utc}; choose another identifier",
                code="conflict.episode",
            )
        return row

    def _chunk(self, message: Chunk) -> EpisodeRow:
        row = self._ledger.store.episodes.get(message.episode)
        chunk = ChunkRow(message.count, message.times, message.obs, message.act, message.crc)
        if chunk.computed_crc() != message.crc:
            raise WireError(
                f"chunk {message.chunk} of {message.episode}: CRC-32 is {chunk.computed_crc()}, the message says "
                f"{message.crc}; it was damaged on the way, send it again",
                code="wire.crc",
            )
        what = f"chunk {message.chunk} of {message.episode}"
        times = _times(message.times, message.count, what)
        observations = unpack_rows(message.obs, message.count, row.observations, what=f"{what}: obs")
        actions = unpack_rows(message.act, message.count, row.actions, what=f"{what}: act")
        if not np.isfinite(times).all():
            raise WireError(f"{what}: times must be finite seconds", code="wire.times")
        if row.state == "discarded":
            raise ConflictError(f"episode {row.episode} was discarded; begin a new one", code="conflict.discarded")
        if message.chunk < row.chunks:
            if self._ledger.store.episodes.chunk(row.episode, message.chunk) != chunk:
                raise ConflictError(
                    f"{what} is stored already with other content; nothing was changed", code="conflict.chunk"
                )
            self._ledger.counters["intake.repeated"] += 1
            return row
        if row.state == "closed":
            raise ConflictError(f"episode {row.episode} is closed with {row.chunks} chunks", code="conflict.closed")
        if message.chunk > row.chunks:
            self._ledger.counters["intake.gaps"] += 1
            return row
        limits = self._lane.limits
        if self._ledger.store.database.size_bytes() >= limits.stored_bytes:
            raise RefusedError(
                f"the database has reached {limits.stored_bytes} bytes; raise the limit stored_bytes, or begin another "
                "data folder",
                code="refused.storage",
            )
        self._ledger.counters["intake.chunks"] += 1
        self._ledger.counters["intake.samples"] += message.count
        finite = bool(np.isfinite(observations).all() and np.isfinite(actions).all())
        return self._ledger.store.episodes.append(row, chunk, finite=finite)

    def _close(self, message: CloseEpisode) -> EpisodeRow:
        row = self._ledger.store.episodes.get(message.episode)
        final = unpack_rows(message.final_obs, 1, row.observations, what=f"final_obs of {row.episode}")
        if row.state == "discarded":
            raise ConflictError(f"episode {row.episode} was discarded; begin a new one", code="conflict.discarded")
        if row.state == "closed":
            said = (message.chunks, message.samples, message.outcome, message.terminated, message.final_obs)
            if said != (row.chunks, row.samples, row.outcome, row.terminated, row.final_obs):
                raise ConflictError(
                    f"episode {row.episode} is closed already with another ending; nothing was changed",
                    code="conflict.closed",
                )
            return row
        if message.chunks > row.chunks:
            self._ledger.counters["intake.gaps"] += 1
            return row
        if (message.chunks, message.samples) != (row.chunks, row.samples):
            raise ConflictError(
                f"episode {row.episode}: the closing counts {message.chunks} chunks with {message.samples} samples, "
                f"stored are {row.chunks} with {row.samples}; nothing was closed",
                code="conflict.counts",
            )
        if not row.samples:
            raise ConflictError(f"episode {row.episode} has no samples; discard it", code="conflict.empty")
        finite = bool(np.isfinite(final).all())
        row = self._ledger.store.episodes.close(
            row, outcome=message.outcome, terminated=message.terminated, final_obs=message.final_obs, finite=finite
        )
        self._ledger.counters["intake.closed"] += 1
        self._ledger.record(
            "episode-closed", rig=row.rig, who=row.operator,
            detail={"episode": row.episode, "samples": row.samples, "outcome": row.outcome, "split": row.split},
        )  # fmt: skip
        return row

    def _discard(self, message: DiscardEpisode) -> EpisodeRow:
        row = self._ledger.store.episodes.get(message.episode)
        if row.state == "closed":
            raise ConflictError(
                f"episode {row.episode} is closed; only an open one can be discarded", code="conflict.closed"
            )
        if row.state == "open":
            self._ledger.counters["intake.discarded"] += 1
            row = self._ledger.store.episodes.discard(row)
        return row


def _times(data: bytes, count: int, what: str) -> NDArray[np.float64]:
    if len(data) != 8 * count:
        raise WireError(
            f"{what}: times has {len(data)} bytes; expected {8 * count} ({count} little-endian float64 values)",
            code="wire.vector_size",
        )
    return np.frombuffer(data, dtype="<f8")


def _readable(request: Request) -> Mapping[str, Any] | None:
    try:
        return decode_map(request.frame())
    except WireError:
        return None
