"""A bare session on the action lane: it asks, and looks at what comes back, without the link's own protections."""

from __future__ import annotations

import time

import numpy as np
import zmq
from numpy.typing import NDArray

from nearhand.service.bus.action_messages import ACTION_REPLIES, Act, Action, Hello, Welcome
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import ACTION_QUEUE, connect, make_socket
from nearhand.service.errors import LinkError
from nearhand.service.rigs import Rig

REPLY_TIMEOUT_MS = 2_000
WELCOME_TRIES = 10


class Asking:
    """One session of a rig; it belongs to the thread that made it. A context manager.

    Attributes:
        seq: number of the last query.
    """

    def __init__(self, rig: Rig, address: str, session: str) -> None:
        self._rig = rig
        self._session = session
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._socket = make_socket(self._context, zmq.DEALER, queue=ACTION_QUEUE, role="connect")
        self.seq = 0
        connect(self._socket, address)

    def __enter__(self) -> Asking:
        return self

    def __exit__(self, *exc: object) -> None:
        self._socket.close(linger=0)
        self._context.term()

    def hello(self) -> Welcome:
        """Open the session.

        Raises:
            LinkError: the server stays silent or says no.
        """
        hello = Hello(
            rig=self._rig.name,
            session=self._session,
            observations=tuple(channel.name for channel in self._rig.observations),
            actions=tuple(channel.name for channel in self._rig.actions),
            period_s=self._rig.timing.period_s,
        )
        reply: Message | None = None
        for _ in range(WELCOME_TRIES):
            reply = self._exchange(hello)
            if isinstance(reply, Welcome):
                return reply
            time.sleep(0.1)
        raise LinkError(f"the action server did not welcome the session: {reply!r}")

    def ask(self, observation: NDArray[np.floating]) -> Action | None:
        """Send one observation (n,) and return the reply to just this query, or None."""
        self.seq += 1
        act = Act(
            rig=self._rig.name,
            session=self._session,
            seq=self.seq,
            sent_ns=time.monotonic_ns(),
            obs=pack(observation),
        )
        reply = self._exchange(act)
        return reply if isinstance(reply, Action) and reply.seq == self.seq else None

    def _exchange(self, message: Message) -> Message | None:
        self._socket.send(encode(message))
        return decode(self._socket.recv(), ACTION_REPLIES) if self._socket.poll(REPLY_TIMEOUT_MS) else None
