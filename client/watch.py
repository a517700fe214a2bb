"""Following the service live on a terminal."""

from __future__ import annotations

import contextlib
import sys
import time
from typing import TYPE_CHECKING

from nearhand.client.desk import Desk, Feed
from nearhand.client.live_view import Scene, render
from nearhand.service.bus.desk_messages import (
    EventsReply,
    GetHealth,
    GetJob,
    GetRig,
    HealthReply,
    JobReply,
    JobsReply,
    ListEvents,
    ListJobs,
    RigReply,
)
from nearhand.service.bus.feed_messages import Event, Progress, RigHealth
from nearhand.service.bus.message import Message
from nearhand.service.errors import LinkError, NearhandError
from nearhand.service.rigs import Rig

if TYPE_CHECKING:
    from rich.console import Console

#: How often the screen is drawn, and how often the desk is asked for what the feed may have lost.
DRAW_S = 0.125
ASK_S = 1.0
ANSWER_S = 1.0
PAGE = 500
UNFINISHED = ("queued", "running")


class Follower:
    """Keeps a scene up to date from desk and feed.

    Attributes:
        scene: what is known now.
    """

    def __init__(self, desk: Desk) -> None:
        self.scene = Scene()
        self._desk = desk
        self._after = 0
        self._heard_s = time.monotonic()

    def ask(self) -> None:
        """Ask the desk for everything; a desk that is silent or in trouble is noted in the scene."""
        try:
            self.ask_or_raise()
        except LinkError:
            self.scene.silent_s = time.monotonic() - self._heard_s
        except NearhandError as error:
            self.scene.trouble = error.message
        else:
            self._heard_s, self.scene.silent_s, self.scene.trouble = time.monotonic(), 0.0, ""

    def ask_or_raise(self) -> None:
        """Ask the desk for everything.

        Raises:
            NearhandError: it is silent or in trouble.
        """
        scene, desk = self.scene, self._desk
        health = desk.ask(GetHealth, HealthReply)
        scene.uptime_s = health.uptime_s
        scene.action_server = bool(health.action_server.get("reachable"))
        scene.states = dict(health.rigs)
        for name in health.rigs:
            if name not in scene.rigs:
                scene.rigs[name] = Rig.model_validate(desk.ask(GetRig, RigReply, rig=name).description)
        unfinished = [row for row in desk.ask(ListJobs, JobsReply).jobs if row.get("state") in UNFINISHED]
        scene.jobs = {int(row["job"]): desk.ask(GetJob, JobReply, job=int(row["job"])) for row in reversed(unfinished)}
        while events := desk.ask(ListEvents, EventsReply, after=self._after, limit=PAGE).events:
            for row in events:
                self._note_event(Event(**row))

    def _note_event(self, event: Event) -> None:
        if event.event > self._after:
            self._after = event.event
            self.scene.events.append(event)
            if event.what == "rig-changed":
                self.scene.rigs.pop(event.rig, None)

    def hear(self, message: Message) -> None:
        """Take in a message of the feed."""
        if isinstance(message, RigHealth):
            told = self.scene.states.get(message.rig, {})
            self.scene.states[message.rig] = {**told, **message.state}
        elif isinstance(message, Progress) and message.job in self.scene.jobs:
            self.scene.jobs[message.job] = self.scene.jobs[message.job].model_copy(
                update={
                    "state": "running", "stage": message.stage, "fraction": message.fraction, "eta_s": message.eta_s,
                    "figures": dict(message.figures),
                }
            )  # fmt: skip
        elif isinstance(message, Event) and message.event == self._after + 1:
            self._note_event(message)


def watch(desk: Desk, feed: Feed, once: bool = False, *, console: Console | None = None) -> None:
    """Show the service live until interrupted, or its present state once.

    The desk is asked with a short time-out meanwhile, so that a silent service does not freeze the screen.

    Raises:
        NearhandError: with ``once``, the service is silent or in trouble.
    """
    from rich.console import Console

    console = console or Console(file=sys.stdout)
    follower = Follower(desk)
    if once:
        follower.ask_or_raise()
        console.print(render(follower.scene, width=console.width, height=10_000))
        return
    patience_s, desk.timeout_s = desk.timeout_s, min(ANSWER_S, desk.timeout_s)
    try:
        with contextlib.suppress(KeyboardInterrupt):
            _follow(follower, feed, console)
    finally:
        desk.timeout_s = patience_s


def _follow(follower: Follower, feed: Feed, console: Console) -> None:
    from rich.live import Live

    asked_s = -ASK_S
    with Live(console=console, screen=True, auto_refresh=False, transient=True) as live:
        while True:
            if time.monotonic() - asked_s >= ASK_S:
                follower.ask()
                asked_s = time.monotonic()
            drawn = render(follower.scene, width=console.width, height=console.height)
            live.update(drawn, refresh=True)
            end_s = time.monotonic() + DRAW_S
            while (left_s := end_s - time.monotonic()) > 0:
                message = feed.receive(left_s)
                if message is not None:
                    follower.hear(message)
