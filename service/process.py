"""What each of the service's processes does at its start: die with its parent, wake on signals, say it is ready."""

from __future__ import annotations

import contextlib
import ctypes
import os
import signal
import sys
from types import FrameType

PR_SET_PDEATHSIG = 1


def die_with_parent(parent: int) -> None:
    """Ask the kernel for SIGTERM when the parent dies (Linux); leave at once if it is dead already.

    Args:
        parent: process number of the parent, as the parent knows it.
    """
    if sys.platform == "linux":
        ctypes.CDLL(None, use_errno=True).prctl(PR_SET_PDEATHSIG, signal.SIGTERM, 0, 0, 0)
    if os.getppid() != parent:
        raise SystemExit(0)


class StopSignal:
    """SIGTERM and SIGINT as a flag and as a readable file descriptor that wakes a poller at once."""

    def __init__(self) -> None:
        self.stopped = False
        self.fileno_read, self._write = os.pipe()
        os.set_blocking(self._write, False)
        os.set_blocking(self.fileno_read, False)
        signal.set_wakeup_fd(self._write)
        for number in (signal.SIGTERM, signal.SIGINT):
            signal.signal(number, self._stop)

    def _stop(self, number: int, frame: FrameType | None) -> None:
        self.stopped = True

    def fileno(self) -> int:
        """Return the descriptor to poll."""
        return self.fileno_read


def announce_ready(descriptor: int) -> None:
    """Tell the parent, over an inherited pipe, that all sockets are bound; a negative descriptor means nobody asks."""
    if descriptor >= 0:
        with contextlib.suppress(OSError):
            os.write(descriptor, b"ready\n")
            os.close(descriptor)
