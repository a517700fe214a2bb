"""Streaming demonstrations from a control loop to the service, through a spool on the rig computer's disk.

A sample is copied into memory by the control loop, written to the spool by a thread, sent in chunks, and forgotten only
when the service has said that the whole episode is closed. Either side may die and come back in between.
"""

from __future__ import annotations

import contextlib
import secrets
import threading
import time
from dataclasses import dataclass
from pathlib import Path
from queue import Empty, SimpleQueue
from typing import Literal, Self

import zmq
from pydantic import ValidationError

from nearhand.client.recording import Recording
from nearhand.client.spool import SUFFIX, SpoolFile
from nearhand.client.upload import Upload
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, Ack, OpenEpisode
from nearhand.service.bus.keys import ClientKey, key_from_environment
from nearhand.service.bus.message import ErrorReply
from nearhand.service.bus.sockets import BULK_QUEUE, connect, make_socket
from nearhand.service.clock import utc_now
from nearhand.service.errors import ConfigError, LinkError, StoreError, WireError
from nearhand.service.rigs import Rig, sentence

#: How often samples are taken over from the control loop; what a killed process can lose.
TAKE_OVER_S = 0.01
IDLE_S = 0.05
#: Most messages per episode and turn, so that no episode holds up the others.
TURN_MESSAGES = 4
LEAVE_TIMEOUT_S = 5.0

DeliveryState = Literal["open", "waiting", "closed", "discarded", "rejected"]


@dataclass(frozen=True, slots=True)
class Delivery:
    """How far an episode has come.

    Attributes:
        sent: samples recorded for delivery.
        acknowledged: samples that the service holds durably.
        state: ``open`` while recording, ``waiting`` for the service, then ``closed``, ``discarded`` or ``rejected``.
        reason: what stands in the way, or why it was rejected.
        taken_up: it was begun by an earlier process and found in the spool.
    """

    sent: int
    acknowledged: int
    state: DeliveryState
    reason: str = ""
    taken_up: bool = False


@dataclass(slots=True)
class _Stream:
    """One episode under way; ``recording`` is None for one found in the spool."""

    upload: Upload
    recording: Recording | None

    @property
    def is_done(self) -> bool:
        """Whether the service has settled it and no more is added; a rejected one is spooled to its end."""
        if not self.upload.is_over or self.recording is None or self.recording.has_failed:
            return self.upload.is_over
        return self.upload.spool.ending is not None

    def delivery(self) -> Delivery:
        recording, upload = self.recording, self.upload
        state: DeliveryState = upload.state
        if state == "waiting" and recording is not None and not recording.ended:
            state = "open"
        sent = upload.samples if recording is None or upload.spool.ending is not None else recording.samples
        return Delivery(sent, upload.acknowledged, state, upload.reason, taken_up=recording is None)


class DemonstrationStream:
    """Delivers episodes to the service's intake lane; a context manager.

    Unfinished and undelivered episodes that an earlier process left in the spool folder are taken up: one whose writer
    died is closed as ``cut``. Episodes of a living process in the same folder are left alone. An episode that the
    service rejects stays in the folder (``.rejected``, or ``.spool`` where a rig was unknown) and stops no other.

    Leaving the context cuts recordings that are still open and waits a few seconds at most for deliveries; what is
    not acknowledged then waits in the spool for the next stream.

    Args:
        rig: whose channels are recorded.
        address: the intake lane.
        spool: folder for what is not acknowledged yet.
        key: a key that may teach, where the service has keys; by default the one that ``NEARHAND_KEY`` names.

    Raises:
        ConfigError: the key cannot be used.
        LinkError: the address is malformed.
        StoreError: the folder cannot be used.
    """

    def __init__(self, rig: Rig, address: str, spool: Path, *, key: ClientKey | None = None) -> None:
        self._key = key or key_from_environment()
        self._rig = rig
        self._address = address
        self._folder = spool
        self._new: SimpleQueue[_Stream] = SimpleQueue()
        self._under_way: dict[str, _Stream] = {}
        self._settled: dict[str, Delivery] = {}
        self._changed = threading.Condition()
        self._stopping = threading.Event()
        self._defect: BaseException | None = None
        self._take_up()
        ready: SimpleQueue[LinkError | None] = SimpleQueue()
        self._thread = threading.Thread(target=self._run, args=(ready,), name="demonstrations", daemon=True)
        self._thread.start()
        refusal = ready.get()
        if refusal is not None:
            self._thread.join()
            raise refusal

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()

    def open(self, operator: str, task: str = "", notes: str = "") -> Recording:
        """Begin an episode.

        Args:
            operator: who or what drives.
            task, notes: free text.

        Raises:
            ConfigError: a text is too long.
            StoreError: the spool's disk refuses.
        """
        if self._stopping.is_set():
            raise ConfigError("the demonstration stream was closed; open a new one")
        episode = f"{self._rig.name[:40]}-{secrets.token_hex(5)}"
        n, m = len(self._rig.observations), len(self._rig.actions)
        try:
            head = OpenEpisode(
                episode=episode, rig=self._rig.name, operator=operator, task=task, notes=notes, started_utc=utc_now(),
                observations=n, actions=m,
            )  # fmt: skip
        except ValidationError as error:
            raise ConfigError(f"cannot begin an episode: {sentence(error)}") from error
        stream = _Stream(Upload(SpoolFile.create(self._folder, head)), Recording(episode, n, m))
        assert stream.recording is not None
        with self._changed:
            self._under_way[episode] = stream
        self._new.put(stream)
        return stream.recording

    def deliveries(self) -> dict[str, Delivery]:
        """Return how far each episode has come, in order of beginning."""
        with self._changed:
            under_way = {episode: stream.delivery() for episode, stream in self._under_way.items()}
            return {**self._settled, **under_way}

    def flush(self, timeout_s: float = 30.0) -> dict[str, Delivery]:
        """Wait until the service has settled every episode that has ended, and return how far each has come.

        After ``timeout_s`` the answer is the same, with what is still ``waiting``; nothing is lost by asking again.
        """
        end_s = time.monotonic() + timeout_s
        with self._changed:
            while any(stream.delivery().state == "waiting" for stream in self._under_way.values()):
                left_s = end_s - time.monotonic()
                if left_s <= 0 or not self._thread.is_alive():
                    break
                self._changed.wait(min(left_s, 0.5))
        if self._defect is not None:
            raise LinkError(f"the demonstration stream has failed: {self._defect!r}") from self._defect
        return self.deliveries()

    def close(self, timeout_s: float = LEAVE_TIMEOUT_S) -> None:
        """Cut open recordings, wait up to ``timeout_s`` for deliveries, and stop; the spool keeps the rest."""
        with self._changed:
            recordings = [stream.recording for stream in self._under_way.values() if stream.recording is not None]
        for recording in recordings:
            if not recording.ended:
                recording.abandon()
        if self._thread.is_alive() and not self._stopping.is_set():
            with contextlib.suppress(LinkError):
                self.flush(timeout_s)
        self._stopping.set()
        self._thread.join()

    def _take_up(self) -> None:
        """Find what an earlier process left."""
        try:
            self._folder.mkdir(parents=True, exist_ok=True)
            paths = sorted(self._folder.glob(f"*{SUFFIX}"), key=lambda path: (path.stat().st_mtime_ns, path.name))
        except OSError as error:
            raise StoreError(f"cannot use the spool folder {self._folder}: {error}", code="store.spool") from error
        for path in paths:
            try:
                spool = SpoolFile.take_up(path)
                if spool is not None:
                    if spool.ending is None:
                        spool.cut()
                    self._under_way[spool.head.episode] = _Stream(Upload(spool), None)
            except StoreError as error:
                self._settled[path.stem] = Delivery(0, 0, "rejected", f"{error.code}: {error.message}", taken_up=True)

    # What follows runs in the stream's own thread.

    def _run(self, ready: SimpleQueue[LinkError | None]) -> None:
        socket = make_socket(zmq.Context.instance(), zmq.DEALER, queue=BULK_QUEUE, role="connect")
        socket.setsockopt(zmq.IMMEDIATE, 1)
        active = dict(self._under_way)
        try:
            try:
                connect(socket, self._address, self._key)
            except LinkError as error:
                ready.put(error)
                return
            ready.put(None)
            while not self._stopping.is_set():
                self._receive(socket, active, TAKE_OVER_S if active else IDLE_S)
                with contextlib.suppress(Empty):
                    while True:
                        stream = self._new.get_nowait()
                        active[stream.upload.spool.head.episode] = stream
                for stream in list(active.values()):
                    self._advance(socket, stream)
                    if stream.is_done:
                        del active[stream.upload.spool.head.episode]
                        self._settle(stream)
                with self._changed:
                    self._changed.notify_all()
        except Exception as error:
            self._defect = error
        finally:
            socket.close(linger=0)
            for stream in active.values():
                with contextlib.suppress(StoreError):
                    if stream.recording is not None and stream.upload.spool.ending is None:
                        _take_over(stream.recording, stream.upload.spool)
                stream.upload.spool.close()
            with self._changed:
                self._changed.notify_all()

    def _receive(self, socket: zmq.Socket[bytes], active: dict[str, _Stream], timeout_s: float) -> None:
        if not socket.poll(round(1e3 * timeout_s)):
            return
        now_s = time.monotonic()
        with contextlib.suppress(zmq.Again):
            while True:
                frame = socket.recv_multipart(flags=zmq.NOBLOCK)[-1]
                try:
                    answer = decode(frame, INTAKE_REPLIES)
                except WireError as error:
                    answer = ErrorReply(code="error.reply", message=f"the service's answer cannot be read: {error}")
                episode = getattr(answer, "episode", None)
                if isinstance(answer, Ack) and episode in active:
                    active[episode].upload.on_ack(answer, now_s)
                elif isinstance(answer, ErrorReply):
                    for stream in [active[episode]] if episode in active else active.values() if not episode else []:
                        code = answer.code if episode else "error.unattributed"
                        stream.upload.on_error(code, answer.message, now_s)

    def _advance(self, socket: zmq.Socket[bytes], stream: _Stream) -> None:
        """Bring one episode on: memory to spool, spool to wire."""
        upload = stream.upload
        now_s = time.monotonic()
        try:
            if stream.recording is not None and upload.spool.ending is None:
                _take_over(stream.recording, upload.spool)
            if upload.is_over:
                return
            upload.cut_chunks(now_s)
            for _ in range(TURN_MESSAGES):
                message = upload.next_message(now_s)
                if message is None:
                    return
                try:
                    socket.send(encode(message), flags=zmq.NOBLOCK)
                except zmq.Again:
                    return
                upload.sent(message, now_s)
        except StoreError as error:
            if stream.recording is not None:
                stream.recording.fail(error)
            upload.give_up(error)

    def _settle(self, stream: _Stream) -> None:
        upload = stream.upload
        delivery = stream.delivery()
        if upload.state != "rejected":
            upload.spool.delete()
        elif upload.reason.startswith(("unknown.", "store.")):
            upload.spool.close()
        else:
            upload.spool.set_aside()
        with self._changed:
            del self._under_way[upload.spool.head.episode]
            self._settled[upload.spool.head.episode] = delivery


def _take_over(recording: Recording, spool: SpoolFile) -> None:
    """Move what the control loop has added into the spool, and then the episode's end, if it has come."""
    parts, ending, abandoned = recording.taken_over()
    for rows in parts:
        spool.append_rows(rows)
    if ending is not None:
        spool.end(ending)
    elif abandoned:
        spool.cut()
