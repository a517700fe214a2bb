"""What every part of the keeper shares: the store, its transactions with their events, the feed, counters, the log."""

from __future__ import annotations

import contextlib
import sys
from collections import Counter
from collections.abc import Iterator, Mapping
from typing import Any

import zmq

from nearhand.service.bus.codec import encode
from nearhand.service.bus.feed_messages import Event
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import BULK_QUEUE, bind, make_socket
from nearhand.service.clock import utc_now
from nearhand.service.store.events import EventRow
from nearhand.service.store.store import Store


def log_line(text: str) -> None:
    """Write one ``event key=value`` line to standard error."""
    print(f"{utc_now()} {text}", file=sys.stderr, flush=True)


class Feed:
    """The feed lane's sending end: topic and message, dropped for whoever does not keep up."""

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], address: str) -> None:
        self._socket = make_socket(context, zmq.PUB, queue=BULK_QUEUE, role="bind")
        self.address = bind(self._socket, address)

    def publish(self, message: Message) -> None:
        """Send a message to all subscribers of its kind."""
        with contextlib.suppress(zmq.Again):
            self._socket.send_multipart([message.kind.encode(), encode(message)], flags=zmq.NOBLOCK)

    def close(self) -> None:
        """Close the socket."""
        self._socket.close(linger=0)


class Ledger:
    """The store with everything that must happen around a change to it.

    Attributes:
        store: the records.
        feed: the feed lane.
        counters: what has happened since the start, by name.
    """

    def __init__(self, store: Store, feed: Feed) -> None:
        self.store = store
        self.feed = feed
        self.counters: Counter[str] = Counter()
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
        row = self.store.events.append(what, rig=rig, who=who, why=why, detail=detail)
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
