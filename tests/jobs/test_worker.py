"""A job's process: its result, its failures, its manners towards the rest of the machine."""

from __future__ import annotations

import fcntl
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from nearhand.service.episodes.episode import Episode
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.jobs.worker import NICENESS, STOPPED
from nearhand.service.rigs import rig_from_toml

RIG = rig_from_toml("""
name = "yard-crane"
title = "Travelling crane in a stone yard"
[[observations]]
name = "position"
unit = "m"
low = 0.0
high = 12.0
[[observations]]
name = "swing"
unit = "rad"
low = -1.0
high = 1.0
[[actions]]
name = "acceleration"
unit = "m/s2"
low = -0.6
high = 0.6
slew_per_s = 2.0
[timing]
period_s = 0.05
deadline_s = 0.1
lease_s = 0.1
""")
Process = subprocess.Popen[bytes]


@pytest.fixture
def folder(tmp_path: Path, generator: np.random.Generator) -> JobFolder:
    """The folder of an inspection of four episodes."""
    made = JobFolder(tmp_path / "job-000001")
    describe(made)
    made.write_episodes(
        [
            Episode(
                episode=f"e{index}",
                rig="yard-crane",
                operator="ann",
                times_s=np.arange(60, dtype=np.float64) * np.float64(0.05),
                observations=generator.standard_normal((61, 2)).astype(np.float32),
                actions=generator.uniform(-0.6, 0.6, (60, 1)).astype(np.float32),
            )
            for index in range(4)
        ]
    )
    return made


def describe(folder: JobFolder, **changes: Any) -> None:
    content = {"job": 1, "kind": "inspect", "rig": RIG.model_dump(mode="json"), "options": {}, "progress": ""}
    folder.write_json("job.json", {**content, **changes})


def spawn(folder: JobFolder, parent: int | None = None) -> Process:
    """Start the worker as the keeper does."""
    command = [sys.executable, "-m", "nearhand.service.jobs.worker", str(folder.path)]
    command += ["--parent", str(parent or os.getpid())]
    with (folder.path / "log.txt").open("wb") as log:
        return subprocess.Popen(command, stdin=subprocess.DEVNULL, stdout=log, stderr=log)


@pytest.fixture
def waiting(folder: JobFolder) -> Iterator[Process]:
    """A worker that waits for its folder, which this process has locked, and that listens to signals."""
    with (folder.path / "lock").open("wb") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        process = spawn(folder)
        end_s = time.monotonic() + 30
        while not catches(process.pid, signal.SIGTERM):
            assert time.monotonic() < end_s
        yield process
        fcntl.flock(lock, fcntl.LOCK_UN)
    process.kill()
    process.wait(10)


def catches(number: int, which: signal.Signals) -> bool:
    """Tell whether a process has its own handler for a signal (proc(5), SigCgt)."""
    (mask,) = (line.split()[1] for line in Path(f"/proc/{number}/status").read_text().splitlines() if "SigCgt" in line)
    return bool(int(mask, 16) >> (which - 1) & 1)


def test_an_inspection_leaves_its_result(folder: JobFolder) -> None:
    assert spawn(folder).wait(60) == 0, (folder.path / "log.txt").read_text()
    content = folder.read_json("result.json")
    assert (content["state"], content["versions"]) == ("done", [])
    assert content["result"]


@pytest.mark.parametrize(
    ("changes", "code"),
    [({"kind": "nonsense"}, "config.job_kind"), ({"job": "one"}, "job.crashed"), ({"rig": {}}, None)],
)
def test_a_job_that_cannot_be_done_says_why(folder: JobFolder, changes: dict[str, Any], code: str | None) -> None:
    describe(folder, **changes)
    assert spawn(folder).wait(60) == 1
    content = folder.read_json("result.json")
    assert content["state"] == "failed"
    assert content["code"] == code or code is None
    assert "Traceback" not in content["message"]
    assert "Traceback" in (folder.path / "log.txt").read_text()


def test_damaged_files_are_told_as_such(folder: JobFolder) -> None:
    folder.write_bytes("episodes.safetensors", b"damaged")
    assert spawn(folder).wait(60) == 1
    assert folder.read_json("result.json")["code"] == "store.failed"
    folder.write_bytes("job.json", b"{")
    assert spawn(folder).wait(60) == 1
    assert folder.read_json("result.json")["code"] == "store.failed"


def test_it_waits_for_its_folder_and_stops_when_told(folder: JobFolder, waiting: Process) -> None:
    assert waiting.poll() is None
    waiting.terminate()
    assert waiting.wait(10) == STOPPED
    assert not folder.has("result.json")


def test_it_lowers_its_priority(waiting: Process) -> None:
    assert os.getpriority(os.PRIO_PROCESS, waiting.pid) == min(19, os.getpriority(os.PRIO_PROCESS, 0) + NICENESS)


def test_it_goes_on_once_the_folder_is_free(folder: JobFolder) -> None:
    with (folder.path / "lock").open("wb") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        process = spawn(folder)
        end_s = time.monotonic() + 30
        while not catches(process.pid, signal.SIGTERM):
            assert time.monotonic() < end_s
        fcntl.flock(lock, fcntl.LOCK_UN)
    assert process.wait(60) == 0
    assert folder.read_json("result.json")["state"] == "done"


def test_it_does_nothing_for_a_parent_that_is_gone(folder: JobFolder) -> None:
    assert spawn(folder, parent=1).wait(60) == 0
    assert not folder.has("result.json")
