"""A job's process: one folder in, one result out, at low priority, ended by a signal or with its parent."""

from __future__ import annotations

import argparse
import contextlib
import fcntl
import os
import sys
import time
import traceback
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import IO, Any

from nearhand.service.errors import ConfigError, LearningError, NearhandError, StoreError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.reporter import Reporter
from nearhand.service.process import StopSignal, die_with_parent

NICENESS = 10
LOCK_PATIENCE_S = 30.0
LOCK_INTERVAL_S = 0.05
#: Exit status of a job that was told to stop and can be taken up again.
STOPPED = 75

Run = Callable[[JobFolder, Reporter, Callable[[], bool]], dict[str, Any]]


def job_function(kind: str) -> Run:
    """Return the function that does a kind of job; only its own libraries are loaded.

    Raises:
        ConfigError: there is no such kind.
    """
    if kind == "distil":
        from nearhand.service.learn.distil import run_distil

        return run_distil
    if kind == "measure":
        from nearhand.service.measure.run import run_measure

        return run_measure
    if kind == "inspect":
        from nearhand.service.episodes.inspection import run_inspect

        return run_inspect
    raise ConfigError(f"there is no job of kind {kind!r}; expected distil, measure or inspect", code="config.job_kind")


def lock_folder(folder: JobFolder, stopped: Callable[[], bool]) -> IO[bytes]:
    """Lock a job's folder for this process; an earlier process that still ends is waited for.

    Raises:
        StoreError: the folder stays in use.
        LearningError: told to stop meanwhile.
    """
    stream = (folder.path / "lock").open("wb")
    end_s = time.monotonic() + LOCK_PATIENCE_S
    while True:
        try:
            fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
            return stream
        except OSError:
            if stopped():
                stream.close()
                raise LearningError("stopped while waiting for the folder", code="learn.stopped") from None
            if time.monotonic() > end_s:
                stream.close()
                raise StoreError(f"{folder.path} is in use by another process", code="store.in_use") from None
            time.sleep(LOCK_INTERVAL_S)


def work(folder: JobFolder, stopped: Callable[[], bool]) -> int:
    """Do the job in a folder and write its result; return the process' exit status."""
    try:
        with lock_folder(folder, stopped):
            job = folder.read_json("job.json")
            with Reporter(int(job["job"]), str(job.get("progress", ""))) as reporter:
                answer = job_function(str(job["kind"]))(folder, reporter, stopped)
            content = answer if answer.get("state") == "done" else {"result": answer}
            folder.write_json("result.json", {"versions": [], "result": {}, **content, "state": "done"})
            return 0
    except NearhandError as error:
        if error.code == "learn.stopped":
            print("stopped; the folder can be taken up again", file=sys.stderr, flush=True)
            return STOPPED
        traceback.print_exc()
        _fail(folder, error.code, error.message)
    except Exception as error:
        traceback.print_exc()
        _fail(folder, "job.crashed", f"the job ended unexpectedly: {error!r}; its log has the details")
    return 1


def _fail(folder: JobFolder, code: str, message: str) -> None:
    print(f"failed code={code} message={message!r}", file=sys.stderr, flush=True)
    with contextlib.suppress(OSError):
        folder.write_json("result.json", {"state": "failed", "code": code, "message": message[:2000]})


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one job; exit status 0 done, 1 failed, 75 stopped and resumable."""
    parser = argparse.ArgumentParser(prog="nearhand-job")
    parser.add_argument("folder", type=Path)
    parser.add_argument("--parent", type=int, default=os.getppid())
    options = parser.parse_args(arguments)
    die_with_parent(options.parent)
    with contextlib.suppress(OSError):
        os.nice(NICENESS)
    stop = StopSignal()
    return work(JobFolder(options.folder), lambda: stop.stopped)


if __name__ == "__main__":
    raise SystemExit(main())
