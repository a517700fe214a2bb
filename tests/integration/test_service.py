"""The service as a whole: start, stop, restart of its parts, bad input on every lane."""

from __future__ import annotations

import json
import os
import random
import subprocess
import sys
from pathlib import Path

import msgpack
import pytest
import zmq

from nearhand.client.desk import Desk
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus.codec import MAX_FRAME_BYTES
from nearhand.service.bus.desk_messages import (
    EpisodeReply,
    EventsReply,
    GetEpisode,
    GetHealth,
    GetJob,
    GetVersion,
    HealthReply,
    JobReply,
    ListEvents,
    ListRigs,
    PutRig,
    RigReply,
    RigsReply,
    VerifyEvents,
    VerifyReply,
    VersionReply,
    Where,
    WhereReply,
)
from nearhand.service.errors import ConfigError, NearhandError

ACTION_SERVER = "nearhand.service.action.process"
KEEPER = "nearhand.service.keeper.process"
NEARHAND = [sys.executable, "-m", "nearhand.client.command"]
Context = zmq.Context[zmq.Socket[bytes]]


def put_crane(desk: Desk) -> None:
    """Register the crane."""
    desk.ask(PutRig, RigReply, toml=builtin_text("rigs", "crane"), who="test")


def test_the_desk_tells_where_the_lanes_are(service: ServiceProcess, desk: Desk) -> None:
    where = desk.ask(Where, WhereReply)
    assert {lane: getattr(where, lane) for lane in ("action", "intake", "desk", "feed")} == {
        lane: service.lanes[lane] for lane in ("action", "intake", "desk", "feed")
    }


@pytest.mark.parametrize("module", [ACTION_SERVER, KEEPER])
def test_a_killed_process_is_restarted_and_nothing_is_lost(service: ServiceProcess, desk: Desk, module: str) -> None:
    put_crane(desk)
    before = desk.ask(ListEvents, EventsReply).events
    service.await_restart(module, service.kill(module))
    assert [rig["rig"] for rig in desk.ask(ListRigs, RigsReply).rigs] == ["crane"]
    assert desk.ask(ListEvents, EventsReply).events[: len(before)] == before
    assert desk.ask(VerifyEvents, VerifyReply).intact


def test_a_second_service_on_the_same_folder_is_refused(service: ServiceProcess, tmp_path: Path) -> None:
    words = [*NEARHAND, "serve", "--data", str(tmp_path / "data"), "--pick-ports"]
    second = subprocess.run(words, capture_output=True, text=True, timeout=30, check=False)
    assert second.returncode == 1
    assert "in use by another service" in second.stderr


def test_sigterm_ends_all_processes_and_the_data_can_be_used_again(tmp_path: Path) -> None:
    with ServiceProcess(tmp_path / "data") as first, Desk(first.lanes["desk"]) as desk:
        put_crane(desk)
        children = [first.process_number(module) for module in (ACTION_SERVER, KEEPER)]
    for number in children:
        with pytest.raises(ProcessLookupError):
            os.kill(number, 0)
    with ServiceProcess(tmp_path / "data") as second, Desk(second.lanes["desk"]) as desk:
        assert [rig["rig"] for rig in desk.ask(ListRigs, RigsReply).rigs] == ["crane"]


def hostile_frames() -> list[bytes]:
    """Return frames that no lane may accept, and none may fall over."""
    generator = random.Random(5)
    act = {"v": 1, "kind": "act", "rig": "crane", "session": "s", "seq": 1, "sent_ns": 1, "obs": b"1234"}
    return [
        b"",
        b"\xc1",
        msgpack.packb([1, 2, 3]),
        msgpack.packb({"v": 1, "kind": "no-such-kind"}),
        msgpack.packb({**act, "v": 99}),
        msgpack.packb({**act, "obs": b"1"}),
        msgpack.packb({**act, "seq": -1}),
        msgpack.packb({**act, "rig": "../../etc"}),
        msgpack.packb({**act, "surplus": 1}),
        msgpack.packb(act)[:-3],
        b"\x81" * 3000,
        b"\xdd\xff\xff\xff\xff",
        *(generator.randbytes(generator.randrange(1, 200)) for _ in range(50)),
    ]


@pytest.mark.parametrize("lane", ["action", "intake", "desk"])
def test_every_bad_frame_gets_an_error_reply(service: ServiceProcess, desk: Desk, context: Context, lane: str) -> None:
    put_crane(desk)
    with context.socket(zmq.DEALER) as socket:
        socket.connect(service.lanes[lane])
        for frame in hostile_frames():
            socket.send(frame)
            assert socket.poll(5_000), f"no reply to {frame[:40]!r}"
            reply = msgpack.unpackb(socket.recv())
            assert reply["kind"] == "error"
            assert "." in reply["code"]
            assert reply["message"]
    health = desk.ask(GetHealth, HealthReply)
    assert "crane" in health.rigs


def test_an_oversized_frame_harms_nobody_else(service: ServiceProcess, desk: Desk, context: Context) -> None:
    put_crane(desk)
    for lane in ("action", "intake", "desk"):
        with context.socket(zmq.DEALER) as socket:
            socket.connect(service.lanes[lane])
            socket.send(bytes(MAX_FRAME_BYTES + 1))
            assert not socket.poll(200)
    assert [rig["rig"] for rig in desk.ask(ListRigs, RigsReply).rigs] == ["crane"]


def test_a_wrong_rig_description_is_named_and_not_kept(desk: Desk) -> None:
    for text, part in (("name = ", "TOML"), ('name = "x"', "observations"), ("a" * 1000, "TOML")):
        with pytest.raises(ConfigError, match=part):
            desk.ask(PutRig, RigReply, toml=text, who="test")
    assert desk.ask(ListRigs, RigsReply).rigs == ()


def test_unknown_names_are_said_to_be_unknown(desk: Desk) -> None:

    for request, reply, fields in (
        (GetEpisode, EpisodeReply, {"episode": "nobody"}),
        (GetVersion, VersionReply, {"version": 99}),
        (GetJob, JobReply, {"job": 99}),
    ):
        with pytest.raises(NearhandError) as caught:
            desk.ask(request, reply, **fields)
        assert caught.value.code.startswith("unknown.")


def test_watch_prints_the_health_as_json(service: ServiceProcess, desk: Desk) -> None:
    put_crane(desk)
    words = [*NEARHAND, "watch", "--json", "--service", service.lanes["desk"]]
    answer = subprocess.run(words, capture_output=True, text=True, timeout=30, check=True)
    assert "crane" in json.loads(answer.stdout)["rigs"]
