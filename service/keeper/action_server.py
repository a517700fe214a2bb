"""The keeper's view of the action server: what it should act with, what it does, what happened there."""

from __future__ import annotations

import time
from collections import deque
from typing import Any

import zmq
from zmq.utils.monitor import recv_monitor_message

from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.control_messages import (
    CONTROL_REPLIES,
    Accompany,
    Arm,
    ControlReply,
    Drain,
    DrainReply,
    Latch,
    Load,
)
from nearhand.service.bus.feed_messages import RigHealth
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.bus.sockets import BULK_QUEUE, connect, make_socket
from nearhand.service.errors import LinkError, NearhandError, StoreError, WireError, error_from_code
from nearhand.service.keeper.ledger import Ledger, log_line
from nearhand.service.store.rigs import RigRow

DRAIN_INTERVAL_S = 0.1
ANSWER_TIMEOUT_S = 1.0
RETRY_S = 5.0


class ActionServer:
    """Speaks to the action server over the control socket, and brings it to what the store says.

    Attributes:
        instance: the action server's present life, empty until it has answered.
        states: by rig, the state that it told last.
        counters: its counters.
    """

    def __init__(self, ledger: Ledger, context: zmq.Context[zmq.Socket[bytes]], address: str) -> None:
        self._ledger = ledger
        self.socket = make_socket(context, zmq.DEALER, queue=BULK_QUEUE, role="connect")
        # A request for a server that is away must fail at once, not wait and change something later.
        self.socket.setsockopt(zmq.IMMEDIATE, 1)
        self._monitor = self.socket.get_monitor_socket(zmq.EVENT_DISCONNECTED)
        connect(self.socket, address)
        self.instance = ""
        self.states: dict[str, dict[str, Any]] = {}
        self.counters: dict[str, int] = {}
        self._serial = 0
        self._late: deque[Message] = deque()
        self._after = 0
        self._drain: tuple[int, int, float] | None = None
        self._next_drain_s = 0.0
        self._heard_s = -ANSWER_TIMEOUT_S
        self._last_load = 0
        self._loaded: dict[str, tuple[int, str]] = {}
        self._retry_s: dict[str, float] = {}

    @property
    def reachable(self) -> bool:
        """Whether it has answered within the last second."""
        return time.monotonic() - self._heard_s < ANSWER_TIMEOUT_S

    def close(self) -> None:
        """Close the socket."""
        self.socket.disable_monitor()
        self.socket.close(linger=0)

    def load(self, rig: RigRow, version: int) -> ControlReply:
        """Have a rig act with a version of the store, or with none (0).

        Raises:
            LinkError: no answer; the present version goes on acting.
            NearhandError: the server's own refusal; the present version goes on acting.
        """
        row = self._ledger.store.versions.get(version) if version else None
        request = Load(
            request=self._request(),
            rig=rig.rig.name,
            description=rig.rig.model_dump(mode="json"),
            version=version,
            sha256=row.sha256 if row else "",
            policy=self._ledger.store.versions.policy(version) if row else b"",
        )
        self._loaded.pop(rig.rig.name, None)
        reply = self._ask(request)
        self._last_load = self._serial
        self._loaded[rig.rig.name] = (version, rig.digest)
        return reply

    def ensure(self, rig: RigRow) -> None:
        """Load what the store says of a rig, if the server is there and has not got it."""
        version = self._ledger.store.versions.in_service(rig.rig.name)
        if self.reachable and self._loaded.get(rig.rig.name) != (version, rig.digest):
            self.load(rig, version)

    def forget(self, rig: str) -> None:
        """Have a rig loaded again, because what the server got was not stored in the end."""
        self._loaded.pop(rig, None)

    def arm(self, rig: str, who: str, why: str) -> ControlReply:
        """Clear a rig's latch.

        Raises:
            LinkError: no answer.
            NearhandError: the server's own refusal.
        """
        return self._ask(Arm(request=self._request(), rig=rig, who=who, why=why))

    def latch(self, rig: str, who: str, why: str) -> ControlReply:
        """Latch a rig; raises as :meth:`arm` does."""
        return self._ask(Latch(request=self._request(), rig=rig, who=who, why=why))

    def accompany(self, rig: str, version: int) -> None:
        """Have a version look on, or none (0).

        Raises:
            LinkError: no answer.
            NearhandError: the server's own refusal.
        """
        versions = self._ledger.store.versions
        row = versions.get(version) if version else None
        self._ask(
            Accompany(
                request=self._request(), rig=rig, version=version, sha256=row.sha256 if row else "",
                policy=versions.policy(version) if row else b"",
            )
        )  # fmt: skip
        self._last_load = self._serial

    def turn(self) -> None:
        """Take in what has arrived and ask again when it is time; never waits for an answer to ``drain``."""
        while True:
            message = self._late.popleft() if self._late else self._receive()
            if message is None:
                break
            self._take(message)
        now_s = time.monotonic()
        if self._drain is not None and now_s - self._drain[2] > ANSWER_TIMEOUT_S:
            self._drain, self._after = None, 0
            self._ledger.counters["control.silences"] += 1
        self._notice_losses()
        if self._drain is None and now_s >= self._next_drain_s:
            self._next_drain_s = now_s + DRAIN_INTERVAL_S
            request = Drain(request=self._request(), after=self._after, shadows=self._stored_rows())
            try:
                self.socket.send(encode(request), flags=zmq.NOBLOCK)
                self._drain = (self._serial, self._after, now_s)
            except zmq.Again:
                self._after = 0

    def pause_s(self) -> float:
        """Return how long the caller may sleep before ``turn`` is due."""
        return 0.0 if self._late else max(0.0, self._next_drain_s - time.monotonic())

    def _notice_losses(self) -> None:
        """Ask from the beginning after each lost connection.

        The server's next life counts its occurrences from 1, and forgets those that it is told to pass over.
        """
        while self._monitor.poll(0):
            recv_monitor_message(self._monitor)
            self._after, self._drain = 0, None

    def _request(self) -> str:
        self._serial += 1
        return f"k{self._serial}"

    def _receive(self) -> Message | None:
        while True:
            try:
                parts = self.socket.recv_multipart(flags=zmq.NOBLOCK)
            except zmq.Again:
                return None
            self._heard_s = time.monotonic()
            try:
                return decode(parts[-1], CONTROL_REPLIES)
            except WireError as error:
                self._ledger.counters[f"errors.{error.code}"] += 1

    def _ask(self, request: Load | Accompany | Arm | Latch) -> ControlReply:
        end_s = time.monotonic() + ANSWER_TIMEOUT_S
        if not self.socket.poll(round(1000 * ANSWER_TIMEOUT_S), zmq.POLLOUT):
            raise LinkError("the action server is not there; nothing was changed; try again", code="link.action_server")
        self.socket.send(encode(request), flags=zmq.NOBLOCK)
        while (left_s := end_s - time.monotonic()) > 0:
            message = self._receive()
            if message is None:
                self.socket.poll(max(1, round(1000 * left_s)), zmq.POLLIN)
            elif getattr(message, "request", None) != request.request:
                self._late.append(message)
            elif isinstance(message, ErrorReply):
                raise error_from_code(message.code, f"the action server refused: {message.message}")
            elif isinstance(message, ControlReply):
                told = {"mode": message.mode, "version": message.version, "reasons": message.reasons}
                self.states[message.rig] = {**self.states.get(message.rig, {}), **told}
                return message
        raise LinkError(
            f"the action server did not answer within {ANSWER_TIMEOUT_S:g} s; nothing was changed; try again",
            code="link.action_server",
        )

    def _take(self, message: Message) -> None:
        request = getattr(message, "request", None)
        if self._drain is None or request != f"k{self._drain[0]}":
            return
        serial, after, _ = self._drain
        self._drain = None
        if isinstance(message, DrainReply):
            try:
                self._drained(message, serial, after)
            except StoreError as error:
                self._ledger.counters[f"errors.{error.code}"] += 1
                log_line(f"drain-failed code={error.code} message={error.message!r}")

    def _drained(self, reply: DrainReply, serial: int, after: int) -> None:
        if reply.instance != self.instance:
            log_line(f"action-server instance={reply.instance}")
            self.instance = reply.instance
            self._loaded.clear()
            self._retry_s.clear()
            self._after = self._ledger.store.events.last_occurrence(reply.instance)
            if after > self._after:
                self._after, self._next_drain_s = 0, 0.0
                return
        if reply.occurrences:
            self._record(reply)
        self._record_shadows(reply)
        self._after = self._ledger.store.events.last_occurrence(reply.instance)
        self.counters = dict(reply.counters)
        for rig, state in reply.rigs.items():
            if self.states.get(rig) != state:
                self._ledger.feed.publish(RigHealth(rig=rig, state=state))
        self.states = dict(reply.rigs)
        if serial > self._last_load:
            self._reconcile()

    def _record(self, reply: DrainReply) -> None:
        with self._ledger.transaction():
            for item in reply.occurrences:
                number, detail = item.get("number"), item.get("detail")
                if type(number) is int and number > 0:
                    self._ledger.record_occurrence(
                        reply.instance,
                        number,
                        str(item.get("what", ""))[:200],
                        rig=str(item.get("rig", ""))[:200],
                        utc=str(item.get("utc", ""))[:200],
                        detail=detail if isinstance(detail, dict) else {"detail": detail},
                    )

    def _stored_rows(self) -> dict[str, int]:
        """Return by rig the last row of its shadow that is stored of the server's present life."""
        shadows = self._ledger.store.shadows
        return {rig: shadows.last_number(row.shadow, self.instance) for rig, row in shadows.present().items()}

    def _record_shadows(self, reply: DrainReply) -> None:
        present = self._ledger.store.shadows.present() if reply.shadows else {}
        for rig, told in reply.shadows.items():
            row = present.get(rig)
            if row is None or row.version != told.get("version") or not told.get("count"):
                continue
            with self._ledger.transaction():
                self._ledger.store.shadows.append(
                    row.shadow, reply.instance, int(told["first"]), int(told["count"]), bytes(told["would"]),
                    bytes(told["done"]), bytes(told["driver"]),
                )  # fmt: skip

    def _reconcile(self) -> None:
        now_s = time.monotonic()
        present = self._ledger.store.shadows.present()
        for name, state in self.states.items():
            row = present.get(name)
            wanted = row.version if row else 0
            if state.get("shadow", 0) != wanted and now_s >= self._retry_s.get(f"{name}/shadow", 0.0):
                try:
                    self.accompany(name, wanted)
                except NearhandError as error:
                    self._retry_s[f"{name}/shadow"] = time.monotonic() + RETRY_S
                    log_line(f"shadow-failed rig={name} code={error.code} message={error.message!r}")
        for name, digest in self._ledger.store.rigs.digests().items():
            version = self._ledger.store.versions.in_service(name)
            acting = self.states.get(name, {}).get("version")
            if (self._loaded.get(name) == (version, digest) and acting == version) or (
                now_s < self._retry_s.get(name, 0.0)
            ):
                continue
            try:
                self.load(self._ledger.store.rigs.get(name), version)
                self._retry_s.pop(name, None)
            except NearhandError as error:
                self._retry_s[name] = time.monotonic() + RETRY_S
                self._ledger.counters["control.load_failures"] += 1
                log_line(f"load-failed rig={name} version={version} code={error.code} message={error.message!r}")
