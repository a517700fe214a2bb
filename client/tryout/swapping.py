"""A second release and a rollback under load: every query answered, each by one whole version.

The proof is a replay: the same observations go through a second governor in this process, with each version loaded
where the replies say it took over; every action must come out the same, bit for bit.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from nearhand.client.desk import Desk
from nearhand.client.tryout.asking import Asking
from nearhand.client.tryout.judging import arm, release
from nearhand.client.tryout.narrator import Narrator
from nearhand.client.tryout.plan import WHO, Plan
from nearhand.service.action.governor import Governor
from nearhand.service.bus.action_messages import Action
from nearhand.service.bus.arrays import unpack
from nearhand.service.bus.desk_messages import (
    EpisodeReply,
    EpisodesReply,
    GetEpisode,
    GetVersion,
    ListEpisodes,
    ReleaseReply,
    Rollback,
    VersionReply,
)
from nearhand.service.errors import LinkError, NearhandError
from nearhand.service.policy.format import PolicyFile, read_policy
from nearhand.service.rigs import Rig

SESSION = "swap-under-load"
LOAD_S = 3.0
RELEASE_AT_S = 1.0
ROLLBACK_AT_S = 2.0


@dataclass
class Load:
    """Queries at twice the control rate in a thread of its own, until told to stop.

    Attributes:
        observations: (T, n) float32, asked in turn, over and over.
        replies: what came back, in order.
        unanswered: queries without a reply.
    """

    rig: Rig
    address: str
    observations: NDArray[np.float32]
    replies: list[Action] = field(default_factory=list)
    round_trips_s: list[float] = field(default_factory=list)
    unanswered: int = 0
    failure: str = ""

    def __post_init__(self) -> None:
        self._go = threading.Event()
        self._stop = threading.Event()
        self._ready = threading.Event()
        self._thread = threading.Thread(target=self._run, name="queries", daemon=True)

    def start(self) -> None:
        """Open the session and return once it is welcome.

        Raises:
            LinkError: the action server did not welcome it.
        """
        self._thread.start()
        if not self._ready.wait(10.0) or self.failure:
            raise LinkError(f"the action server did not welcome the session: {self.failure or 'silent'}")

    def go(self) -> None:
        """Begin to ask."""
        self._go.set()

    def stop(self) -> None:
        """Stop asking and wait for the thread."""
        self._stop.set()
        self._go.set()
        self._thread.join(10.0)

    def _run(self) -> None:
        try:
            with Asking(self.rig, self.address, SESSION) as asking:
                asking.hello()
                self._ready.set()
                self._go.wait()
                self._query(asking)
        except NearhandError as error:
            self.failure = error.message
        finally:
            self._ready.set()

    def _query(self, asking: Asking) -> None:
        pause_s = self.rig.timing.period_s / 2
        due_s = time.monotonic()
        while not self._stop.is_set():
            begin_s = time.monotonic()
            reply = asking.ask(self.observations[asking.seq % len(self.observations)])
            if reply is None:
                self.unanswered += 1
            else:
                self.replies.append(reply)
                self.round_trips_s.append(time.monotonic() - begin_s)
            due_s += pause_s
            self._stop.wait(max(0.0, due_s - time.monotonic()))


def replay(rig: Rig, files: dict[int, PolicyFile], load: Load) -> int:
    """Return how many replies differ from what one whole version gives for the same history."""
    governor = Governor(rig)
    size = len(rig.actions)
    first = load.replies[0].version
    governor.load(first, files[first])
    governor.arm()
    governor.begin_session(SESSION, 0)
    differing = 0
    period_ns = round(rig.timing.period_s * 0.5e9)
    for index, reply in enumerate(load.replies):
        if reply.version != governor.version:
            governor.load(reply.version, files[reply.version])
        now_ns = index * period_ns
        decision = governor.act(load.observations[index % len(load.observations)], index + 1, now_ns, now_ns)
        told = unpack(reply.action, size, what="action")
        differing += not np.array_equal(decision.action, told)
    return differing


def demonstrated_observations(desk: Desk, plan: Plan) -> NDArray[np.float32]:
    """Return the observations (T+1, n) of one stored demonstration of the plan's expert."""
    listed = desk.ask(ListEpisodes, EpisodesReply, rig=plan.rig.name).episodes
    name = next(str(row["episode"]) for row in listed if row["operator"] == plan.expert and row["split"] == "train")
    episode = desk.ask(GetEpisode, EpisodeReply, episode=name)
    rows = np.frombuffer(episode.obs, dtype="<f4").reshape(-1, len(plan.rig.observations))
    return np.ascontiguousarray(rows, dtype=np.float32)


def versions_seen(replies: Sequence[Action]) -> list[int]:
    """Return the versions in the order in which they took over."""
    order: list[int] = []
    for reply in replies:
        if not order or order[-1] != reply.version:
            order.append(reply.version)
    return order


def swap_under_load(desk: Desk, narrator: Narrator, plan: Plan, action_address: str, first: int, second: int) -> None:
    """Release ``second`` and roll back to ``first`` while queries run; check that none was lost or mixed."""
    files = {
        version: read_policy(desk.ask(GetVersion, VersionReply, version=version, with_policy=True).policy or b"")
        for version in (first, second)
    }
    load = Load(plan.rig, action_address, demonstrated_observations(desk, plan))
    load.start()
    try:
        arm(desk, plan, why="tryout: swap under load")
        load.go()
        begin_s = time.monotonic()
        time.sleep(RELEASE_AT_S)
        reply = release(desk, second, why="tryout: second version")
        if not reply.released:
            broken = "; ".join(str(bound.get("sentence")) for bound in reply.bounds if not bound.get("met"))
            narrator.say(f"the gate refuses version {second} ({broken}); released by a recorded override")
            reply = release(desk, second, why="tryout: swap under load, simulated rig", override=True)
        narrator.check(reply.released, f"version {second} is released while queries run")
        time.sleep(max(0.0, begin_s + ROLLBACK_AT_S - time.monotonic()))
        back = desk.ask(Rollback, ReleaseReply, rig=plan.rig.name, who=WHO, why="tryout: roll back under load")
        narrator.check(back.version == first, f"rolled back to version {back.version}")
        time.sleep(max(0.0, begin_s + LOAD_S - time.monotonic()))
    finally:
        load.stop()
    order = versions_seen(load.replies)
    longest_ms = 1e3 * max(load.round_trips_s)
    narrator.check(load.unanswered == 0, f"{len(load.replies)} queries, {load.unanswered} unanswered {load.failure}")
    narrator.check(order == [first, second, first], f"versions took over in the order {order}")
    armed = sum(reply.mode == "armed" for reply in load.replies)
    narrator.check(armed == len(load.replies), f"armed throughout: {armed} of {len(load.replies)} replies")
    differing = replay(plan.rig, files, load)
    narrator.check(differing == 0, f"replayed: {differing} replies differ from those of one whole version")
    narrator.say(f"longest round trip {longest_ms:.1f} ms; the control period is {1e3 * plan.rig.timing.period_s:g} ms")
    narrator.note("queries", len(load.replies))
    narrator.note("unanswered", load.unanswered)
    narrator.note("mixed", differing)
    narrator.note("longest_round_trip_ms", longest_ms)
