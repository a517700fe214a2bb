"""Start a job, follow it with a progress bar, come back with its result."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

from nearhand.client.desk import Desk
from nearhand.service.bus.desk_messages import CancelJob, GetJob, JobReply, StartJob
from nearhand.service.errors import LearningError, LinkError, NearhandError, error_from_code

POLL_S = 0.2
#: How long the desk may be away (a keeper that restarts) before following gives up.
PATIENCE_S = 30.0

Show = Callable[[JobReply], None]


def start_job(desk: Desk, kind: str, rig: str, who: str, options: dict[str, Any], *, why: str = "") -> int:
    """Queue a job and return its number."""
    return desk.ask(StartJob, JobReply, job_kind=kind, rig=rig, who=who, why=why, options=options).job


def cancel_job(desk: Desk, job: int, who: str, *, why: str = "") -> JobReply:
    """Cancel a job."""
    return desk.ask(CancelJob, JobReply, job=job, who=who, why=why)


def wait_job(desk: Desk, job: int, *, show: Show | None = None) -> JobReply:
    """Follow a job to its end and return its last state.

    Raises:
        NearhandError: the job failed (its own error) or was cancelled.
        LinkError: the service stayed away.
    """
    last_seen_s = time.monotonic()
    while True:
        try:
            state = desk.ask(GetJob, JobReply, job=job)
            last_seen_s = time.monotonic()
        except LinkError:
            if time.monotonic() - last_seen_s > PATIENCE_S:
                raise
            continue
        if show is not None:
            show(state)
        if state.state == "done":
            return state
        if state.state == "failed":
            raise job_error(state)
        if state.state == "cancelled":
            raise LearningError(f"job {job} was cancelled", code="learn.cancelled")
        time.sleep(POLL_S)


def job_error(state: JobReply) -> NearhandError:
    """Return the error that ended a failed job."""
    result = state.result or {}
    code = str(result.get("code", "learn.failed"))
    return error_from_code(code, f"job {state.job} ({state.job_kind}) failed: {result.get('message') or state.message}")


class JobBar:
    """A progress bar with the time left and the job's own figures, on standard error.

    Use as a context manager; ``show`` fits :func:`wait_job`.
    """

    def __init__(self, title: str, *, quiet: bool = False) -> None:
        self._title = title
        self._quiet = quiet
        self._stage = ""

    def __enter__(self) -> JobBar:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

        self._progress = Progress(
            TextColumn("{task.description}", markup=False),
            BarColumn(bar_width=24),
            TextColumn("{task.percentage:>3.0f} %"),
            TimeElapsedColumn(),
            TextColumn("{task.fields[left]}", markup=False),
            TextColumn("{task.fields[figures]}", markup=False, style="dim"),
            console=Console(stderr=True),
            disable=self._quiet,
        )
        self._task = self._progress.add_task(self._title, total=1.0, left="", figures="")
        self._progress.start()
        return self

    def __exit__(self, *exc: object) -> None:
        self._progress.stop()

    def show(self, state: JobReply) -> None:
        """Draw the job's present state; a finished stage stays on screen."""
        if state.stage and state.stage != self._stage:
            if self._stage:
                self._progress.update(self._task, completed=1.0, left="", figures="")
                self._task = self._progress.add_task(self._title, total=1.0, left="", figures="")
            self._stage = state.stage
        left = f"{state.eta_s:.0f} s left" if state.eta_s is not None and state.state == "running" else ""
        figures = "  ".join(f"{name} {value:.3g}" for name, value in list(state.figures.items())[:4])
        self._progress.update(
            self._task,
            description=f"{self._title}: {state.stage or state.state}",
            completed=1.0 if state.state == "done" else state.fraction,
            left=left,
            figures=figures,
        )
