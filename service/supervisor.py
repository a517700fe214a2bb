"""The supervisor: starts the action server and the keeper, restarts the one that dies, stops both.

It holds no data and serves nobody, so that nothing but the operating system can take it down with a request.
"""

from __future__ import annotations

import contextlib
import os
import select
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Collection
from dataclasses import dataclass, field
from pathlib import Path

from nearhand.service.errors import StoreError
from nearhand.service.process import StopSignal

READY_TIMEOUT_S = 20.0
STOP_TIMEOUT_S = 5.0
FIRST_PAUSE_S = 0.1
LONGEST_PAUSE_S = 5.0
STEADY_S = 10.0

#: NumPy's own threads would fight the control loop for the cores.
THREAD_CAPS = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")


@dataclass
class Child:
    """One supervised process.

    Attributes:
        name: what it is called in logs.
        module: the module it runs.
        restarts: how often it had to be started again.
    """

    name: str
    module: str
    process: subprocess.Popen[bytes] | None = None
    pidfd: int = -1
    started_s: float = 0.0
    pause_s: float = FIRST_PAUSE_S
    restart_at_s: float = 0.0
    restarts: int = field(default=0)


class Supervisor:
    """Runs the service's processes until told to stop.

    Args:
        settings_file: what each process reads at its start.
        log: receives one line per start, end and restart.
        inherited: descriptors that each process keeps open: the lock then lasts as long as any of them.
    """

    def __init__(self, settings_file: Path, *, log: Callable[[str], None], inherited: Collection[int] = ()) -> None:
        self._settings_file = settings_file
        self._log = log
        self._inherited = tuple(inherited)
        self.children = [
            Child("action-server", "nearhand.service.action.process"),
            Child("keeper", "nearhand.service.keeper.process"),
        ]

    def start(self) -> None:
        """Start all processes and wait until each has bound its sockets.

        Raises:
            StoreError: one ended or stayed silent instead of becoming ready; the others are stopped again.
        """
        try:
            for child in self.children:
                self._await_ready(child, self._spawn(child))
        except BaseException:
            self.stop()
            raise

    def run(self, stop: StopSignal) -> None:
        """Restart whatever ends, until the stop signal; then stop all."""
        try:
            while not stop.stopped:
                self._wait(stop)
                for child in self.children:
                    if not stop.stopped:
                        self._look_after(child)
        finally:
            self.stop()

    def stop(self) -> None:
        """Ask the processes to end, one after the other, and kill what does not within a few seconds.

        The action server goes first: it latches its rigs, and the keeper is there to record it.
        """
        for child in self.children:
            if child.process is None:
                continue
            child.process.terminate()
            try:
                child.process.wait(STOP_TIMEOUT_S)
            except subprocess.TimeoutExpired:
                self._log(f"killed process={child.name} cause='it did not end within {STOP_TIMEOUT_S:g} s'")
                child.process.kill()
                child.process.wait()
            self._close(child)
            child.process = None

    def _spawn(self, child: Child) -> int:
        ready_read, ready_write = os.pipe()
        child.process = subprocess.Popen(
            [
                sys.executable, "-m", child.module,
                "--settings", str(self._settings_file),
                "--ready-fd", str(ready_write),
                "--parent", str(os.getpid()),
            ],
            pass_fds=[ready_write, *self._inherited],
            stdin=subprocess.DEVNULL,
            env={**os.environ, **THREAD_CAPS},
            # Ctrl-C goes to the supervisor alone, which ends them in order.
            process_group=0,
        )  # fmt: skip
        os.close(ready_write)
        child.pidfd = os.pidfd_open(child.process.pid)
        child.started_s = time.monotonic()
        self._log(f"started process={child.name} pid={child.process.pid} restarts={child.restarts}")
        return ready_read

    def _await_ready(self, child: Child, ready_read: int) -> None:
        try:
            readable, _, _ = select.select([ready_read], [], [], READY_TIMEOUT_S)
            if not readable or not os.read(ready_read, 16):
                raise StoreError(
                    f"the {child.name} did not start; its own message stands above. "
                    "Is another service using this data folder or these ports?",
                    code="store.start",
                )
        finally:
            os.close(ready_read)

    def _wait(self, stop: StopSignal) -> None:
        poller = select.poll()
        poller.register(stop.fileno(), select.POLLIN)
        pause_s = 60.0
        for child in self.children:
            if child.process is not None:
                poller.register(child.pidfd, select.POLLIN)
            else:
                pause_s = min(pause_s, max(0.0, child.restart_at_s - time.monotonic()))
        poller.poll(pause_s * 1000)

    def _look_after(self, child: Child) -> None:
        now_s = time.monotonic()
        if child.process is not None:
            status = child.process.poll()
            if status is None:
                return
            self._close(child)
            child.process = None
            steady = now_s - child.started_s > STEADY_S
            child.pause_s = FIRST_PAUSE_S if steady else min(2 * child.pause_s, LONGEST_PAUSE_S)
            child.restart_at_s = now_s + (0.0 if steady or child.restarts == 0 else child.pause_s)
            cause = signal.Signals(-status).name if status < 0 else f"exit status {status}"
            self._log(f"ended process={child.name} cause={cause!r}")
        if child.process is None and now_s >= child.restart_at_s:
            child.restarts += 1
            ready_read = self._spawn(child)
            os.close(ready_read)

    @staticmethod
    def _close(child: Child) -> None:
        if child.pidfd >= 0:
            with contextlib.suppress(OSError):
                os.close(child.pidfd)
            child.pidfd = -1
