"""A recording on the rig computer's own disk until the service has acknowledged it.

One file per episode, only ever appended to: eight bytes of magic, then frames ``kind (1) length (4) crc (4) payload``,
little-endian; the CRC-32 covers kind and payload. A frame cut short by a crash ends the file: it is dropped on reading.

======== ========== ==========================================================================
kind     name       payload
======== ========== ==========================================================================
1        head       JSON: the fields of ``open-episode``
2        samples    rows: time float64, observation n × float32, action m × float32
3        mark       uint64: a chunk for the wire ends before this sample, fixed for good
4        ending     JSON: discarded, samples, outcome, terminated, final_obs (hexadecimal)
======== ========== ==========================================================================

The writer holds an advisory lock on the file while it lives; a file that can be locked has lost its writer (POSIX).
"""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import struct
import zlib
from bisect import bisect_right
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray
from pydantic import ValidationError

from nearhand.service.bus.intake_messages import OpenEpisode, Outcome
from nearhand.service.errors import StoreError

MAGIC = b"NHSPOOL\x01"
SUFFIX = ".spool"
REJECTED_SUFFIX = ".rejected"
FRAME = struct.Struct("<BII")
HEAD, SAMPLES, MARK, ENDING = 1, 2, 3, 4
MAX_PAYLOAD = 64 * 1024 * 1024

Rows = NDArray[np.void]


def row_type(observations: int, actions: int) -> np.dtype[np.void]:
    """Return the packed row: ``time`` <f8, ``obs`` (n,) <f4, ``act`` (m,) <f4."""
    return np.dtype([("time", "<f8"), ("obs", "<f4", (observations,)), ("act", "<f4", (actions,))])


@dataclass(frozen=True, slots=True)
class Ending:
    """How an episode ended.

    Attributes:
        discarded: it is to be thrown away; the rest does not matter then.
        samples: how many samples it has.
        outcome, terminated: as in ``close-episode``.
        final_obs: the observation after the last action, n little-endian float32.
    """

    discarded: bool = False
    samples: int = 0
    outcome: Outcome = "unknown"
    terminated: bool = False
    final_obs: bytes = b""


class SpoolFile:
    """One episode's file; used by one thread at a time.

    Attributes:
        path: where it is.
        head: what opens the episode.
        samples: how many samples it holds.
        marks: the end of each chunk, as a sample number.
        ending: how the episode ended, None while it goes on.
    """

    def __init__(self, path: Path, descriptor: int, head: OpenEpisode) -> None:
        self.path = path
        self.head = head
        self.samples = 0
        self.marks: list[int] = []
        self.ending: Ending | None = None
        self._descriptor = descriptor
        self._row_type = row_type(head.observations, head.actions)
        self._size = 0
        self._starts: list[int] = []
        self._offsets: list[int] = []
        self._lengths: list[int] = []

    @classmethod
    def create(cls, folder: Path, head: OpenEpisode) -> Self:
        """Begin a file for an episode, locked.

        Raises:
            StoreError: the folder cannot be written, or the episode has a file already.
        """
        path = folder / f"{head.episode}{SUFFIX}"
        hidden = folder / f".{head.episode}.new"
        try:
            folder.mkdir(parents=True, exist_ok=True)
            if path.exists():
                raise FileExistsError(17, "there is one already", str(path))
            descriptor = os.open(hidden, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600)
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            raise StoreError(
                f"cannot begin a spool file in {folder}: {error}; choose another spool folder", code="store.spool"
            ) from error
        made = cls(path, descriptor, head)
        try:
            made._write(MAGIC)
            made._append(HEAD, head.model_dump_json(exclude={"v", "kind"}).encode())
            os.fsync(descriptor)
            hidden.rename(path)
        except (OSError, StoreError) as error:
            hidden.unlink(missing_ok=True)
            made.close()
            raise StoreError(f"cannot begin {path}: {error}", code="store.spool") from error
        return made

    @classmethod
    def take_up(cls, path: Path) -> Self | None:
        """Return a file that has lost its writer, locked and read; None if its writer lives or it is gone.

        Raises:
            StoreError: it is damaged from the start.
        """
        try:
            descriptor = os.open(path, os.O_RDWR | os.O_CLOEXEC)
        except FileNotFoundError:
            return None
        except OSError as error:
            raise StoreError(f"cannot open {path}: {error}", code="store.spool") from error
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            if os.fstat(descriptor).st_nlink == 0:
                os.close(descriptor)
                return None
        except BlockingIOError:
            os.close(descriptor)
            return None
        try:
            return cls._read_all(path, descriptor)
        except (StoreError, OSError, ValueError, TypeError, KeyError) as error:
            os.close(descriptor)
            raise StoreError(f"{path} is no spool file, or damaged: {error}", code="store.spool") from error

    @classmethod
    def _read_all(cls, path: Path, descriptor: int) -> Self:
        if os.pread(descriptor, len(MAGIC), 0) != MAGIC:
            raise StoreError("it does not begin as one")
        offset = len(MAGIC)
        made: Self | None = None
        while (frame := _read_frame(descriptor, offset)) is not None:
            kind, payload = frame
            if made is None:
                if kind != HEAD:
                    raise StoreError("its first frame opens no episode")
                try:
                    made = cls(path, descriptor, OpenEpisode.model_validate(json.loads(payload)))
                except ValidationError as error:
                    raise StoreError(f"its head is wrong: {error.error_count()} fields") from error
            else:
                made._take_in(kind, payload, offset)
            offset += FRAME.size + len(payload)
        if made is None:
            raise StoreError("its first frame is damaged")
        made._size = offset
        os.ftruncate(descriptor, offset)
        return made

    def _take_in(self, kind: int, payload: bytes, offset: int) -> None:
        if kind == SAMPLES:
            self._note_rows(offset, len(payload))
        elif kind == MARK:
            (end,) = struct.unpack("<Q", payload)
            self.marks.append(int(end))
        elif kind == ENDING:
            fields: dict[str, Any] = json.loads(payload)
            self.ending = Ending(**{**fields, "final_obs": bytes.fromhex(fields["final_obs"])})

    def _note_rows(self, offset: int, length: int) -> None:
        self._starts.append(self.samples)
        self._offsets.append(offset)
        self._lengths.append(length)
        self.samples += length // self._row_type.itemsize

    def append_rows(self, rows: Rows) -> None:
        """Append samples.

        Raises:
            StoreError: the disk refuses; the file is as it was before.
        """
        if rows.size:
            offset = self._size
            payload = rows.tobytes()
            self._append(SAMPLES, payload)
            self._note_rows(offset, len(payload))

    def mark(self, end: int) -> None:
        """Fix that the next chunk for the wire ends before sample ``end``."""
        self._append(MARK, struct.pack("<Q", end))
        self.marks.append(end)

    def end(self, ending: Ending) -> None:
        """Fix how the episode ended; the file then takes no more samples."""
        fields = {**asdict(ending), "final_obs": ending.final_obs.hex()}
        self._append(ENDING, json.dumps(fields).encode())
        self.ending = ending

    def cut(self) -> None:
        """End an episode whose writer is gone.

        What the last action brought is unknown, so its sample is left out and its observation is the final one.
        """
        if self.samples < 2:
            self.end(Ending(discarded=True))
            return
        last = self.samples - 1
        self.end(Ending(samples=last, outcome="cut", final_obs=self.read(last, last + 1)["obs"].tobytes()))

    def read(self, start: int, stop: int) -> Rows:
        """Return samples ``start`` to ``stop`` as rows, bit for bit as they were added.

        Raises:
            StoreError: the file no longer holds them undamaged.
        """
        parts = []
        index = bisect_right(self._starts, start) - 1
        while index < len(self._starts) and self._starts[index] < stop:
            frame = _read_frame(self._descriptor, self._offsets[index])
            if frame is None or len(frame[1]) != self._lengths[index]:
                raise StoreError(f"{self.path} was damaged after it was written", code="store.spool")
            rows = np.frombuffer(frame[1], dtype=self._row_type)
            first = self._starts[index]
            parts.append(rows[max(0, start - first) : stop - first])
            index += 1
        return np.concatenate(parts)

    def sync(self) -> None:
        """Return once everything appended is on the disk itself.

        Raises:
            StoreError: the disk refuses.
        """
        try:
            os.fsync(self._descriptor)
        except OSError as error:
            raise StoreError(f"cannot write {self.path} through to the disk: {error}", code="store.spool") from error

    def delete(self) -> None:
        """Remove the file: the service has it all."""
        self.path.unlink(missing_ok=True)
        self.close()

    def set_aside(self) -> Path:
        """Rename the file so that nobody sends it again, and return where it is."""
        aside = self.path.with_suffix(REJECTED_SUFFIX)
        with contextlib.suppress(OSError):
            self.path.rename(aside)
        self.close()
        return aside

    def close(self) -> None:
        """Release file and lock; the file stays."""
        if self._descriptor >= 0:
            os.close(self._descriptor)
            self._descriptor = -1

    def _append(self, kind: int, payload: bytes) -> None:
        crc = zlib.crc32(payload, zlib.crc32(bytes((kind,))))
        self._write(FRAME.pack(kind, len(payload), crc) + payload)

    def _write(self, data: bytes) -> None:
        done = 0
        try:
            while done < len(data):
                done += os.pwrite(self._descriptor, data[done:], self._size + done)
        except OSError as error:
            with contextlib.suppress(OSError):
                os.ftruncate(self._descriptor, self._size)
            raise StoreError(f"cannot write {self.path}: {error}", code="store.spool") from error
        self._size += len(data)


def _read_frame(descriptor: int, offset: int) -> tuple[int, bytes] | None:
    """Return kind and payload of the whole and undamaged frame at an offset, or None."""
    prefix = os.pread(descriptor, FRAME.size, offset)
    if len(prefix) < FRAME.size:
        return None
    kind, length, crc = FRAME.unpack(prefix)
    if length > MAX_PAYLOAD:
        return None
    payload = os.pread(descriptor, length, offset + FRAME.size)
    if len(payload) < length or zlib.crc32(payload, zlib.crc32(prefix[:1])) != crc:
        return None
    return kind, payload
