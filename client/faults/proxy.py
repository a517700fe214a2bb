"""A troublemaker on the wire between rig and action server: it delays, drops, repeats, reorders and damages frames."""

from __future__ import annotations

import heapq
import random
import threading
import time
from collections import deque
from collections.abc import Callable
from itertools import count
from typing import Self

import zmq

from nearhand.service.bus.sockets import BULK_QUEUE, make_socket

#: What becomes of a frame: after how many seconds it goes on, and as what; several or none.
Fate = list[tuple[float, bytes]]
Mischief = Callable[[bytes], Fate]
POLL_MS = 1
#: Frames of the past that may come again.
REMEMBERED = 200


def pass_on(frame: bytes) -> Fate:
    """Do no mischief."""
    return [(0.0, frame)]


class Proxy:
    """Stands between one rig and the action server; a context manager with a thread of its own.

    Args:
        server: address of the action lane.

    Attributes:
        address: where the rig connects.
        mischief: what is done to each frame, in both directions; may be changed at any moment.
        touched: frames that did not pass as they came.
        past: the latest frames that came from the server.
    """

    def __init__(self, server: str) -> None:
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._front = make_socket(self._context, zmq.ROUTER, queue=BULK_QUEUE, role="bind")
        self._back = make_socket(self._context, zmq.DEALER, queue=BULK_QUEUE, role="connect")
        port = self._front.bind_to_random_port("tcp://127.0.0.1")
        self._back.connect(server)
        self.address = f"tcp://127.0.0.1:{port}"
        self.mischief: Mischief = pass_on
        self.touched = 0
        self.past: deque[bytes] = deque(maxlen=REMEMBERED)
        self._rig = b""
        self._waiting: list[tuple[float, int, bool, bytes]] = []
        self._order = count()
        self._stopping, self._cutting = threading.Event(), threading.Event()
        self._thread = threading.Thread(target=self._run, name="proxy", daemon=True)

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(self, *exc: object) -> None:
        self._stopping.set()
        self._thread.join()
        self._front.close(linger=0)
        self._back.close(linger=0)
        self._context.term()

    def cut(self) -> None:
        """Close the rig's side for good: the connection is refused from then on."""
        self._cutting.set()

    def _run(self) -> None:
        poller = zmq.Poller()
        poller.register(self._front, zmq.POLLIN)
        poller.register(self._back, zmq.POLLIN)
        while not self._stopping.is_set():
            if self._cutting.is_set():
                self._front.close(linger=0)
                return
            for socket, _ in poller.poll(POLL_MS):
                parts = socket.recv_multipart()
                upward = socket is self._front
                if upward:
                    self._rig = parts[0]
                else:
                    self.past.append(parts[-1])
                self._take(upward, parts[-1])
            now_s = time.monotonic()
            while self._waiting and self._waiting[0][0] <= now_s:
                _, _, upward, frame = heapq.heappop(self._waiting)
                try:
                    if upward:
                        self._back.send(frame, zmq.NOBLOCK)
                    elif self._rig:
                        self._front.send_multipart([self._rig, frame], zmq.NOBLOCK)
                except zmq.ZMQError:
                    continue  # nobody there: as good as dropped

    def _take(self, upward: bool, frame: bytes) -> None:
        fate = self.mischief(frame)
        self.touched += fate != [(0.0, frame)]
        now_s = time.monotonic()
        for delay_s, one in fate:
            heapq.heappush(self._waiting, (now_s + delay_s, next(self._order), upward, one))


def slow(generator: random.Random, longest_s: float) -> Mischief:
    """Delay each frame by up to ``longest_s``; those that overtake each other are in another order then."""
    return lambda frame: [(generator.uniform(0.0, longest_s), frame)]


def drop(generator: random.Random, share: float) -> Mischief:
    """Lose a share of the frames."""
    return lambda frame: [] if generator.random() < share else [(0.0, frame)]


def duplicate(generator: random.Random) -> Mischief:
    """Send each frame up to four times, some of them late."""
    return lambda frame: [(0.0, frame), *((generator.uniform(0.0, 0.1), frame) for _ in range(generator.randrange(4)))]


def reorder() -> Mischief:
    """Hold every other frame back until the one after it has passed."""
    held: list[bytes] = []

    def fate(frame: bytes) -> Fate:
        if held:
            return [(0.0, frame), (0.0, held.pop())]
        held.append(frame)
        return []

    return fate


def corrupt(generator: random.Random) -> Mischief:
    """Damage half of the frames: flipped bits, a part cut off, or noise."""

    def fate(frame: bytes) -> Fate:
        kind = generator.randrange(6)
        if kind > 2 or not frame:
            return [(0.0, frame)]
        damaged = bytearray(frame)
        if kind == 0:
            for _ in range(generator.randrange(1, 6)):
                damaged[generator.randrange(len(damaged))] ^= 1 << generator.randrange(8)
        elif kind == 1:
            del damaged[generator.randrange(len(damaged)) :]
        else:
            damaged = bytearray(generator.randbytes(len(frame)))
        return [(0.0, bytes(damaged))]

    return fate


def stale(generator: random.Random, past: deque[bytes]) -> Mischief:
    """Put frames of the past among the present ones."""

    def fate(frame: bytes) -> Fate:
        old = [(0.0, generator.choice(past)) for _ in range(generator.randrange(3)) if past]
        return [*old, (0.0, frame)]

    return fate
