"""An operator who re-arms after each trip, from a thread of their own, and tells the oracle before doing so."""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import Self

from nearhand.client.desk import Desk
from nearhand.service.bus.desk_messages import Rearm, RigStateReply
from nearhand.service.errors import NearhandError


class Operator:
    """Re-arms a rig when asked to; a context manager.

    Args:
        address: the desk lane.
        rig: its name.
        permit: called right before each request to re-arm.
    """

    def __init__(self, address: str, rig: str, permit: Callable[[], None]) -> None:
        self._address = address
        self._rig = rig
        self._permit = permit
        self._wanted = threading.Event()
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._run, name="operator", daemon=True)

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(self, *exc: object) -> None:
        self._stopping.set()
        self._wanted.set()
        self._thread.join()

    def rearm(self) -> None:
        """Ask to re-arm, without waiting for it."""
        self._wanted.set()

    def _run(self) -> None:
        with Desk(self._address, timeout_s=2.0) as desk:
            while True:
                self._wanted.wait()
                if self._stopping.is_set():
                    return
                self._wanted.clear()
                self._permit()
                try:
                    desk.ask(Rearm, RigStateReply, rig=self._rig, who="operator", why="fault campaign")
                except NearhandError:
                    continue  # a fault may be at work on the desk: whoever drives will ask again
