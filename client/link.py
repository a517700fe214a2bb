"""The rig's end of the action lane: one observation out, one action back, and a watchdog of its own.

Nothing here ever raises for a silent, late or wrong service, and nothing waits longer than the caller allows.

How both ends agree after a trip: when this end's lease runs out it latches and stays silent until the server's
deadline has passed too, counted from the latest moment at which what was sent before may arrive, so that the server
latches as well (or has been restarted, and is latched). It then asks again and follows the server's fallback; the
policy acts again only after an operator has re-armed the server, which cannot be done before the server has latched:
arming an armed rig changes nothing.

An operator can take the rig over at any moment. From then on the link does what the operator wants, within the same
magnitude, slew and braking limits, and waits for nobody; the server goes on seeing what happens. That ends the
policy's permission: after the operator has handed back, the server's fallback acts until someone has re-armed. Whoever
wants the policy to follow on without a stop re-arms before handing back.

The clock should never be set; if it is set back all the same, leases end at once.

A program that stops calling ``exchange`` cannot be helped from here: the server's deadline catches it, and the drive
must stop when its commands cease.
"""

from __future__ import annotations

import secrets
import time
from dataclasses import dataclass
from typing import Literal

import numpy as np
import zmq
from numpy.typing import NDArray

from nearhand.service.bus.action_messages import ACTION_REPLIES, Action, Hello, Mode, Reason, Welcome
from nearhand.service.bus.arrays import pack, unpack
from nearhand.service.bus.codec import decode, encode
from nearhand.service.bus.keys import ClientKey, key_from_environment
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.bus.queries import pack_query
from nearhand.service.bus.sockets import ACTION_QUEUE, connect, make_socket
from nearhand.service.clock import Clock, MonotonicClock
from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.chain import Limited, limit
from nearhand.service.envelope.fallback import FallbackAction
from nearhand.service.envelope.limits import Float32, Limits
from nearhand.service.errors import WireError
from nearhand.service.rigs import Rig

HELLO_EVERY_S = 0.05
#: Most messages looked at while waiting for one reply; a service that floods the link counts as silent.
MOST_MESSAGES = 64


@dataclass(frozen=True, slots=True)
class Drive:
    """What the rig must do for the next control period.

    Attributes:
        action: (m,) float32, finite, within limits and (but for a ``rest`` fallback) within slew.
        mode: ``armed`` while the policy acts; ``latched`` or ``empty`` while a fallback does; ``taken`` while the
            operator does.
        version: the version that acts, 0 for none.
        reasons: see :class:`Reason`; LINK when the service gave nothing usable in time.
        novelty: conformal p-value of the observation, 1 when none came.
        fresh: the action answers this very observation.
        round_trip_s: from sending to receiving; 0 when nothing came.
    """

    action: Float32
    mode: Mode | Literal["taken"]
    version: int
    reasons: int
    novelty: float
    fresh: bool
    round_trip_s: float


class RigLink:
    """The link of one rig; belongs to the thread that made it; close it when done.

    Args:
        rig: the rig's description, for its limits, timing and fallback.
        address: of the action lane.
        clock: the rig's monotonic clock.
        wait_s: how long ``exchange`` waits for the reply; one control period by default.
        key: a key that may drive, where the service has keys; by default the one that ``NEARHAND_KEY`` names.

    Raises:
        ConfigError: the key cannot be used.
        LinkError: the address is malformed.
    """

    def __init__(
        self,
        rig: Rig,
        address: str,
        *,
        clock: Clock | None = None,
        wait_s: float | None = None,
        key: ClientKey | None = None,
    ) -> None:
        self._rig = rig
        self._clock = clock or MonotonicClock()
        self._wait_s = rig.timing.period_s if wait_s is None else wait_s
        self._limits = Limits.of(rig)
        self._guards = Guards(self._limits)
        self._fallback = FallbackAction(self._limits)
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._socket = make_socket(self._context, zmq.DEALER, queue=ACTION_QUEUE, role="connect")
        connect(self._socket, address, key or key_from_environment())
        self._session = secrets.token_hex(8)
        self._welcome = False
        self._replaced = False
        self._hello_at_ns = 0
        self._seq = 0
        self._last_ns = 0
        self._held = self._limits.rest.copy()
        self._held_until_ns: int | None = None
        self._version = 0
        self._latched = False
        self._silent_until_ns = 0
        self._standing = Reason.NONE
        self._taken = False
        self._last_reply: Action | None = None

    @property
    def taken(self) -> bool:
        """Whether the operator drives."""
        return self._taken

    def take_over(self) -> None:
        """Let the operator drive, from the next exchange on; the policy's lease ends."""
        self._taken = True
        self._held_until_ns = None
        self._fallback.end()

    def hand_back(self) -> None:
        """End the take-over: from the next exchange on the server is followed again, whatever its mode is then."""
        self._taken, self._latched = False, False
        self._fallback.end()
        if not self._welcome:
            # A server that was silent meanwhile must have latched before it is asked again.
            self._silent_until_ns = max(self._silent_until_ns, self._clock.now_ns() + self._silence_ns())

    def close(self) -> None:
        """Close the socket; the server will notice the silence."""
        self._socket.close(linger=0)
        self._context.term()

    def __enter__(self) -> RigLink:
        return self

    def __exit__(self, *exc: object) -> None:
        self.close()

    def exchange(self, observation: NDArray[np.floating], operator: NDArray[np.floating] | None = None) -> Drive:
        """Send an observation (n,) in the rig's units and return what to do for the next control period.

        An observation of the wrong size, or one that is no vector of numbers, goes out as NaN: the server trips on it.

        Args:
            operator: (m,) what the operator wants, looked at only while the operator drives. What is missing, of the
                wrong size or not finite then counts as no hand on the lever: the fallback acts.
        """
        begin_ns = self._clock.now_ns()
        if begin_ns < self._last_ns:
            self._forget_times(begin_ns)
        self._last_ns = begin_ns
        seen = self._vector(observation)
        usable = bool(np.isfinite(seen).all())
        if usable:
            self._fallback.see(seen, begin_ns)
        self._guards.note(self._held)
        if self._taken:
            return self._operated(seen if usable else None, seen, operator, begin_ns)
        reply = None
        if begin_ns >= self._silent_until_ns and not self._replaced:
            reply = self._ask(seen, begin_ns)
        now_ns = self._clock.now_ns()
        if reply is not None:
            told = self._usable_action(reply)
            if told is not None:
                return self._follow(reply, told, seen if usable else None, (now_ns - begin_ns) * 1e-9, now_ns)
        return self._alone(now_ns)

    def _operated(
        self, observation: Float32 | None, seen: Float32, operator: NDArray[np.floating] | None, now_ns: int
    ) -> Drive:
        """Do what the operator wants, within limits, and let the server see it without waiting for its reply."""
        self._listen()
        before = self._held
        wanted = None if operator is None else self._vector(operator, len(self._rig.actions))
        if wanted is not None and np.isfinite(wanted).all():
            limited = limit(self._limits, wanted, before, observation, self._guards)
            self._fallback.end()
            self._held, flags = limited.action, Reason.TAKEN | _changes(limited)
        else:
            self._held = self._fallback.act(before, now_ns)
            flags = Reason.TAKEN | Reason.FORM
        if now_ns >= self._silent_until_ns and not self._replaced:
            if self._welcome:
                self._query(seen, before, now_ns)
            else:
                self._greet(now_ns)
        reply = self._last_reply
        novelty, version = (1.0, 0) if reply is None else (reply.novelty, reply.version)
        return Drive(self._held, "taken", version, int(flags), novelty, False, 0.0)

    def _listen(self) -> None:
        """Take in what has come, without waiting; a server that no longer knows the session is greeted again."""
        for _ in range(MOST_MESSAGES):
            answer = self._receive(0.0)
            if answer is None:
                return
            if isinstance(answer, Welcome) and answer.session == self._session:
                self._welcome = True
            elif isinstance(answer, Action):
                self._last_reply = answer
            elif isinstance(answer, ErrorReply):
                self._refused(answer)

    def _vector(self, observation: NDArray[np.floating], size: int = -1) -> Float32:
        size = len(self._rig.observations) if size < 0 else size
        try:
            with np.errstate(over="ignore", invalid="ignore"):
                seen = np.asarray(observation, dtype=np.float32)
        except (TypeError, ValueError, OverflowError):
            seen = np.empty(0, dtype=np.float32)
        return seen if seen.shape == (size,) else np.full(size, np.nan, dtype=np.float32)

    def _usable_action(self, reply: Action) -> Float32 | None:
        try:
            told = unpack(reply.action, len(self._rig.actions), what="action")
        except WireError:
            return None
        return told if np.isfinite(told).all() else None

    def _ask(self, observation: Float32, begin_ns: int) -> Action | None:
        """Send the query and wait for just its reply; keep the session open on the way."""
        give_up_s = time.monotonic() + self._wait_s
        if not self._welcome and not self._say_hello(begin_ns, give_up_s):
            return None
        if not self._query(observation, self._held, begin_ns):
            return None
        for _ in range(MOST_MESSAGES):
            answer = self._receive(give_up_s)
            if isinstance(answer, Action) and answer.seq == self._seq:
                return answer
            if isinstance(answer, ErrorReply) and answer.seq == self._seq:
                self._refused(answer)
                return None
            if answer is None:
                return None
        return None

    def _query(self, observation: Float32, applied: Float32, begin_ns: int) -> bool:
        """Send one query; tell whether it left."""
        self._seq += 1
        return self._send(
            pack_query(
                self._rig.name, self._session, self._seq, begin_ns, pack(observation), pack(applied),
                by_operator=self._taken,
            )
        )  # fmt: skip

    def _refused(self, answer: ErrorReply) -> None:
        """Draw the consequences of the server's refusal."""
        if answer.code.startswith(("unknown.", "conflict.")):
            self._welcome, self._hello_at_ns = False, 0
        self._replaced = answer.code == "conflict.session"

    def _greet(self, begin_ns: int) -> None:
        """Say hello, but not too often."""
        if begin_ns < self._hello_at_ns:
            return
        self._hello_at_ns = begin_ns + round(HELLO_EVERY_S * 1e9)
        self._send(
            encode(
                Hello(
                    rig=self._rig.name,
                    session=self._session,
                    observations=tuple(channel.name for channel in self._rig.observations),
                    actions=tuple(channel.name for channel in self._rig.actions),
                    period_s=self._rig.timing.period_s,
                )
            )
        )

    def _say_hello(self, begin_ns: int, give_up_s: float) -> bool:
        self._greet(begin_ns)
        for _ in range(MOST_MESSAGES):
            answer = self._receive(give_up_s)
            if isinstance(answer, Welcome) and answer.session == self._session:
                self._welcome = True
            if self._welcome or answer is None:
                break
        return self._welcome

    def _send(self, frame: bytes) -> bool:
        try:
            # Asking whether there is room also makes the library notice room that it has not heard of yet.
            if not self._socket.poll(0, zmq.POLLOUT):
                return False
            self._socket.send(frame, flags=zmq.NOBLOCK)
        except zmq.ZMQError:
            return False
        return True

    def _receive(self, give_up_s: float) -> Message | None:
        """Return the next well-formed message, or None when the time is up or nothing but garbage comes."""
        for _ in range(MOST_MESSAGES):
            left_ms = (give_up_s - time.monotonic()) * 1e3
            try:
                if not self._socket.poll(max(0, round(left_ms))):
                    return None
                return decode(self._socket.recv(flags=zmq.NOBLOCK), ACTION_REPLIES)
            except WireError:
                continue
            except zmq.ZMQError:
                return None
        return None

    def _follow(
        self, reply: Action, told: Float32, observation: Float32 | None, round_trip_s: float, now_ns: int
    ) -> Drive:
        """Do what the server says, after looking at it once more with the same envelope.

        Only the server's ``rest`` fallback may jump: a rig that declares it wants rest at once.
        """
        flags = Reason(reply.reasons)
        if reply.mode != "armed" and self._limits.at_once:
            action = np.minimum(np.maximum(told, self._limits.low), self._limits.high)
        else:
            guards = self._guards if reply.mode == "armed" else None
            limited = limit(self._limits, told, self._held, observation, guards)
            action = limited.action
            flags |= _changes(limited)
        self._latched = False
        self._fallback.end()
        self._held = action
        self._version = reply.version
        self._held_until_ns = now_ns + round(self._rig.timing.lease_s * 1e9)
        self._standing = Reason(reply.reasons) if reply.mode != "armed" else Reason.NONE
        return Drive(action, reply.mode, reply.version, int(flags), reply.novelty, True, round_trip_s)

    def _alone(self, now_ns: int) -> Drive:
        """Hold the last action for the rest of its lease, then fall back and latch."""
        if not self._latched and self._held_until_ns is not None and now_ns < self._held_until_ns:
            mode: Mode = "latched" if self._standing else "armed"
            return Drive(self._held, mode, self._version, int(self._standing | Reason.LINK), 1.0, False, 0.0)
        if not self._latched:
            self._latched = True
            self._welcome = False
            self._session = secrets.token_hex(8)
            if self._held_until_ns is not None:
                self._silent_until_ns = now_ns + self._silence_ns()
            self._held_until_ns = None
        self._held = self._fallback.act(self._held, now_ns)
        reasons = Reason.LINK | Reason.LATCHED | self._standing
        return Drive(self._held, "latched", 0, int(reasons), 1.0, False, 0.0)

    def _forget_times(self, now_ns: int) -> None:
        """The clock has been set back: nothing that was to end at an earlier time may last longer for it."""
        if self._held_until_ns is not None:
            self._held_until_ns = now_ns
        self._silent_until_ns = min(self._silent_until_ns, now_ns + self._silence_ns())
        self._hello_at_ns = 0

    def _silence_ns(self) -> int:
        """Return how long the server must hear nothing to be surely latched."""
        # What was sent before may still arrive, late by up to a deadline (later, the server latches for that); only
        # from then on does the server hear nothing, and counts its own deadline.
        return round(2 * (self._rig.timing.deadline_s + self._rig.timing.period_s) * 1e9)


def _changes(limited: Limited) -> Reason:
    """Return what the limits changed."""
    flags = Reason.CLIPPED if limited.clipped else Reason.NONE
    flags |= Reason.SLEWED if limited.slewed else Reason.NONE
    flags |= Reason.BRAKED if limited.braked else Reason.NONE
    return flags | (Reason.ZONED if limited.zoned else Reason.NONE)
