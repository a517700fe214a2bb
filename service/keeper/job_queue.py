"""Jobs: one at a time, each in a process and a folder of its own, taken up again after a restart."""

from __future__ import annotations

import contextlib
import os
import signal
import subprocess
import sys
import time
from dataclasses import dataclass

import zmq

from nearhand.service.bus.codec import decode
from nearhand.service.bus.feed_messages import FEED_MESSAGES, Progress
from nearhand.service.bus.sockets import BULK_QUEUE, bind, make_socket
from nearhand.service.config import ServiceSettings
from nearhand.service.errors import ConflictError, NearhandError, WireError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.keeper.job_files import drop_folder, end_failed, last_words, take_or_fail, write_job
from nearhand.service.keeper.ledger import Ledger, log_line
from nearhand.service.store.jobs import JobRow

GRACE_S = 5.0
STOP_GRACE_S = 2.5
#: A job computes beside the control loop: one thread, and (set by the job itself) a low priority.
THREAD_CAPS = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")


@dataclass
class Running:
    """The job that runs; ``kill_at_s`` is set once it was asked to end."""

    job: JobRow
    folder: JobFolder
    process: subprocess.Popen[bytes]
    pidfd: int
    kill_at_s: float | None = None


class JobQueue:
    """Runs the store's jobs.

    Args:
        ledger: the store.
        settings: where the folders are and where progress arrives.
        poller: learns of the running process, so that its end wakes the caller.
    """

    def __init__(
        self, ledger: Ledger, settings: ServiceSettings, context: zmq.Context[zmq.Socket[bytes]], poller: zmq.Poller
    ) -> None:
        self._ledger = ledger
        self._settings = settings
        self._poller = poller
        self.socket = make_socket(context, zmq.PULL, queue=BULK_QUEUE, role="bind")
        bind(self.socket, settings.progress)
        self.progress: dict[int, Progress] = {}
        self._running: Running | None = None
        self._waiting = True
        self._resumed = False

    def folder(self, job: int) -> JobFolder:
        """Return a job's folder."""
        return JobFolder(self._settings.jobs / f"job-{job:06d}")

    def submitted(self) -> None:
        """Note that the store holds a new job."""
        self._waiting = True

    def cancel(self, job: JobRow, who: str, why: str) -> JobRow:
        """Cancel a job; one that runs is asked to end and killed if it does not.

        Raises:
            ConflictError: it has ended already.
        """
        if job.state not in ("queued", "running"):
            raise ConflictError(f"job {job.job} has ended already: {job.state}", code="conflict.job_ended")
        with self._ledger.transaction():
            row = self._ledger.store.jobs.end(job.job, "cancelled", message=f"cancelled by {who}")
            self._ledger.record("job-cancelled", rig=job.rig, who=who, why=why, detail={"job": job.job})
        if self._running is not None and self._running.job.job == job.job:
            self._ask_to_end(self._running, GRACE_S)
        return row

    def turn(self) -> None:
        """Take in progress, look after the running job, start the next one.

        Raises:
            StoreError: the store cannot take a result at present; the next turn tries again.
        """
        if not self._resumed:
            self._resume()
            self._resumed = True
        self._take_progress()
        if self._running is not None:
            self._look_after(self._running)
        while self._running is None and self._waiting:
            queued = self._ledger.store.jobs.in_state("queued")
            if not queued:
                self._waiting = False
                return
            self._start(queued[0])

    def pause_s(self) -> float:
        """Return how long the caller may sleep before ``turn`` is due."""
        if self._running is not None and self._running.kill_at_s is not None:
            return max(0.0, self._running.kill_at_s - time.monotonic())
        return 0.0 if self._running is None and self._waiting else 60.0

    def stop(self) -> None:
        """End the running job's process; the job itself goes on at the next start."""
        if self._running is not None:
            running = self._running
            self._ask_to_end(running, STOP_GRACE_S)
            try:
                running.process.wait(STOP_GRACE_S)
            except subprocess.TimeoutExpired:
                running.process.kill()
                running.process.wait()
            self._forget(running)
        self.socket.close(linger=0)

    def _resume(self) -> None:
        """Take up, or finish, what ran when the keeper ended."""
        for job in self._ledger.store.jobs.in_state("cancelled"):
            drop_folder(self.folder(job.job))
        for job in self._ledger.store.jobs.in_state("running"):
            if self.folder(job.job).has("result.json"):
                take_or_fail(self._ledger, job, self.folder(job.job))
            elif self._running is None:
                log_line(f"job-resumed job={job.job} kind={job.kind}")
                self._start(job)

    def _start(self, job: JobRow) -> None:
        folder = self.folder(job.job)
        try:
            write_job(self._ledger.store, job, folder, self._settings.progress)
            with (folder.path / "log.txt").open("ab") as log:
                process = subprocess.Popen(
                    [
                        sys.executable, "-m", "nearhand.service.jobs.worker", str(folder.path),
                        "--parent", str(os.getpid()),
                    ],
                    stdin=subprocess.DEVNULL,
                    stdout=log,
                    stderr=log,
                    env={**os.environ, **THREAD_CAPS},
                )  # fmt: skip
        except (NearhandError, OSError) as error:
            code = error.code if isinstance(error, NearhandError) else "job.start"
            end_failed(self._ledger, job, code, str(error)[:2000])
            return
        self._running = Running(job, folder, process, os.pidfd_open(process.pid))
        self._poller.register(self._running.pidfd, zmq.POLLIN)
        self._ledger.store.jobs.begin(job.job)
        self._ledger.counters["jobs.started"] += 1
        log_line(f"job-started job={job.job} kind={job.kind} pid={process.pid}")

    def _look_after(self, running: Running) -> None:
        status = running.process.poll()
        if status is None:
            if running.kill_at_s is not None and time.monotonic() >= running.kill_at_s:
                running.process.kill()
                running.kill_at_s = time.monotonic() + GRACE_S
            return
        self._take_progress()
        job = self._ledger.store.jobs.get(running.job.job)
        log_line(f"job-ended job={job.job} status={status} state={job.state}")
        if job.state == "cancelled":
            drop_folder(running.folder)
        elif running.folder.has("result.json"):
            take_or_fail(self._ledger, job, running.folder)
        else:
            cause = f"was ended by {signal.Signals(-status).name}" if status < 0 else f"ended with status {status}"
            words = last_words(running.folder)
            message = f"the job {cause} and left no result" + (f"; its last words: {words}" if words else "")
            end_failed(self._ledger, job, "job.ended", message)
        # Only now: while the store cannot take the result, the next turn tries again.
        self._forget(running)
        self.progress.pop(job.job, None)
        self._waiting = True

    def _ask_to_end(self, running: Running, grace_s: float) -> None:
        running.process.terminate()
        running.kill_at_s = time.monotonic() + grace_s

    def _forget(self, running: Running) -> None:
        self._poller.unregister(running.pidfd)
        os.close(running.pidfd)
        self._running = None

    def _take_progress(self) -> None:
        while True:
            try:
                frame = self.socket.recv(flags=zmq.NOBLOCK)
            except zmq.Again:
                return
            with contextlib.suppress(WireError):
                message = decode(frame, FEED_MESSAGES)
                if isinstance(message, Progress) and self._running and message.job == self._running.job.job:
                    self.progress[message.job] = message
                    self._ledger.feed.publish(message)
                    continue
            self._ledger.counters["jobs.strange_messages"] += 1
