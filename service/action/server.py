"""The action server's loop: every request gets one reply, queries go first, the watchdogs are kept.

Blocking sockets in one thread; nothing here waits for the keeper, a trainer or a disk.
"""

from __future__ import annotations

import gc
import select
import time
from collections import Counter
from collections.abc import Callable
from typing import Any, Protocol

import msgpack
import numpy as np
import zmq
from pydantic import ValidationError

from nearhand.service.action.control import Control
from nearhand.service.action.driven_rig import DrivenRig
from nearhand.service.action.governor import Decision
from nearhand.service.action.keyed import KeyedLane
from nearhand.service.action.records import Occurrences
from nearhand.service.bus import queries
from nearhand.service.bus.action_messages import ACTION_REQUESTS, Act, Hello
from nearhand.service.bus.admission import Admission
from nearhand.service.bus.arrays import WIRE_DTYPE
from nearhand.service.bus.codec import decode_map, encode, from_map
from nearhand.service.bus.control_messages import CONTROL_REQUESTS
from nearhand.service.bus.limits import USUAL, Limits
from nearhand.service.bus.message import PROTOCOL_VERSION, ErrorReply
from nearhand.service.bus.queries import Query
from nearhand.service.bus.sockets import ACTION_QUEUE, BULK_QUEUE, bind, make_socket
from nearhand.service.clock import Clock
from nearhand.service.errors import NearhandError, UnknownNameError, WireError

#: Queries taken in a row before the control socket and the watchdogs get their turn.
BURST = 64
#: Longest time between two looks of the watchdogs.
IDLE_NS = 1_000_000_000
#: Longest time that the end waits for the keeper to take over what happened last.
LEAVE_NS = 1_000_000_000
SEND_MORE = zmq.NOBLOCK | zmq.SNDMORE

Socket = zmq.Socket[bytes]
Receive = Callable[[int], list[bytes]]


#: A socket, how to receive from it, how to answer, and how many requests in a row.
Lane = tuple[Socket, Receive, Callable[[bytes], bytes], int]


class Stop(Protocol):
    """What ends the loop: a flag, and a descriptor that becomes readable with it."""

    @property
    def stopped(self) -> bool:
        """Whether to end."""
        ...

    def fileno(self) -> int:
        """Return the descriptor to poll."""
        ...


class ActionServer:
    """Owns the action and control sockets; belongs to the thread that made it.

    Args:
        context: the process' context.
        action, control: addresses to bind.
        clock: the receiver's clock.
        instance: identifier of this process' life.
        admission: the door that the action lane stands behind, where the service has keys.
        limits: what the action lane takes in.

    Raises:
        ConfigError: an address cannot be bound.
    """

    def __init__(
        self,
        context: zmq.Context[Socket],
        action: str,
        control: str,
        clock: Clock,
        instance: str,
        admission: Admission | None = None,
        limits: Limits = USUAL,
    ) -> None:
        self._limits = limits
        self._clock = clock
        self._rigs: dict[str, DrivenRig] = {}
        self._tick_ns = 0
        self._leave_ns: int | None = None
        self._answered: list[tuple[DrivenRig, Decision]] = []
        self._occurrences = Occurrences()
        self._packer = msgpack.Packer(use_bin_type=True)
        self.counters: Counter[str] = Counter()
        self._control_room = Control(self._rigs, self._occurrences, self.counters, clock, instance)
        self._action = make_socket(context, zmq.ROUTER, queue=ACTION_QUEUE, role="bind")
        # The library hears about once a millisecond that replies have left: a short queue would drop the next ones.
        self._action.setsockopt(zmq.SNDHWM, BULK_QUEUE)
        self._action.setsockopt(zmq.MAXMSGSIZE, limits.frame_bytes)
        self._receive: Receive = self._action.recv_multipart
        self._reply_to = self._answer
        if admission is not None:
            keyed = KeyedLane(admission, self._action, self._answer, self._occurrences, self.counters)
            self._receive, self._reply_to = keyed.receive, keyed.answer
        self.address = bind(self._action, action)
        self._control = make_socket(context, zmq.ROUTER, queue=BULK_QUEUE, role="bind")
        bind(self._control, control)

    def close(self) -> None:
        """Close both sockets."""
        self._action.close(linger=0)
        self._control.close(linger=0)

    def run(self, stop: Stop) -> None:
        """Serve until told to stop; then latch the rigs, and go on until the keeper has heard of it or had its time."""
        # Waiting on the library's own descriptors costs half of what its poller does. They tell of a change only once:
        # a socket is served until it has nothing, or asked again without waiting.
        with select.epoll() as poll, np.errstate(over="ignore", invalid="ignore"):
            poll.register(stop.fileno(), select.EPOLLIN)
            lanes: dict[int, Lane] = {
                int(self._action.getsockopt(zmq.FD)): (self._action, self._receive, self._reply_to, BURST),
                int(self._control.getsockopt(zmq.FD)): (
                    self._control,
                    self._control.recv_multipart,
                    self._carry_out,
                    1,
                ),
            }
            for descriptor in lanes:
                poll.register(descriptor, select.EPOLLIN)
            unfinished = set(lanes)
            while not (stop.stopped and self._is_wound_down()):
                for descriptor, _ in poll.poll(0.0 if unfinished else self._patience_s()):
                    if descriptor not in lanes:
                        poll.unregister(descriptor)
                    elif not self._serve(*lanes[descriptor]):
                        unfinished.add(descriptor)
                unfinished = {descriptor for descriptor in unfinished if not self._serve(*lanes[descriptor])}
                if (now_ns := self._clock.now_ns()) >= self._tick_ns:
                    self._tick(now_ns)

    def _is_wound_down(self) -> bool:
        now_ns = time.monotonic_ns()
        if self._leave_ns is None:
            heard = now_ns - self._control_room.heard_ns < LEAVE_NS
            self._control_room.latch_all()
            self._leave_ns = now_ns + LEAVE_NS if heard else now_ns
            self._tick_ns = self._clock.now_ns()
        return now_ns >= self._leave_ns or self._occurrences.is_empty

    def _patience_s(self) -> float:
        return max((self._tick_ns - self._clock.now_ns()) * 1e-9, 0.0)

    def _tick(self, now_ns: int) -> None:
        """Let the watchdogs look, and settle when they must look again.

        A query only puts a watchdog off, and one that begins to wait waits for its deadline: so none is due before
        the first of those that wait now, nor before the shortest deadline from now.
        """
        self._tick_ns = now_ns + IDLE_NS
        for driven in self._rigs.values():
            governor = driven.governor
            governor.tick(now_ns)
            due_ns = governor.due_ns()
            deadline_ns = now_ns + int(driven.rig.timing.deadline_s * 1e9)
            self._tick_ns = min(self._tick_ns, deadline_ns if due_ns is None else min(due_ns, deadline_ns))
        self._control_room.collect()
        gc.collect(1)  # the little that errors leave behind; the process has switched the automatic collection off

    def _serve(self, socket: Socket, receive: Receive, answer: Callable[[bytes], bytes], most: int) -> bool:
        """Answer at most so many requests; return whether there are no more."""
        for _ in range(most):
            try:
                parts = receive(zmq.NOBLOCK)
            except zmq.Again:
                return True
            head = 2 if len(parts) > 2 and not parts[1] else 1
            reply = answer(parts[head] if len(parts) == head + 1 else b"")
            try:
                for part in parts[:head]:
                    socket.send(part, SEND_MORE)
                socket.send(reply, zmq.NOBLOCK)
            except zmq.ZMQError:
                pass  # a peer that does not read its replies must not hold up the others
            while self._answered:
                driven, decision = self._answered.pop()
                driven.look_on(decision)
        return False

    def _answer(self, frame: bytes) -> bytes:
        seq: object = None
        try:
            query = queries.usual(frame)
            if query is not None:
                seq = query.seq
                return self._act(query)
            table = decode_map(frame, self._limits)
            seq = table.get("seq")
            message = from_map(table, ACTION_REQUESTS)
            if isinstance(message, Act):
                return self._act(queries.of(message))
            if not isinstance(message, Hello):
                raise WireError(f"{message.kind} is no request of this lane", code="wire.kind")
            welcome = self._driven(message.rig).hello(message)
            self._occurrences.note(message.rig, "session", {"session": message.session})
            return encode(welcome)
        except NearhandError as error:
            self.counters["action_errors"] += 1
            return encode(ErrorReply(code=error.code, message=error.message[:2000], seq=_count(seq)))
        except Exception as error:
            # A defect of ours must not silence the lane: the rig's link falls back on an error as on silence.
            self.counters["action_defects"] += 1
            text = f"an internal error: {type(error).__name__}"
            return encode(ErrorReply(code="error.internal", message=text, seq=_count(seq)))

    def _act(self, query: Query) -> bytes:
        driven = self._driven(query.rig)
        decision = driven.act(query)
        if driven.governor.happened:
            self._control_room.collect()
        if driven.shadow is not None:
            self._answered.append((driven, decision))
        reply = {
            "v": PROTOCOL_VERSION, "kind": "action", "seq": query.seq, "sent_ns": query.sent_ns,
            "action": decision.action.astype(WIRE_DTYPE, copy=False).tobytes(), "mode": decision.mode,
            "version": decision.version, "lease_s": driven.rig.timing.lease_s, "reasons": decision.reasons,
            "novelty": decision.novelty,
        }  # fmt: skip
        return bytes(self._packer.pack(reply))

    def _driven(self, rig: str) -> DrivenRig:
        if rig not in self._rigs:
            raise UnknownNameError(
                f"the service knows no rig {rig!r}; register it at the desk first", code="unknown.rig"
            )
        return self._rigs[rig]

    def _carry_out(self, frame: bytes) -> bytes:
        table: dict[str, Any] = {}
        try:
            table = decode_map(frame)
            self._tick_ns = 0  # a new rig may have a shorter deadline
            return encode(self._control_room.do(from_map(table, CONTROL_REQUESTS)))
        except NearhandError as error:
            self.counters["control_errors"] += 1
            return _control_error(error.code, error.message, table)
        except Exception as error:
            self.counters["control_defects"] += 1
            return _control_error("error.internal", f"an internal error: {error!r}", table)


def _count(value: object) -> int | None:
    """Return the value if it can be a message's count."""
    return value if type(value) is int and 0 <= value < 2**63 else None


def _control_error(code: str, message: str, table: dict[str, Any]) -> bytes:
    try:
        return encode(ErrorReply(code=code, message=message[:2000], request=table.get("request")))
    except ValidationError:
        return encode(ErrorReply(code=code, message=message[:2000]))
