"""The live view: it fits the screen whatever it is told, shows what matters, and leaves the terminal as it was."""

from __future__ import annotations

import io
import os
import pty
import select
import signal
import subprocess
import sys
import time
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from rich.cells import cell_len
from rich.console import Console

from nearhand.client.desk import Desk, Feed
from nearhand.client.live_view import Scene, numbers, render
from nearhand.client.watch import Follower, watch
from nearhand.service.bus.action_messages import Reason
from nearhand.service.bus.arrays import pack
from nearhand.service.bus.desk_messages import JobReply
from nearhand.service.bus.feed_messages import Event, Progress, RigHealth
from nearhand.service.errors import LinkError
from nearhand.service.rigs import ActionChannel, Channel, Rig, Timing

#: The fixture's process: ``settings``, ``kill``, ``start``.
KeeperProcess = Any


def drawn(scene: Scene, width: int = 80, height: int = 24) -> list[str]:
    """Return the lines on screen."""
    stream = io.StringIO()
    console = Console(file=stream, width=width, height=height, color_system=None)
    console.print(render(scene, width=width, height=height))
    return stream.getvalue().splitlines()


def state(**changes: Any) -> dict[str, Any]:
    """Return what the action server tells of a driven rig."""
    usual = {
        "mode": "armed", "version": 3, "reasons": 0, "observation": [0.5, -0.25, 0.1], "action": [-0.5],
        "novelty": 0.4, "queries": 1200, "interventions": 7, "trips": 1, "age_s": 0.02, "rate_hz": 49.9,
    }  # fmt: skip
    return {**usual, **changes}


def event(number: int, **changes: Any) -> Event:
    usual: dict[str, Any] = {
        "event": number, "utc": "2031-05-04T10:11:12.345Z", "rig": "cart", "what": "trip", "who": "", "why": "",
        "detail": {},
    }  # fmt: skip
    return Event(**{**usual, **changes})


def job(**changes: Any) -> JobReply:
    usual: dict[str, Any] = {
        "request": "x", "job": 7, "job_kind": "distil", "rig": "cart", "state": "running", "stage": "proximal",
        "fraction": 0.25, "eta_s": 75.0, "figures": {"gap": 0.125},
    }  # fmt: skip
    return JobReply(**{**usual, **changes})


def test_a_driven_rig_is_shown_with_everything_that_matters(rig: Rig) -> None:
    scene = Scene(rigs={"cart": rig}, states={"cart": state()}, jobs={7: job()}, uptime_s=3725.0, action_server=True)
    scene.events.append(event(1, who="ann", why="too fast"))
    text = "\n".join(drawn(scene))
    for part in (
        "up 1:02:05", "ARMED", "version 3", "49.9 queries/s", "p 0.400", "interventions 7 of 1200", "trips 1",
        "position", "0.500", "m/s2", "distil cart  proximal", "25%", "0:01:15 left", "gap 0.125",
        "10:11:12", "trip", "by ann: too fast",
    ):  # fmt: skip
        assert part in text, part


def bar_of(lines: list[str], name: str) -> str:
    (line,) = (line for line in lines if line.strip().startswith(name))
    return line.split("[")[1].split("]")[0]


def test_a_bar_shows_the_place_between_the_limits(rig: Rig) -> None:
    scene = Scene(rigs={"cart": rig}, states={"cart": state(observation=[2.0, -1.0, 0.0], action=[-5.0])})
    lines = drawn(scene)
    assert bar_of(lines, "position")[-1] == "●"
    assert bar_of(lines, "speed")[0] == "●"
    assert bar_of(lines, "angle").index("●") in (14, 15)
    push = bar_of(lines, "push")
    assert push[0] == "●"
    assert push.index("|") in (14, 15)


def test_a_trip_names_its_reasons(rig: Rig) -> None:
    reasons = int(Reason.NOVEL | Reason.LATCHED)
    text = "\n".join(drawn(Scene(states={"cart": state(mode="latched", reasons=reasons, novelty=0.02)})))
    assert "LATCHED" in text
    assert "novel, latched" in text


def test_no_text_from_outside_reaches_the_terminal_as_a_command() -> None:
    scene = Scene()
    scene.events.append(event(1, why="\x1b[2J\x1b]0;title\x07\r\nnext line", who="\x9b31m"))
    shown = drawn(scene)[-1]
    assert shown.isprintable()
    assert "next line" in shown


def test_a_silent_service_is_said_so(rig: Rig) -> None:
    first = drawn(Scene(states={"cart": state()}, uptime_s=5.0, silent_s=12.0))[0]
    assert "SILENT" in first
    assert "12 s" in first


def test_vectors_may_come_as_bytes_or_lists() -> None:
    assert numbers(pack([1.0, -2.5])) == [1.0, -2.5]
    assert numbers((1, 2.5)) == [1.0, 2.5]
    assert numbers(None) == numbers("12") == numbers(b"123") == []


wild = st.one_of(st.floats(), st.integers(-(10**6), 10**12), st.none(), st.text(max_size=8))
names = st.from_regex(r"[a-z][a-z0-9_-]{0,63}", fullmatch=True)


@given(
    channels=st.integers(1, 60),
    driven=st.integers(1, 30),
    values=st.lists(st.floats(width=32), min_size=0, max_size=100),
    fields=st.fixed_dictionaries({}, optional=dict.fromkeys(["novelty", "queries", "interventions", "trips"], wild)),
    age_s=st.one_of(st.floats(), st.none()),
    rigs=st.lists(names, min_size=0, max_size=30, unique=True),
    jobs=st.integers(0, 9),
    texts=st.lists(st.text(max_size=200), max_size=40),
    size=st.tuples(st.integers(40, 200), st.integers(10, 60)),
)
def test_whatever_is_told_fits_the_screen(
    channels: int,
    driven: int,
    values: list[float],
    fields: dict[str, Any],
    age_s: float | None,
    rigs: list[str],
    jobs: int,
    texts: list[str],
    size: tuple[int, int],
) -> None:
    observations = tuple(Channel(name=f"o{i}", unit="m", low=-1.0, high=1.0) for i in range(channels))
    actions = tuple(ActionChannel(name=f"a{i}", unit="m", low=-1.0, high=1.0, slew_per_s=1.0) for i in range(driven))
    timing = Timing(period_s=0.1, deadline_s=0.2, lease_s=0.2)
    scene = Scene(uptime_s=1.0)
    for name in rigs:
        rig = Rig(name=name, title="any", observations=observations, actions=actions, timing=timing)
        scene.rigs[name] = rig
        scene.states[name] = state(**fields, age_s=age_s, observation=values, action=values[::-1])
    scene.jobs = {number: job(job=number) for number in range(jobs)}
    scene.events.extend(event(n, why=text, who=text[:200], what=text[:200]) for n, text in enumerate(texts))
    width, height = size
    lines = drawn(scene, width, height)
    assert len(lines) <= height
    assert all(cell_len(line) <= width for line in lines)


def test_the_feed_moves_the_scene_between_two_questions(keeper: KeeperProcess) -> None:
    with Desk(keeper.settings.desk) as desk:
        follower = Follower(desk)
        follower.ask()
        assert follower.scene.rigs["cart"].title == "Cart on a track"
        assert [one.what for one in follower.scene.events] == ["rig-registered"]
        last = follower.scene.events[-1].event
        follower.hear(RigHealth(rig="cart", state={"mode": "latched"}))
        assert follower.scene.states["cart"]["mode"] == "latched"
        assert "in_service" in follower.scene.states["cart"]
        follower.hear(event(last + 1))
        follower.hear(event(last + 1))
        assert [one.event for one in follower.scene.events] == [last, last + 1]
        follower.scene.jobs[7] = job(state="queued", fraction=0.0)
        follower.hear(Progress(job=7, stage="clone", fraction=0.5))
        assert (follower.scene.jobs[7].state, follower.scene.jobs[7].fraction) == ("running", 0.5)


def test_a_dead_service_is_noted_and_its_return_too(keeper: KeeperProcess) -> None:
    with Desk(keeper.settings.desk, timeout_s=0.1) as desk:
        follower = Follower(desk)
        keeper.kill()
        follower.ask()
        assert follower.scene.silent_s > 0
        keeper.start()
        desk.timeout_s = 10.0
        follower.ask()
        assert follower.scene.silent_s == 0
        assert "cart" in follower.scene.states


def test_once_prints_and_returns(keeper: KeeperProcess) -> None:
    stream = io.StringIO()
    with Desk(keeper.settings.desk) as desk, Feed(keeper.settings.feed) as feed:
        watch(desk, feed, once=True, console=Console(file=stream, width=80))
    assert "cart" in stream.getvalue()
    assert "\x1b" not in stream.getvalue()
    with Desk("tcp://127.0.0.1:1", timeout_s=0.05) as desk, Feed("tcp://127.0.0.1:1") as feed, pytest.raises(LinkError):
        watch(desk, feed, once=True, console=Console(file=stream))


def test_an_interrupt_leaves_the_terminal_as_it_was(keeper: KeeperProcess) -> None:
    outer, inner = pty.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "nearhand.client.command", "watch", "--service", keeper.settings.desk],
        stdin=inner, stdout=inner, stderr=inner, env={**os.environ, "TERM": "xterm-256color"},
    )  # fmt: skip
    os.close(inner)
    said = b""

    def read_until(mark: bytes) -> None:
        nonlocal said
        end_s = time.monotonic() + 20
        while mark not in said and time.monotonic() < end_s and select.select([outer], [], [], 1.0)[0]:
            try:
                said += os.read(outer, 65536)
            except OSError:
                return

    try:
        read_until(b"rig-registered")
        assert b"\x1b[?1049h" in said
        process.send_signal(signal.SIGINT)
        read_until(b"\x1b[?1049l")
        assert process.wait(10) == 0
    finally:
        process.kill()
        process.wait()
        os.close(outer)
    assert said.rfind(b"\x1b[?25h") > said.rfind(b"\x1b[?25l")
    assert said.rfind(b"\x1b[?1049l") > said.rfind(b"\x1b[?1049h")
    assert b"Traceback" not in said
