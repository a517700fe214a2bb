"""A loaded machine to measure on: a service of its own that trains and takes in episodes for as long as it is asked."""

from __future__ import annotations

import threading
from pathlib import Path
from typing import Any

from nearhand.client.desk import Desk
from nearhand.client.jobs import start_job
from nearhand.client.options import rig_text
from nearhand.client.tryout.rig_process import RigProcess
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import GetJob, JobReply, PutRig, RigReply
from nearhand.service.errors import LinkError

RIG, WHO = "crane", "bench"
FIRST_EPISODES = 24
#: Episodes per round of the load; rounds follow each other without pause.
EPISODES = 200
#: Long enough to train for the whole measurement.
RECIPE: dict[str, Any] = {"method": "proximal-online", "online": {"iterations": 200}}
STOP_S = 30.0


class MachineLoad:
    """Trains on and streams episodes of the crane, on the same processors, at the priorities that a service gives them.

    A context manager: inside, the load is on.

    Args:
        folder: for the data, removed by the caller.

    Attributes:
        episodes: acknowledged so far.
    """

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self.episodes = 0
        self._stop = threading.Event()
        self._failure: LinkError | None = None
        self._thread = threading.Thread(target=self._stream, name="bench-load", daemon=True)

    def __enter__(self) -> MachineLoad:
        self._service = ServiceProcess(self._folder / "data")
        try:
            with Desk(self._service.lanes["desk"]) as desk:
                desk.ask(PutRig, RigReply, toml=rig_text(RIG)[1], who=WHO, why="bench")
                self._collect(FIRST_EPISODES)
                self._job = start_job(desk, "distil", RIG, WHO, {"recipe": RECIPE, "episodes": 0, "operators": []})
        except BaseException:
            self._service.stop()
            raise
        self._thread.start()
        return self

    def __exit__(self, *exc: object) -> None:
        self._stop.set()
        self._thread.join(STOP_S)
        self._service.stop()

    def check(self) -> None:
        """Make sure that the load is truly on.

        Raises:
            LinkError: training has ended, or the stream of episodes has failed.
        """
        if self._failure is not None:
            raise LinkError(f"the stream of episodes failed: {self._failure.message}")
        with Desk(self._service.lanes["desk"]) as desk:
            state = desk.ask(GetJob, JobReply, job=self._job).state
        if state not in ("queued", "running"):
            raise LinkError(f"the training job is {state}; it should have run all the time")

    def _collect(self, episodes: int) -> None:
        arguments = [
            "collect", "--rig", RIG, "--expert", "designed", "--operator", "designed", "--episodes", str(episodes),
            "--seed", str(self.episodes + 1), "--intake", self._service.lanes["intake"],
            "--spool", str(self._folder / "spool"),
        ]  # fmt: skip
        with RigProcess(arguments) as process:
            for line in process.lines():
                self.episodes += line.get("kind") == "episode"
                if self._stop.is_set():
                    return

    def _stream(self) -> None:
        try:
            while not self._stop.is_set():
                self._collect(EPISODES)
        except LinkError as error:
            self._failure = error
