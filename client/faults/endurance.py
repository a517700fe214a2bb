"""Everything at once for a long time, while any process is killed or stopped at random instants; then an audit.

A rig in closed loop, two teaching clients, training and releases go on against one service. Afterwards: no acknowledged
sample lost, each stored exactly once and bit-exact; the version in service is one that was released; the event record
verifies; every job has ended with a result or a reason; no process is left over; memory and descriptors are flat.
"""

from __future__ import annotations

import contextlib
import os
import random
import signal
import tempfile
import threading
import time
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from nearhand.client.desk import Desk
from nearhand.client.faults.injections import ACTION_SERVER, KEEPER
from nearhand.client.faults.teaching import Teacher, audit
from nearhand.client.jobs import start_job, wait_job
from nearhand.client.options import rig_text
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import (
    EventsReply,
    JobsReply,
    ListEvents,
    ListJobs,
    ListRigs,
    PutRig,
    Rearm,
    Release,
    ReleaseReply,
    RigReply,
    RigsReply,
    RigStateReply,
    VerifyEvents,
    VerifyReply,
)
from nearhand.service.errors import LinkError, NearhandError
from nearhand.service.main import free_ports

RIG, WHO = "crane", "bench"
DEMONSTRATIONS = 12
WORKER = "nearhand.service.jobs.worker"
TRAINING = {"method": "clone", "clone": {"steps": 400}}
#: Between two blows; shares of kinds of blow; how long a process stays stopped.
REST_S, STOP_SHARE, SUPERVISOR_SHARE, STOPPED_S = (0.1, 0.9), 0.3, 0.01, (0.05, 0.6)
SETTLE_S = 120.0
#: What counts as flat, of the supervisor, which lives through it all unless it is killed itself.
MOST_GROWTH_MIB, MOST_DESCRIPTORS = 16.0, 4
LANES = ("action", "intake", "desk", "feed")


def run(count: int = 1000, seed: int = 1) -> dict[str, Any]:
    """Strike ``count`` times; return bench, figures, ratios and targets.

    Raises:
        LinkError: the service did not start, or did not come back.
    """
    with tempfile.TemporaryDirectory(prefix="nearhand-") as name:
        endurance = Endurance(Path(name), seed)
        try:
            endurance.go(count)
            return endurance.result()
        finally:
            endurance.close()


class Endurance:
    """One run."""

    def __init__(self, folder: Path, seed: int) -> None:
        self._folder = folder
        self._generator = random.Random(seed)
        self._ports = dict(zip(LANES, free_ports("127.0.0.1", len(LANES)), strict=True))
        self._rig, toml = rig_text(RIG)
        self.service = self._start()
        self._lanes = self.service.lanes
        self._stopping = threading.Event()
        self.blows: Counter[str] = Counter()
        self.done: Counter[str] = Counter()
        self._wrong: list[str] = []
        self._acknowledged = 0
        self._sizes: list[tuple[float, int]] = []
        self._versions = self._first_versions(toml)

    def _start(self) -> ServiceProcess:
        return ServiceProcess(self._folder / "data", ports=self._ports)

    def _first_versions(self, toml: str) -> list[int]:
        """Teach the service the crane and measure two clones, so that releases can alternate."""
        versions = []
        with Desk(self._lanes["desk"]) as desk:
            desk.ask(PutRig, RigReply, toml=toml, who=WHO, why="endurance")
            with RigProcess(self._rig_words("collect", DEMONSTRATIONS)) as process:
                for _ in process.lines():
                    pass
            for seed in (1, 2):
                wishes = {"recipe": {**TRAINING, "seed": seed}, "episodes": 0, "operators": ["designed"]}
                (version,) = wait_job(desk, start_job(desk, "distil", RIG, WHO, wishes)).versions
                measuring = {"version": version, "closed_loop_episodes": 2, "seed": 1, "operators": []}
                wait_job(desk, start_job(desk, "measure", RIG, WHO, measuring))
                versions.append(version)
        return versions

    def _rig_words(self, verb: str, episodes: int) -> list[str]:
        lanes = self._lanes
        words = [verb, "--rig", RIG, "--episodes", str(episodes), "--seed", str(self._generator.randrange(10**6))]
        if verb == "collect":
            return [
                *words, "--expert", "designed", "--operator", "designed", "--intake", lanes["intake"],
                "--spool", str(self._folder / "spool"),
            ]  # fmt: skip
        return [*words, "--action", lanes["action"], "--paced"]

    def go(self, count: int) -> None:
        """Let everybody work, strike, and settle."""
        workers = [
            threading.Thread(target=self._again, args=(work,), daemon=True)
            for work in (self._drive, self._rearm, self._release, self._train)
        ]
        intake = self._lanes["intake"]
        with (
            Teacher(self._rig, intake, self._folder / "spool-a", "Ada", 1) as ada,
            Teacher(self._rig, intake, self._folder / "spool-b", "Ben", 2) as ben,
        ):
            for worker in workers:
                worker.start()
            while self.blows.total() < count:
                time.sleep(self._generator.uniform(*REST_S))
                self._strike()
                if self.blows.total() % 20 == 0:
                    self._sizes.append(_size(self.service.number))
            self._stopping.set()
            for teacher in (ada, ben):
                teacher.stop()
            for worker in workers:
                worker.join(SETTLE_S)
            self._settle([ada, ben])

    def _strike(self) -> None:
        """Kill or stop one process, at random; a killed supervisor is started again, as an init system would."""
        if self._generator.random() < SUPERVISOR_SHARE:
            self.blows["kill supervisor"] += 1
            self.service.kill_whole()
            self.service = self._start()
            self._sizes.clear()
            return
        module = self._generator.choice([ACTION_SERVER, KEEPER, KEEPER, WORKER])
        number = _find(module, self._folder)
        if number is None:
            return
        with contextlib.suppress(OSError):
            if self._generator.random() < STOP_SHARE:
                os.kill(number, signal.SIGSTOP)
                time.sleep(self._generator.uniform(*STOPPED_S))
                os.kill(number, signal.SIGCONT)
                self.blows[f"stop {module.split('.')[-2]}"] += 1
            else:
                os.kill(number, signal.SIGKILL)
                self.blows[f"kill {module.split('.')[-2]}"] += 1

    def _again(self, work: Callable[[], None]) -> None:
        """Do a piece of work again and again; whatever fails under the blows is tried anew."""
        while not self._stopping.is_set():
            try:
                work()
                self.done[work.__name__.strip("_")] += 1
            except (NearhandError, OSError) as error:
                self.done[f"{work.__name__.strip('_')}: failed"] += 1
                if isinstance(error, LinkError):
                    time.sleep(0.2)

    def _drive(self) -> None:
        with RigProcess(self._rig_words("drive", 1)) as process:
            for _ in process.lines():
                if self._stopping.is_set():
                    return

    def _rearm(self) -> None:
        time.sleep(0.5)
        with Desk(self._lanes["desk"], timeout_s=2.0) as desk:
            desk.ask(Rearm, RigStateReply, rig=RIG, who="operator", why="endurance")

    def _release(self) -> None:
        time.sleep(0.7)
        version = self._generator.choice(self._versions)
        with Desk(self._lanes["desk"], timeout_s=2.0) as desk:
            why = "endurance looks at the service, not at the policy"
            desk.ask(Release, ReleaseReply, version=version, who=WHO, why=why, override=True)

    def _train(self) -> None:
        with Desk(self._lanes["desk"], timeout_s=2.0) as desk:
            wishes = {"recipe": TRAINING, "episodes": 0, "operators": ["designed"]}
            wait_job(desk, start_job(desk, "distil", RIG, WHO, wishes))

    def _settle(self, teachers: list[Teacher]) -> None:
        """Wait until nothing is under way, and look at everything."""
        for teacher in teachers:
            teacher.stream.flush(SETTLE_S)
        with Desk(self._lanes["desk"], timeout_s=30.0) as desk:
            self._acknowledged, self._wrong = audit(desk, RIG, teachers)
            end_s = time.monotonic() + SETTLE_S
            while time.monotonic() < end_s:
                jobs = desk.ask(ListJobs, JobsReply, rig=RIG).jobs
                if all(job["state"] not in ("queued", "running") for job in jobs):
                    break
                time.sleep(0.5)
            for job in jobs:
                if job["state"] in ("queued", "running") or (job["state"] == "failed" and not job.get("message")):
                    self._wrong.append(f"job {job['job']} is {job['state']} without a reason")
                self.done[f"jobs {job['state']}"] += 1
            if not desk.ask(VerifyEvents, VerifyReply).intact:
                self._wrong.append("the event record does not verify")
            serving = {str(rig["rig"]): int(rig["in_service"]) for rig in desk.ask(ListRigs, RigsReply).rigs}[RIG]
            if serving not in _released(desk):
                self._wrong.append(f"version {serving} is in service and was never released")

    def result(self) -> dict[str, Any]:
        """Stop the service, look for what is left over, and return what came of it."""
        self.service.stop()
        left = [module for module in (ACTION_SERVER, KEEPER, WORKER) if _find(module, self._folder) is not None]
        growth_mib, descriptors = 0.0, 0
        if len(self._sizes) >= 3:
            sizes = np.array(self._sizes)
            growth_mib, descriptors = float(sizes[-1, 0] - sizes[1, 0]), int(sizes[-1, 1] - sizes[1, 1])
        figures = {
            "blows": float(self.blows.total()), "samples acknowledged": float(self._acknowledged),
            **{name: float(number) for name, number in sorted(self.blows.items())},
            **{name: float(number) for name, number in sorted(self.done.items())},
            "supervisor: growth (MiB)": growth_mib, "supervisor: more descriptors": float(descriptors),
        }  # fmt: skip
        values = {
            "wrong in the audit": (float(len(self._wrong)), 0.0), "processes left over": (float(len(left)), 0.0),
            "supervisor: growth (MiB)": (growth_mib, MOST_GROWTH_MIB),
            "supervisor: more descriptors": (float(descriptors), float(MOST_DESCRIPTORS)),
        }  # fmt: skip
        failed = sum(number for name, number in self.done.items() if name.endswith(": failed"))
        return {
            "bench": "endurance",
            "figures": figures,
            "ratios": {"work that failed under the blows": failed / max(1, self.done.total())},
            "targets": {n: {"value": value, "goal": goal, "met": value <= goal} for n, (value, goal) in values.items()},
            "wrong": self._wrong + [f"left over: {module}" for module in left],
        }

    def close(self) -> None:
        """End what still runs."""
        self._stopping.set()
        self.service.stop()


def _released(desk: Desk) -> set[int]:
    """Return the versions that the event record says were released or rolled back to."""
    found: set[int] = set()
    after = 0
    while events := desk.ask(ListEvents, EventsReply, rig=RIG, after=after, limit=500).events:
        after = int(events[-1]["event"])
        found |= {
            int(event["detail"]["version"]) for event in events
            if event["what"] in ("release", "rollback") and "version" in event["detail"]
        }  # fmt: skip
    return found


def _find(module: str, folder: Path) -> int | None:
    """Return a process that runs a module for this data folder (Linux), or None."""
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            with contextlib.suppress(OSError):
                words = (entry / "cmdline").read_bytes().decode(errors="replace").split("\0")
                if module in words and any(str(folder) in word for word in words):
                    return int(entry.name)
    return None


def _size(number: int) -> tuple[float, int]:
    """Return a process' resident memory in MiB and its number of descriptors."""
    pages = int(Path(f"/proc/{number}/statm").read_text(encoding="utf-8").split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20, len(list(Path(f"/proc/{number}/fd").iterdir()))
