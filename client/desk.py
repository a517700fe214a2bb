"""What an operator's program asks of the service, and what the service tells by itself.

Both classes belong to the thread that made them.
"""

from __future__ import annotations

import math
import secrets
import sys
import time
from collections.abc import Iterator
from typing import Any, Self, TypeVar
from urllib.parse import urlsplit

import zmq
from pydantic import ValidationError

from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.desk_messages import DESK_REPLIES, Where, WhereReply
from nearhand.service.bus.desk_request import Deed, DeskReply, DeskRequest
from nearhand.service.bus.feed_messages import FEED_MESSAGES
from nearhand.service.bus.keys import KEY_VARIABLE, ClientKey, key_from_environment
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.bus.sockets import BULK_QUEUE, connect, make_socket
from nearhand.service.config import DEFAULT_HOST, DEFAULT_PORTS
from nearhand.service.errors import ConfigError, LinkError, RefusedError, WireError, error_from_code
from nearhand.service.rigs import sentence

DESK_ADDRESS = f"tcp://{DEFAULT_HOST}:{DEFAULT_PORTS['desk']}"
FEED_ADDRESS = f"tcp://{DEFAULT_HOST}:{DEFAULT_PORTS['feed']}"

#: What the library tells of a connection that is gone or never came about.
LOST = zmq.EVENT_DISCONNECTED | zmq.EVENT_HANDSHAKE_FAILED_AUTH | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL

Reply = TypeVar("Reply", bound=DeskReply)


class Desk:
    """A connection to the desk lane: one question, one answer; a context manager.

    The service may be restarted between two questions. A question that only reads is asked again when the connection
    breaks while it waits; a deed is not, because it may have been done.

    Args:
        address: the desk lane.
        timeout_s: how long to wait for an answer; may be changed between questions.
        key: where the service has keys; by default the one that ``NEARHAND_KEY`` names.

    Raises:
        ConfigError: the key cannot be used.
        LinkError: the address is malformed.
    """

    def __init__(self, address: str = DESK_ADDRESS, timeout_s: float = 10.0, *, key: ClientKey | None = None) -> None:
        self._address = address
        self._key = key or key_from_environment()
        self.timeout_s = timeout_s
        self._prefix = secrets.token_hex(6)
        self._asked = 0
        self._open()

    def _open(self) -> None:
        self._socket = make_socket(zmq.Context.instance(), zmq.DEALER, queue=BULK_QUEUE, role="connect")
        self._monitor = self._socket.get_monitor_socket(LOST, f"inproc://{secrets.token_hex(8)}")
        self._turned_away = ""
        try:
            connect(self._socket, self._address, self._key)
        except LinkError:
            self.close()
            raise

    def close(self) -> None:
        """Close the connection; what is still unsent is dropped."""
        if not self._socket.closed:
            self._socket.disable_monitor()
            self._monitor.close(linger=0)
            self._socket.close(linger=0)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()

    def ask(self, request: type[DeskRequest], reply: type[Reply], **fields: Any) -> Reply:
        """Ask for something and return the answer.

        Args:
            request: the kind of question; ``fields`` are its fields without ``request``.
            reply: the kind of answer that belongs to it.

        Raises:
            ConfigError: a field is missing, unknown or of the wrong type.
            LinkError: no answer in time, or not one of this kind.
            NearhandError: the service said no; the error is the one that its code stands for.
        """
        self._asked += 1
        identifier = f"{self._prefix}-{self._asked}"
        frame = _frame(request, identifier, fields)
        answer = self._exchange(frame, identifier, kind=str(request.model_fields["kind"].default), request=request)
        if isinstance(answer, ErrorReply):
            raise error_from_code(answer.code, answer.message)
        if not isinstance(answer, reply):
            raise LinkError(
                f"the service answered with {answer.kind!r}; expected {reply.model_fields['kind'].default!r}. "
                "Are client and service of the same release?",
                code="link.reply",
            )
        return answer

    def lanes(self) -> WhereReply:
        """Ask where the lanes are; a service that listens everywhere is reached where its desk is.

        Raises:
            NearhandError: as :meth:`ask`.
        """
        reply = self.ask(Where, WhereReply)
        here = urlsplit(self._address).hostname or DEFAULT_HOST
        told = {lane: getattr(reply, lane).replace("//0.0.0.0:", f"//{here}:") for lane in DEFAULT_PORTS}
        return reply.model_copy(update=told)

    def _exchange(self, frame: bytes, identifier: str, *, kind: str, request: type[DeskRequest]) -> Message:
        end_s = time.monotonic() + self.timeout_s
        self._notice_breaks()
        self._socket.send(frame)
        poller = zmq.Poller()
        poller.register(self._socket, zmq.POLLIN)
        poller.register(self._monitor, zmq.POLLIN)
        while (left_s := end_s - time.monotonic()) > 0:
            ready = dict(poller.poll(math.ceil(1e3 * left_s)))
            if self._socket in ready:
                answer = self._receive(identifier)
                if answer is not None:
                    return answer
            elif self._monitor in ready:
                if not self._notice_breaks():
                    continue
                if issubclass(request, Deed):
                    self._reopen()
                    raise LinkError(
                        f"the connection to {self._address} broke before the answer to {kind!r} came; it may or may "
                        "not have been done. Look at the event record before you ask again.",
                        code="link.broken",
                    )
                self._socket.send(frame)
        self._reopen()
        raise LinkError(
            f"no answer from {self._address} to {kind!r} within {self.timeout_s:g} s; is `nearhand serve` running "
            "there" + ("?" if self._key is None else ", and is the key one of that service's?"),
            code="link.silent",
        )

    def _receive(self, identifier: str) -> Message | None:
        """Return the answer to this question, or None for a late one to an earlier question."""
        data = self._socket.recv_multipart()
        try:
            message = decode(data[-1], DESK_REPLIES)
        except WireError as error:
            raise LinkError(f"the answer of {self._address} cannot be read: {error}", code="link.reply") from error
        echoed = getattr(message, "request", None)
        unreadable = isinstance(message, ErrorReply) and echoed is None
        return message if echoed == identifier or unreadable else None

    def _notice_breaks(self) -> bool:
        """Return whether the connection has broken since the last time.

        Raises:
            RefusedError: it never came about, because of the key.
        """
        lost = False
        while self._monitor.poll(0):
            # zmq_socket_monitor(3): the first frame begins with the event's number, 16 bits in the machine's order.
            event = int.from_bytes(self._monitor.recv_multipart()[0][:2], sys.byteorder)
            lost |= event == zmq.EVENT_DISCONNECTED
            if event == zmq.EVENT_HANDSHAKE_FAILED_AUTH:
                name = "" if self._key is None else self._key.name
                self._turned_away = f"does not let in the key {name!r}; it was revoked, or is another service's"
            elif event == zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL:
                self._turned_away = (
                    f"asks for a key: give --key FILE or set {KEY_VARIABLE}" if self._key is None
                    else f"has no keys, or this is no Nearhand service: leave out --key and {KEY_VARIABLE}"
                )  # fmt: skip
        if self._turned_away:
            told = self._turned_away
            self._reopen()
            raise RefusedError(f"{self._address} {told}", code="refused.key")
        return lost

    def _reopen(self) -> None:
        """Start with a fresh socket, so that a question given up is never delivered late."""
        self.close()
        self._open()


def _frame(request: type[DeskRequest], identifier: str, fields: dict[str, Any]) -> bytes:
    kind = request.model_fields["kind"].default
    try:
        return encode(request(request=identifier, **fields))
    except ValidationError as error:
        raise ConfigError(f"{kind}: {sentence(error)}", code="config.option") from error
    except (TypeError, ValueError, OverflowError) as error:
        raise ConfigError(f"{kind}: a field cannot be sent: {error}", code="config.option") from error


class Feed:
    """What the service tells by itself: progress, events, rig health; a context manager and an iterator.

    Anything may be lost on this lane. Iterating ends when nothing has come for ``timeout_s``.

    Args:
        address: the feed lane.
        timeout_s: how long iterating waits for the next message.
        topics: kinds to subscribe to; all when empty.
        key: a key that may view, where the service has keys; by default the one that ``NEARHAND_KEY`` names.

    Attributes:
        unreadable: how many frames could not be read and were passed over.
    """

    def __init__(
        self,
        address: str = FEED_ADDRESS,
        timeout_s: float = 10.0,
        *,
        topics: tuple[str, ...] = (),
        key: ClientKey | None = None,
    ) -> None:
        key = key or key_from_environment()
        self._timeout_s = timeout_s
        self.unreadable = 0
        self._socket = make_socket(zmq.Context.instance(), zmq.SUB, queue=BULK_QUEUE, role="connect")
        for topic in topics or ("",):
            self._socket.setsockopt(zmq.SUBSCRIBE, topic.encode())
        try:
            connect(self._socket, address, key)
        except LinkError:
            self.close()
            raise

    def close(self) -> None:
        """Close the connection."""
        self._socket.close(linger=0)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()

    def receive(self, timeout_s: float) -> Message | None:
        """Return the next message, a Progress, Event or RigHealth, or None when none comes within ``timeout_s``."""
        end_s = time.monotonic() + timeout_s
        while self._socket.poll(max(0, math.ceil(1e3 * (end_s - time.monotonic())))):
            try:
                return decode(self._socket.recv_multipart()[-1], FEED_MESSAGES)
            except WireError:
                self.unreadable += 1
        return None

    def __iter__(self) -> Iterator[Message]:
        while (message := self.receive(self._timeout_s)) is not None:
            yield message
