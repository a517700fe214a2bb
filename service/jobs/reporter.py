"""How a job tells how far it is: lossy messages to the keeper, never waiting for it."""

from __future__ import annotations

import contextlib
import math
import time
from collections.abc import Mapping

import zmq

from nearhand.service.bus.codec import encode
from nearhand.service.bus.feed_messages import Progress
from nearhand.service.bus.sockets import BULK_QUEUE, connect, make_socket

MIN_INTERVAL_S = 0.1


class Reporter:
    """Sends progress to ``endpoint`` (empty: nowhere), at most ten times a second but always a stage's end.

    Use as a context manager; it closes its socket.
    """

    def __init__(self, job: int, endpoint: str) -> None:
        self._job = job
        self._last_s = 0.0
        self._stage = ""
        self._stage_start_s = time.monotonic()
        self._socket: zmq.Socket[bytes] | None = None
        if endpoint:
            self._socket = make_socket(zmq.Context.instance(), zmq.PUSH, queue=BULK_QUEUE, role="connect")
            connect(self._socket, endpoint)

    def __enter__(self) -> Reporter:
        return self

    def __exit__(self, *exc: object) -> None:
        if self._socket is not None:
            self._socket.close(linger=200)

    def report(
        self, stage: str, fraction: float, figures: Mapping[str, float] | None = None, message: str = ""
    ) -> None:
        """Tell that ``stage`` is ``fraction`` (0 to 1) done; non-finite figures are left out.

        The time left is that of the stage, from its mean pace so far.
        """
        now = time.monotonic()
        if stage != self._stage:
            self._stage, self._stage_start_s, self._last_s = stage, now, 0.0
        if now - self._last_s < MIN_INTERVAL_S and fraction < 1 and not message:
            return
        self._last_s = now
        eta_s = (now - self._stage_start_s) * (1 - fraction) / fraction if fraction > 0 else None
        finite = {name: float(value) for name, value in (figures or {}).items() if math.isfinite(value)}
        progress = Progress(
            job=self._job, stage=stage, fraction=min(max(float(fraction), 0.0), 1.0), eta_s=eta_s, figures=finite,
            message=message[:2000],
        )  # fmt: skip
        if self._socket is not None:
            with contextlib.suppress(zmq.Again):
                self._socket.send(encode(progress), flags=zmq.NOBLOCK)
