"""A lane where each request gets one reply: envelopes kept as they came, every error answered."""

from __future__ import annotations

import contextlib
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import zmq

from nearhand.service.bus.admission import Admission, bearer
from nearhand.service.bus.codec import MAX_FRAME_BYTES, encode
from nearhand.service.bus.limits import USUAL, Limits
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.bus.sockets import bind, make_socket
from nearhand.service.clock import MonotonicClock
from nearhand.service.errors import NearhandError, WireError
from nearhand.service.keeper.meter import Meter

#: Most replies held for a client that sends and does not read; the next ones are lost to it.
REPLY_QUEUE = 10_000
#: Most requests over the rate that are answered in a row before the others have their turn.
MOST_REFUSED = 100
_IDENTIFIER = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,63}")


@dataclass(frozen=True, slots=True)
class Request:
    """One request; ``envelope`` goes in front of the reply, ``frames`` are what the client sent after it.

    ``bearer`` is the public key of the connection that it came over, empty where the service has no keys.
    """

    envelope: tuple[bytes, ...]
    frames: tuple[bytes, ...]
    bearer: str = ""

    def frame(self) -> bytes:
        """Return the message's frame.

        Raises:
            WireError: the request is not exactly one frame.
        """
        if len(self.frames) != 1:
            raise WireError(f"a request is one frame; this one has {len(self.frames)}", code="wire.frames")
        return self.frames[0]


class Lane:
    """A bound ROUTER socket; belongs to the thread that made it.

    Args:
        queue: most requests held per client; a client that sends more is held back.
        admission: the door that it stands behind, where the service has keys.
        name: the lane's name, at the door.
        limits: what is taken in.
        replies: most replies held for a client that does not read; the next ones are lost to it.

    Raises:
        ConfigError: the address is taken, or not loopback while there are no keys.
    """

    def __init__(
        self,
        context: zmq.Context[zmq.Socket[bytes]],
        address: str,
        *,
        queue: int,
        admission: Admission | None = None,
        name: str = "",
        limits: Limits = USUAL,
        replies: int = REPLY_QUEUE,
    ) -> None:
        self.limits = limits
        self.meter = Meter(limits.requests_per_s, MonotonicClock())
        self.socket = make_socket(context, zmq.ROUTER, queue=queue, role="bind")
        self.socket.setsockopt(zmq.MAXMSGSIZE, limits.frame_bytes)
        self._keyed = admission is not None
        if admission is not None:
            admission.guard(self.socket, name)
        # Replies to a whole batch go out at once; unless told so, a router drops what is over its limit without a word.
        self.socket.setsockopt(zmq.SNDHWM, replies)
        self.socket.setsockopt(zmq.ROUTER_MANDATORY, 1)
        self.address = bind(self.socket, address)

    def receive(self) -> Request | None:
        """Return the next waiting request that is within its client's rate, or None; the others are answered here."""
        for _ in range(MOST_REFUSED):
            request = self._next()
            if request is None or self.meter.admits(request.bearer.encode() or request.envelope[0]):
                return request
            told = f"over {self.limits.requests_per_s:g} requests per second; ask more slowly, nothing was done"
            self.reply(request, ErrorReply(code="refused.rate", message=told))
        return None

    def _next(self) -> Request | None:
        public = ""
        try:
            if self._keyed:
                frames = self.socket.recv_multipart(flags=zmq.NOBLOCK, copy=False)
                parts, public = [frame.bytes for frame in frames], bearer(frames[-1])
            else:
                parts = self.socket.recv_multipart(flags=zmq.NOBLOCK)
        except zmq.Again:
            return None
        head = 2 if len(parts) > 2 and not parts[1] else 1
        return Request(envelope=tuple(parts[:head]), frames=tuple(parts[head:]), bearer=public)

    def reply(self, request: Request, message: Message) -> None:
        """Send the reply; one that cannot be sent as a frame becomes an error that says so."""
        echo = {name: getattr(message, name, None) for name in ("request", "episode")}
        try:
            data = encode(message)
        except (TypeError, ValueError, OverflowError) as error:
            data = encode(error_reply(WireError(f"the reply cannot be written: {error}", code="wire.reply"), echo))
        if len(data) > MAX_FRAME_BYTES:
            oversized = WireError(
                f"the reply of {len(data)} bytes is over the limit of {MAX_FRAME_BYTES}; ask for less at once",
                code="wire.oversized",
            )
            data = encode(error_reply(oversized, echo))
        parts = [*request.envelope, data]
        with contextlib.suppress(zmq.ZMQError):
            try:
                self.socket.send_multipart(parts, flags=zmq.NOBLOCK)
            except zmq.Again:
                # Asking for events makes the library take note of replies that have left; a client that reads has room.
                self.socket.getsockopt(zmq.EVENTS)
                self.socket.send_multipart(parts, flags=zmq.NOBLOCK)

    def close(self) -> None:
        """Close the socket."""
        self.socket.close(linger=0)


def error_reply(error: NearhandError, table: Mapping[str, Any] | None) -> ErrorReply:
    """Return the reply that stands for an error, with the echo of what could be read of the request."""
    echoed: dict[str, Any] = {}
    for name in ("request", "episode"):
        value = (table or {}).get(name)
        if isinstance(value, str) and _IDENTIFIER.fullmatch(value):
            echoed[name] = value
    return ErrorReply(code=error.code[:200], message=error.message[:2000], **echoed)
