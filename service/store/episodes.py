"""Episodes as stored: chunks as they arrived, each with its checksum, and what the closing said."""

from __future__ import annotations

import sqlite3
import zlib
from collections.abc import Collection
from dataclasses import dataclass

import numpy as np

from nearhand.service.clock import utc_now
from nearhand.service.episodes.episode import Episode, Split, split_of
from nearhand.service.errors import StoreError, UnknownNameError
from nearhand.service.store.database import Database


@dataclass(frozen=True, slots=True)
class EpisodeRow:
    """What is known of an episode beside its samples; ``chunks`` and ``samples`` are those that are stored.

    ``finite`` is false once any observation or action was NaN or infinite.
    """

    episode: str
    rig: str
    rig_digest: str
    operator: str
    task: str
    notes: str
    started_utc: str
    opened_utc: str
    closed_utc: str | None
    observations: int
    actions: int
    state: str
    chunks: int
    samples: int
    finite: bool
    outcome: str
    terminated: bool
    final_obs: bytes | None
    split: Split | None


@dataclass(frozen=True, slots=True)
class ChunkRow:
    """One chunk: ``count`` samples as little-endian bytes, and their CRC-32."""

    count: int
    times: bytes
    obs: bytes
    act: bytes
    crc: int

    def computed_crc(self) -> int:
        """Return the CRC-32 of the bytes."""
        return zlib.crc32(self.act, zlib.crc32(self.obs, zlib.crc32(self.times)))


def _row(row: sqlite3.Row) -> EpisodeRow:
    values = {name: row[name] for name in EpisodeRow.__slots__}
    values["finite"], values["terminated"] = bool(values["finite"]), bool(values["terminated"])
    return EpisodeRow(**values)


class Episodes:
    """The episodes in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def find(self, episode: str) -> EpisodeRow | None:
        """Return an episode's row, or None."""
        row = self._database.row("SELECT * FROM episodes WHERE episode = ?", (episode,))
        return None if row is None else _row(row)

    def get(self, episode: str) -> EpisodeRow:
        """Return an episode's row.

        Raises:
            UnknownNameError: there is none of that name.
        """
        row = self.find(episode)
        if row is None:
            raise UnknownNameError(f"no episode is called {episode!r}; send open-episode first", code="unknown.episode")
        return row

    def open(
        self,
        episode: str,
        *,
        rig: str,
        rig_digest: str,
        operator: str,
        task: str,
        notes: str,
        started_utc: str,
        observations: int,
        actions: int,
    ) -> EpisodeRow:
        """Begin an episode."""
        self._database.execute(
            "INSERT INTO episodes (episode, rig, rig_digest, operator, task, notes, started_utc, opened_utc, "
            "observations, actions, state) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, 'open')",
            (episode, rig, rig_digest, operator, task, notes, started_utc, utc_now(), observations, actions),
        )
        return self.get(episode)

    def open_count(self) -> int:
        """Return how many episodes are open."""
        return int(self._database.value("SELECT count(*) FROM episodes WHERE state = 'open'"))

    def append(self, row: EpisodeRow, chunk: ChunkRow, *, finite: bool) -> EpisodeRow:
        """Store the next chunk of an open episode; its number is the count of those before it."""
        with self._database.atomic():
            self._database.execute(
                "INSERT INTO chunks VALUES (?, ?, ?, ?, ?, ?, ?)",
                (row.episode, row.chunks, chunk.count, chunk.times, chunk.obs, chunk.act, chunk.crc),
            )
            self._database.execute(
                "UPDATE episodes SET chunks = chunks + 1, samples = samples + ?, finite = finite AND ? "
                "WHERE episode = ? AND state = 'open'",
                (chunk.count, int(finite), row.episode),
            )
        return self.get(row.episode)

    def chunk(self, episode: str, number: int) -> ChunkRow | None:
        """Return a stored chunk, or None."""
        row = self._database.row(
            "SELECT count, times, obs, act, crc FROM chunks WHERE episode = ? AND chunk = ?", (episode, number)
        )
        return None if row is None else ChunkRow(*row)

    def close(self, row: EpisodeRow, *, outcome: str, terminated: bool, final_obs: bytes, finite: bool) -> EpisodeRow:
        """Close an episode and settle its split, by the order of closing per rig and operator."""
        with self._database.atomic():
            index = int(
                self._database.value(
                    "SELECT count(*) FROM episodes WHERE rig = ? AND operator = ? AND state = 'closed'",
                    (row.rig, row.operator),
                )
            )
            self._database.execute(
                "UPDATE episodes SET state = 'closed', closed_utc = ?, outcome = ?, terminated = ?, final_obs = ?, "
                "finite = finite AND ?, split = ? WHERE episode = ?",
                (utc_now(), outcome, int(terminated), final_obs, int(finite), split_of(index), row.episode),
            )
        return self.get(row.episode)

    def discard(self, row: EpisodeRow) -> EpisodeRow:
        """Throw an open episode's samples away; its name stays taken."""
        with self._database.atomic():
            self._database.execute("DELETE FROM chunks WHERE episode = ?", (row.episode,))
            self._database.execute(
                "UPDATE episodes SET state = 'discarded', closed_utc = ?, samples = 0, chunks = 0 WHERE episode = ?",
                (utc_now(), row.episode),
            )
        return self.get(row.episode)

    def of_rig(self, rig: str) -> list[EpisodeRow]:
        """Return a rig's episodes in order of opening."""
        rows = self._database.rows("SELECT * FROM episodes WHERE rig = ? ORDER BY rowid", (rig,))
        return [_row(row) for row in rows]

    def closed(
        self, rig: str, *, splits: Collection[str] = (), operators: Collection[str] = (), finite_only: bool = False
    ) -> list[EpisodeRow]:
        """Return a rig's closed episodes in order of closing; an empty choice means all."""
        rows = self._database.rows(
            "SELECT * FROM episodes WHERE rig = ? AND state = 'closed' ORDER BY closed_utc, rowid", (rig,)
        )
        return [
            row
            for row in map(_row, rows)
            if (not splits or row.split in splits)
            and (not operators or row.operator in operators)
            and (row.finite or not finite_only)
        ]

    def load(self, row: EpisodeRow) -> Episode:
        """Return a closed episode's samples, checked against their checksums.

        Raises:
            StoreError: chunks are missing or damaged.
        """
        chunks = [
            ChunkRow(*item)
            for item in self._database.rows(
                "SELECT count, times, obs, act, crc FROM chunks WHERE episode = ? ORDER BY chunk", (row.episode,)
            )
        ]
        if row.final_obs is None or row.split is None or len(chunks) != row.chunks:
            raise StoreError(f"episode {row.episode} is not complete in the store", code="store.damaged")
        for number, chunk in enumerate(chunks):
            if chunk.computed_crc() != chunk.crc:
                raise StoreError(
                    f"episode {row.episode}: chunk {number} does not have its recorded CRC-32; restore a backup",
                    code="store.damaged",
                )
        observations = np.frombuffer(b"".join([chunk.obs for chunk in chunks] + [row.final_obs]), dtype="<f4")
        actions = np.frombuffer(b"".join(chunk.act for chunk in chunks), dtype="<f4")
        times = np.frombuffer(b"".join(chunk.times for chunk in chunks), dtype="<f8")
        return Episode(
            episode=row.episode,
            rig=row.rig,
            operator=row.operator,
            times_s=times.astype(np.float64),
            observations=observations.astype(np.float32).reshape(row.samples + 1, row.observations),
            actions=actions.astype(np.float32).reshape(row.samples, row.actions),
            terminated=row.terminated,
            outcome=row.outcome,
            split=row.split,
        )
