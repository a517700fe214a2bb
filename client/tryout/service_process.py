"""A service of one's own, as real processes, for the time of a tryout."""

from __future__ import annotations

import json
import os
import select
import signal
import subprocess
import sys
import time
from collections.abc import Mapping
from pathlib import Path

from nearhand.service.errors import LinkError

START_TIMEOUT_S = 30.0
STOP_TIMEOUT_S = 15.0


class ServiceProcess:
    """``nearhand serve`` on ports picked at run time, its log in the data folder; a context manager.

    Args:
        data: the data folder.
        options: further options of ``nearhand serve``.
        ports: port by lane; any free ones when left out.

    Attributes:
        lanes: address by lane.
        log: file with the service's log lines.
    """

    def __init__(self, data: Path, *options: str, ports: Mapping[str, int] | None = None) -> None:
        data.mkdir(parents=True, exist_ok=True)
        self.log = data / "service.log"
        self._stream = self.log.open("ab")
        where = [f"--{lane}-port={port}" for lane, port in ports.items()] if ports else ["--pick-ports"]
        words = [sys.executable, "-m", "nearhand.client.command", "serve", "--data", str(data), *where, "--json"]
        self._process = subprocess.Popen(
            [*words, *options], stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=self._stream
        )
        self.lanes = self._await_lanes()

    def _await_lanes(self) -> dict[str, str]:
        assert self._process.stdout is not None
        readable, _, _ = select.select([self._process.stdout], [], [], START_TIMEOUT_S)
        line = self._process.stdout.readline() if readable else b""
        if not line:
            self.stop()
            raise LinkError(f"the service did not start; its log: {self.log.read_text(encoding='utf-8')[-800:]}")
        lanes: dict[str, str] = json.loads(line)
        return lanes

    def __enter__(self) -> ServiceProcess:
        return self

    def __exit__(self, *exc: object) -> None:
        self.stop()

    @property
    def number(self) -> int:
        """The process number of the supervisor."""
        return self._process.pid

    def process_number(self, module: str) -> int:
        """Return the process number of the child that runs a module (Linux).

        Raises:
            LinkError: there is none at this moment.
        """
        own = self._process.pid
        children = Path(f"/proc/{own}/task/{own}/children").read_text(encoding="utf-8").split()
        for number in children:
            command = Path(f"/proc/{number}/cmdline").read_bytes().split(b"\0")
            if module.encode() in command:
                return int(number)
        raise LinkError(f"no child of the service runs {module}")

    def kill(self, module: str) -> int:
        """Kill a child of the service with SIGKILL and return the number that it had."""
        number = self.process_number(module)
        os.kill(number, signal.SIGKILL)
        return number

    def await_restart(self, module: str, before: int, *, timeout_s: float = 10.0) -> int:
        """Return the number of the process that took the place of ``before``.

        Raises:
            LinkError: none did in time.
        """
        end_s = time.monotonic() + timeout_s
        while time.monotonic() < end_s:
            try:
                number = self.process_number(module)
                if number != before:
                    return number
            except (LinkError, OSError):
                pass
            time.sleep(0.02)
        raise LinkError(f"{module} was not restarted within {timeout_s:g} s")

    def kill_whole(self) -> None:
        """Kill the supervisor, as nothing can be handled; its children end by themselves."""
        self._process.kill()
        self._process.wait()
        self.stop()

    def stop(self) -> None:
        """End the service and wait for it."""
        if self._process.poll() is None:
            self._process.terminate()
            try:
                self._process.wait(STOP_TIMEOUT_S)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait()
        if self._process.stdout is not None:
            self._process.stdout.close()
        self._stream.close()
