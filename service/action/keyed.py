"""The action lane of a service with keys: whoever asks must hold a key that may drive, at each request anew."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Callable

import zmq

from nearhand.service.action.records import Occurrences
from nearhand.service.bus import queries
from nearhand.service.bus.admission import Admission, bearer
from nearhand.service.bus.codec import encode
from nearhand.service.bus.message import ErrorReply
from nearhand.service.errors import RefusedError

#: A refusal is noted at once, and its repetitions together, at most once in so many seconds.
REPEAT_S = 10.0
#: Most keys told apart; the refusals of others are only counted.
MOST_APART = 100


class KeyedLane:
    """Receives with the sender's key, and answers only those that may drive.

    Args:
        admission: the door of this process; it guards the socket from here on.
        socket: not bound yet.
        answer: returns the reply to a permitted frame.
        occurrences, counters: where refusals are noted.
    """

    def __init__(
        self,
        admission: Admission,
        socket: zmq.Socket[bytes],
        answer: Callable[[bytes], bytes],
        occurrences: Occurrences,
        counters: Counter[str],
    ) -> None:
        admission.guard(socket, "action")
        self._admission = admission
        self._socket = socket
        self._answer = answer
        self._occurrences = occurrences
        self._counters = counters
        self._bearer = ""
        self._noted: dict[str, tuple[float, int]] = {}

    def receive(self, flags: int) -> list[bytes]:
        """Return the parts of the next request, as the socket's own method does."""
        frames = self._socket.recv_multipart(flags, copy=False)
        self._bearer = bearer(frames[-1])
        return [frame.bytes for frame in frames]

    def answer(self, frame: bytes) -> bytes:
        """Return the reply to the request that was received last."""
        try:
            self._admission.permit(self._bearer, "drive", "driving a rig")
        except RefusedError as error:
            self._counters["refusals.action"] += 1
            self._note(error)
            query = queries.usual(frame)
            return encode(ErrorReply(code=error.code, message=error.message, seq=query.seq if query else None))
        return self._answer(frame)

    def _note(self, error: RefusedError) -> None:
        name = self._admission.granted.get(self._bearer, ("unknown key", None))[0]
        now_s = time.monotonic()
        noted_s, since = self._noted.get(name, (-REPEAT_S, 0))
        if now_s - noted_s < REPEAT_S:
            self._noted[name] = noted_s, since + 1
        elif name in self._noted or len(self._noted) < MOST_APART:
            detail = {"key": name, "lane": "action", "code": error.code, "count": since + 1}
            self._occurrences.note("", "request-refused", detail)
            self._noted[name] = now_s, 0
