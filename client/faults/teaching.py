"""Teaching clients that know by heart what they have taught: every sample they were acknowledged can be asked back."""

from __future__ import annotations

import threading
import time
from dataclasses import dataclass
from pathlib import Path
from typing import Self

import numpy as np
from numpy.typing import NDArray

from nearhand.client.demos import DemonstrationStream
from nearhand.client.desk import Desk
from nearhand.service.bus.desk_messages import EpisodeReply, EpisodesReply, GetEpisode, ListEpisodes
from nearhand.service.rigs import Rig

SAMPLES, RATE_HZ = 200, 100.0


@dataclass(frozen=True)
class Taught:
    """One episode as it was recorded: times (T,), observations (T+1, n), actions (T, m)."""

    times: NDArray[np.float64]
    observations: NDArray[np.float32]
    actions: NDArray[np.float32]


class Teacher:
    """Records episodes of random values one after the other, in a thread; a context manager.

    Attributes:
        taught: by episode, what was recorded and closed.
        stream: delivers it.
    """

    def __init__(self, rig: Rig, intake: str, spool: Path, name: str, seed: int) -> None:
        self.taught: dict[str, Taught] = {}
        self.stream = DemonstrationStream(rig, intake, spool)
        self._rig = rig
        self._name = name
        self._generator = np.random.default_rng(seed)
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._run, name=name, daemon=True)

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(self, *exc: object) -> None:
        self.stop()
        self.stream.close()

    def stop(self) -> None:
        """Finish the present episode and record no more."""
        self._stopping.set()
        self._thread.join()

    def _run(self) -> None:
        n, m = len(self._rig.observations), len(self._rig.actions)
        while not self._stopping.is_set():
            made = Taught(
                np.arange(SAMPLES) / RATE_HZ,
                self._generator.standard_normal((SAMPLES + 1, n)).astype(np.float32),
                self._generator.standard_normal((SAMPLES, m)).astype(np.float32),
            )
            recording = self.stream.open(self._name)
            begin_s = time.monotonic()
            for time_s, observation, action in zip(made.times, made.observations[:-1], made.actions, strict=True):
                recording.add(float(time_s), observation, action)
                time.sleep(max(0.0, begin_s + time_s - time.monotonic()))
            recording.close("success", made.observations[-1])
            self.taught[recording.episode] = made


def audit(desk: Desk, rig: str, teachers: list[Teacher]) -> tuple[int, list[str]]:
    """Ask everything back; return how many samples were acknowledged, and what is wrong, in words."""
    wrong: list[str] = []
    acknowledged = 0
    stored: dict[str, int] = {}
    for row in desk.ask(ListEpisodes, EpisodesReply, rig=rig).episodes:
        name = str(row["episode"])
        if name in stored:
            wrong.append(f"episode {name} is stored twice")
        stored[name] = int(row["samples"])
    for teacher in teachers:
        for episode, delivery in teacher.stream.deliveries().items():
            acknowledged += delivery.acknowledged
            if stored.get(episode, 0) < delivery.acknowledged:
                wrong.append(
                    f"episode {episode}: {delivery.acknowledged} samples were acknowledged, {stored.get(episode, 0)} "
                    "are stored"
                )
        for episode, taught in teacher.taught.items():
            if teacher.stream.deliveries()[episode].state != "closed":
                wrong.append(f"episode {episode} was never delivered to its end")
                continue
            reply = desk.ask(GetEpisode, EpisodeReply, episode=episode)
            same = (
                reply.times == taught.times.astype("<f8").tobytes()
                and reply.obs == taught.observations.astype("<f4").tobytes()
                and reply.act == taught.actions.astype("<f4").tobytes()
            )
            if not same:
                wrong.append(f"episode {episode} is not what was recorded")
    return acknowledged, wrong
