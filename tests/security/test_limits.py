"""Each limit is configurable and has its error; slow, half-open and silent peers cost bounded memory."""

from __future__ import annotations

import socket as sockets
from collections.abc import Callable
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import msgpack
import numpy as np
import pytest
import zmq
from hypothesis import given
from hypothesis import strategies as st

from nearhand.client.demos import DemonstrationStream
from nearhand.client.desk import Desk
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages
from nearhand.service.bus.codec import decode_map, encode
from nearhand.service.bus.intake_messages import OpenEpisode
from nearhand.service.bus.limits import Limits, read_limits
from nearhand.service.clock import MonotonicClock
from nearhand.service.errors import ConfigError, NearhandError, WireError
from nearhand.service.keeper.meter import MOST_CLIENTS, Meter
from nearhand.service.rigs import rig_from_toml

Context = zmq.Context[zmq.Socket[bytes]]
CRANE = builtin_text("rigs", "crane")
KEEPER = "nearhand.service.keeper.process"


def crane(name: str) -> str:
    """Return the crane's TOML under another name."""
    return CRANE.replace('name = "crane"', f'name = "{name}"', 1)


class SetClock:
    """A clock that is set by hand."""

    def __init__(self) -> None:
        self.now = 0

    def now_ns(self) -> int:
        """Return the time that was set."""
        return self.now


def test_limits_are_read_from_toml_and_a_wrong_one_is_named(tmp_path: Path) -> None:
    path = tmp_path / "limits.toml"
    path.write_text("depth = 5\nrequests_per_s = 50\n")
    assert read_limits(path) == Limits(depth=5, requests_per_s=50.0)
    for text, part in (
        ("depths = 5", "depths"),
        ("depth = 1", "depth"),
        ("depth = ", "limits.toml"),
        ("\xff", "depth"),
    ):
        path.write_text(text, encoding="latin-1")
        if text == "\xff":
            part = "limits.toml"
        with pytest.raises(ConfigError, match=part) as caught:
            read_limits(path)
        assert caught.value.code == "config.limits"


@pytest.mark.parametrize(
    ("limits", "value", "code"),
    [
        (Limits(frame_bytes=65_536), {"a": bytes(65_536)}, "wire.oversized"),
        (Limits(text_bytes=4_096), {"a": "x" * 4_097}, "wire.malformed"),
        (Limits(items=300), {"a": [0] * 301}, "wire.malformed"),
        (Limits(items=300), {str(k): k for k in range(301)}, "wire.malformed"),
        (Limits(depth=4), {"a": [{"b": [[0]]}]}, "wire.depth"),
    ],
)
def test_each_limit_of_a_message_has_its_error(limits: Limits, value: Any, code: str) -> None:
    frame = msgpack.packb(value)
    assert decode_map(frame)
    with pytest.raises(WireError) as caught:
        decode_map(frame, limits)
    assert caught.value.code == code


@given(depth=st.integers(1, 40), most=st.integers(4, 30), maps=st.booleans())
def test_depth_is_counted_as_maps_and_lists_within_each_other(depth: int, most: int, maps: bool) -> None:
    value: Any = 0
    for _ in range(depth - 1):
        value = {"a": value} if maps else [value]
    frame = msgpack.packb({"a": value})
    if depth > most:
        with pytest.raises(WireError):
            decode_map(frame, Limits(depth=most))
    else:
        assert decode_map(frame, Limits(depth=most))


@given(st.lists(st.tuples(st.integers(0, 400_000_000), st.sampled_from([b"a", b"b"])), max_size=200))
def test_in_no_second_more_than_twice_the_rate_passes(arrivals: list[tuple[int, bytes]]) -> None:
    """A bucket that holds one second's worth passes at most rate · (1 + t) requests in any t seconds."""
    clock, rate = SetClock(), 5.0
    meter = Meter(rate, clock)
    passed: dict[bytes, list[int]] = {b"a": [], b"b": []}
    for pause_ns, client in arrivals:
        clock.now += pause_ns
        if meter.admits(client):
            passed[client].append(clock.now)
    for times in passed.values():
        for first, begin in enumerate(times):
            within = [now for now in times[first:] if now <= begin + 1_000_000_000]
            assert len(within) <= 2 * rate


def test_the_meter_forgets_and_stays_small() -> None:
    meter = Meter(1.0, MonotonicClock())
    for k in range(5 * MOST_CLIENTS):
        assert meter.admits(str(k).encode())
    assert len(meter._left) == MOST_CLIENTS


@pytest.fixture
def limited(tmp_path: Path) -> Callable[[str], ServiceProcess]:
    """A function that starts a service with limits."""

    def start(text: str) -> ServiceProcess:
        (tmp_path / "data").mkdir()
        (tmp_path / "data" / "limits.toml").write_text(text)
        return ServiceProcess(tmp_path / "data")

    return start


def code_of(ask: Callable[[], Any]) -> str:
    """Return the code of what is refused, or ``done``."""
    try:
        ask()
    except NearhandError as error:
        return error.code
    return "done"


def test_rigs_jobs_episodes_and_stored_bytes_are_limited(
    limited: Callable[[str], ServiceProcess], context: Context, tmp_path: Path
) -> None:
    rig = rig_from_toml(CRANE)
    with (
        limited("rigs = 2\nopen_episodes = 2\nwaiting_jobs = 1\nstored_bytes = 1000000\n") as service,
        Desk(service.lanes["desk"]) as desk,
    ):
        puts = [
            code_of(lambda name=name: desk.ask(messages.PutRig, messages.RigReply, toml=crane(name), who="t"))  # type: ignore[misc]
            for name in ("crane", "second", "third", "second")
        ]
        assert puts == ["done", "done", "refused.rigs", "done"]
        with context.socket(zmq.DEALER) as lane:
            lane.connect(service.lanes["intake"])
            kinds = []
            for k in (1, 2, 3, 2):
                lane.send(
                    encode(
                        OpenEpisode(
                            episode=f"e{k}", rig="crane", operator="o", started_utc="",
                            observations=len(rig.observations), actions=len(rig.actions),
                        )
                    )
                )  # fmt: skip
                assert lane.poll(5_000)
                reply = msgpack.unpackb(lane.recv())
                kinds.append(reply.get("code", reply["kind"]))
            assert kinds == ["ack", "ack", "refused.open_episodes", "ack"], "taking one up again is no new one"
            lane.send(msgpack.packb({"v": 1, "kind": "discard-episode", "episode": "e1"}))
            assert lane.poll(5_000)
        with DemonstrationStream(rig, service.lanes["intake"], tmp_path / "spool") as stream:
            recording = stream.open("ann")
            row = np.zeros(len(rig.observations), dtype=np.float32), np.zeros(len(rig.actions), dtype=np.float32)
            for step in range(40_000):
                recording.add(0.05 * step, *row)
            recording.close("success", row[0])
            (delivery,) = stream.flush(0.1).values()
            while "stored_bytes" not in delivery.reason:
                (delivery,) = stream.flush(0.1).values()
            assert delivery.state == "waiting"
            assert 0 < delivery.acknowledged < 40_000
            stream.close(timeout_s=0.0)
        size = sum(path.stat().st_size for path in (tmp_path / "data").glob("nearhand.sqlite3"))
        assert size < 1_000_000 + 4_000_000
        start = {"job_kind": "inspect", "rig": "crane", "who": "t"}
        codes = {code_of(lambda: desk.ask(messages.StartJob, messages.JobReply, **start)) for _ in range(3)}
        assert "refused.jobs" in codes or "done" not in codes


def test_the_rate_of_one_client_is_limited_and_the_others_go_on(
    limited: Callable[[str], ServiceProcess], context: Context
) -> None:
    with limited("requests_per_s = 20.0\n") as service, Desk(service.lanes["desk"]) as desk:
        with context.socket(zmq.DEALER) as greedy:
            greedy.connect(service.lanes["desk"])
            for k in range(16):
                greedy.send(encode(messages.ListRigs(request=f"r{k}")))
                assert greedy.poll(5_000)
                assert msgpack.unpackb(greedy.recv())["kind"] == "rigs-reply"
            codes = []
            for k in range(40):
                greedy.send(encode(messages.ListRigs(request=f"s{k}")))
                assert greedy.poll(5_000)
                codes.append(msgpack.unpackb(greedy.recv()).get("code"))
            assert codes.count("refused.rate") > 10
            assert set(codes) == {None, "refused.rate"}
        desk.ask(messages.ListRigs, messages.RigsReply)
        assert desk.ask(messages.GetHealth, messages.HealthReply).counters["refusals.rate"] == codes.count(
            "refused.rate"
        )


def resident_bytes(number: int) -> int:
    """Return the resident memory of a process (proc(5): VmRSS)."""
    for line in Path(f"/proc/{number}/status").read_text(encoding="ascii").splitlines():
        if line.startswith("VmRSS:"):
            return 1024 * int(line.split()[1])
    raise AssertionError("no VmRSS")


def test_half_open_and_silent_peers_cost_little_and_hold_nobody_up(limited: Callable[[str], ServiceProcess]) -> None:
    """Connections that say nothing, or half of ZMTP's greeting (ZeroMQ RFC 23: 64 bytes), or a frame without an end."""
    with limited("") as service, Desk(service.lanes["desk"]) as desk:
        numbers = [service.process_number(name) for name in (KEEPER, "nearhand.service.action.process")]
        desk.ask(messages.GetHealth, messages.HealthReply)
        before = [resident_bytes(number) for number in numbers]
        held = []
        begun = [
            b"",
            b"\xff\x00\x00\x00",
            b"\xff" + bytes(8) + b"\x7f\x03\x00NULL",
            b"GET / HTTP/1.1\r\n\r\n",
            b"\x7f" * 500,
        ]
        for lane in ("action", "intake", "desk", "feed"):
            parts = urlsplit(service.lanes[lane])
            assert parts.hostname is not None
            for k in range(60):
                peer = sockets.create_connection((parts.hostname, parts.port), timeout=5.0)
                peer.sendall(begun[k % len(begun)])
                held.append(peer)
        for _ in range(5):
            desk.ask(messages.GetHealth, messages.HealthReply)
        grown = [resident_bytes(number) - old for number, old in zip(numbers, before, strict=True)]
        for peer in held:
            peer.close()
        assert max(grown) < 240 * 100_000, "well under 100 kB each"
        assert [service.process_number(name) for name in (KEEPER, "nearhand.service.action.process")] == numbers


def test_a_client_that_asks_and_does_not_read_costs_bounded_memory(
    limited: Callable[[str], ServiceProcess], context: Context, tmp_path: Path
) -> None:
    rig = rig_from_toml(CRANE)
    with limited("") as service, Desk(service.lanes["desk"]) as desk:
        desk.ask(messages.PutRig, messages.RigReply, toml=CRANE, who="t")
        with DemonstrationStream(rig, service.lanes["intake"], tmp_path / "spool") as stream:
            recording = stream.open("ann")
            row = np.zeros(len(rig.observations), dtype=np.float32), np.zeros(len(rig.actions), dtype=np.float32)
            for step in range(20_000):
                recording.add(0.05 * step, *row)
            recording.close("success", row[0])
            (delivery,) = stream.flush(30.0).values()
            assert delivery.state == "closed"
        reply = encode(desk.ask(messages.GetEpisode, messages.EpisodeReply, episode=recording.episode))
        number = service.process_number(KEEPER)
        before = resident_bytes(number)
        with context.socket(zmq.DEALER) as lazy:
            lazy.setsockopt(zmq.RCVHWM, 1)
            lazy.setsockopt(zmq.RCVBUF, 4096)
            lazy.connect(service.lanes["desk"])
            for k in range(200):
                lazy.send(encode(messages.GetEpisode(request=f"r{k}", episode=recording.episode)))
            for _ in range(20):
                desk.ask(messages.GetHealth, messages.HealthReply)
            grown = resident_bytes(number) - before
        assert grown < 60 * len(reply), "not the 200 that were asked for"
        assert service.process_number(KEEPER) == number


def test_a_client_that_asks_fast_and_reads_gets_every_reply(
    limited: Callable[[str], ServiceProcess], context: Context
) -> None:
    """The queue of replies is short, and the library learns late that it has emptied: none may be dropped for that."""
    with limited("") as service, context.socket(zmq.DEALER) as quick:
        quick.connect(service.lanes["desk"])
        for k in range(2_000):
            quick.send(b"\xc1" if k % 2 else encode(messages.Where(request=f"r{k}")))
            assert quick.poll(5_000), k
            assert msgpack.unpackb(quick.recv())["kind"] == ("error" if k % 2 else "where-reply")
