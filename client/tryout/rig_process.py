"""A rig in a process of its own, simulated; it tells what it does in JSON lines."""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
from collections.abc import Iterator, Sequence
from typing import Any

from nearhand.service.errors import LinkError

STOP_TIMEOUT_S = 10.0


class RigProcess:
    """Runs ``nearhand.sim.rig_process`` with arguments; a context manager that ends it.

    The client names the module and never imports it: a real rig would stand in its place.
    """

    def __init__(self, arguments: Sequence[str]) -> None:
        self._errors = tempfile.TemporaryFile()  # noqa: SIM115
        self._process = subprocess.Popen(
            [sys.executable, "-m", "nearhand.sim.rig_process", *arguments],
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=self._errors,
        )

    def __enter__(self) -> RigProcess:
        return self

    def __exit__(self, *exc: object) -> None:
        self.stop()

    def lines(self) -> Iterator[dict[str, Any]]:
        """Yield what the process prints, until it ends.

        Raises:
            LinkError: it ended with an error; the message is its own last line.
        """
        assert self._process.stdout is not None
        for line in self._process.stdout:
            yield json.loads(line)
        if self._process.wait() != 0:
            self._errors.seek(0)
            last = self._errors.read().decode(errors="replace").strip().splitlines() or ["it said nothing"]
            raise LinkError(f"the rig process failed: {last[-1]}")

    def stop(self) -> None:
        """End the process if it still runs."""
        if self._process.poll() is None:
            self._process.terminate()
            try:
                self._process.wait(STOP_TIMEOUT_S)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait()
        if self._process.stdout is not None:
            self._process.stdout.close()
        self._errors.close()
