"""What every part of the keeper shares: the store, its transactions with their events, the feed, counters, the log."""

from __future__ import annotations

import contextlib
import sys
from collections import Counter
from collections.abc import Iterator, Mapping
from typing import Any

import zmq

from nearhand.service.bus.admission import Admission
from nearhand.service.bus.codec import encode
from nearhand.service.bus.feed_messages import Event
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import BULK_QUEUE, bind, make_socket
from nearhand.service.clock import utc_now
from nearhand.service.errors import ConfigError
from nearhand.service.store.events import EventRow
from nearhand.service.store.store import Store


def log_line(text: str) -> None:
    """Write one ``event key=value`` line to standard error; a log on a full disk must stop nobody."""
    with contextlib.suppress(OSError):
        print(f"{utc_now()} {text}", file=sys.stderr, flush=True)


class Feed:
    """The feed lane's sending end: topic and message, dropped for whoever does not keep up.

    Args:
        admission: the door that it stands behind, where the service has keys.

    Raises:
        ConfigError: the address is taken, or not loopback while there are no keys.
    """

    def __init__(
        self, context: zmq.Context[zmq.Socket[bytes]], address: str, admission: Admission | None = None
    ) -> None:
        self._context = context
        self._admission = admission
        self._may_see = self._granted()
        self._socket = self._bound(address)
        self.address = self._socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\x00")

    def publish(self, message: Message) -> None:
        """Send a message to all subscribers of its kind."""
        if self._socket.closed:
            return
        with contextlib.suppress(zmq.Again):
            self._socket.send_multipart([message.kind.encode(), encode(message)], flags=zmq.NOBLOCK)

    def turn(self) -> None:
        """Begin afresh when a key has lost the right to see: a subscriber asks once and then only listens.

        The others come back through the door by themselves; what is published meanwhile is lost to them.
        """
        if self._admission is None:
            return
        may_see = self._granted()
        if self._may_see - may_see and not self._socket.closed:
            self._socket.close(linger=0)
        self._may_see = may_see
        if self._socket.closed:
            # The library lets go of the address in its own time: then the next turn tries again.
            with contextlib.suppress(ConfigError):
                self._socket = self._bound(self.address)

    def close(self) -> None:
        """Close the socket."""
        self._socket.close(linger=0)

    def _granted(self) -> frozenset[str]:
        granted = {} if self._admission is None else self._admission.granted
        return frozenset(public for public, (_, roles) in granted.items() if "view" in roles)

    def _bound(self, address: str) -> zmq.Socket[bytes]:
        socket = make_socket(self._context, zmq.PUB, queue=BULK_QUEUE, role="bind")
        if self._admission is not None:
            self._admission.guard(socket, "feed")
        try:
            bind(socket, address)
        except ConfigError:
            socket.close(linger=0)
            raise
        return socket


class Ledger:
    """The store with everything that must happen around a change to it.

    Attributes:
        store: the records.
        feed: the feed lane.
        counters: what has happened since the start, by name.
        key: name of the key whose request is being answered; it stands in the events that follow from it.
    """

    def __init__(self, store: Store, feed: Feed) -> None:
        self.store = store
        self.feed = feed
        self.counters: Counter[str] = Counter()
        self.key = ""
        self._unpublished: list[EventRow] = []

    @contextlib.contextmanager
    def transaction(self) -> Iterator[None]:
        """Do all or nothing of the block; its events go to the feed once they are durable."""
        outermost = not self.store.database.in_transaction
        mark = len(self._unpublished)
        try:
            with self.store.database.atomic():
                yield
        except BaseException:
            del self._unpublished[mark:]
            raise
        if outermost:
            events, self._unpublished = self._unpublished, []
            for event in events:
                self._publish(event)

    def record(
        self, what: str, *, who: str, why: str = "", rig: str = "", detail: Mapping[str, Any] | None = None
    ) -> EventRow:
        """Append an event within a transaction."""
        told = {**(detail or {}), "key": self.key} if self.key else detail
        row = self.store.events.append(what, rig=rig, who=who, why=why, detail=told)
        self._unpublished.append(row)
        return row

    def record_occurrence(
        self, instance: str, number: int, what: str, *, rig: str, utc: str, detail: Mapping[str, Any]
    ) -> None:
        """Append what an action server tells of, within a transaction, exactly once."""
        row = self.store.events.append_occurrence(instance, number, what, rig=rig, utc=utc, detail=detail)
        if row is not None:
            self._unpublished.append(row)

    def _publish(self, row: EventRow) -> None:
        self.feed.publish(
            Event(event=row.event, utc=row.utc, rig=row.rig, what=row.what, who=row.who, why=row.why, detail=row.detail)
        )
