"""Keys at the door of every lane, roles at every request, over real sockets to a real service."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq

from nearhand.client.demos import DemonstrationStream
from nearhand.client.desk import Desk, Feed
from nearhand.client.link import RigLink
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages
from nearhand.service.bus.action_messages import Act, Hello, Reason
from nearhand.service.bus.codec import encode
from nearhand.service.bus.intake_messages import OpenEpisode
from nearhand.service.bus.keys import ClientKey, KeyFolder
from nearhand.service.bus.message import Message
from nearhand.service.bus.sockets import connect, make_socket
from nearhand.service.errors import NearhandError, RefusedError
from nearhand.service.rigs import rig_from_toml

Give = Callable[..., ClientKey]
Context = zmq.Context[zmq.Socket[bytes]]
CRANE = builtin_text("rigs", "crane")
WHO = {"who": "test", "why": "test"}


def ask_raw(context: Context, address: str, key: ClientKey | None, message: Message, wait_ms: int = 5000) -> Any:
    """Return the reply to one message as a map, or None if there is none."""
    with make_socket(context, zmq.DEALER, queue=10, role="connect") as socket:
        connect(socket, address, key)
        socket.send(encode(message))
        return msgpack.unpackb(socket.recv()) if socket.poll(wait_ms) else None


def wait_for(happened: Callable[[], Any], what: str, timeout_s: float = 5.0) -> Any:
    """Return the first true value of a look that is repeated."""
    end_s = time.monotonic() + timeout_s
    while time.monotonic() < end_s:
        if value := happened():
            return value
        time.sleep(0.02)
    raise AssertionError(f"{what}: not within {timeout_s} s")


def outcome(desk: Desk, request: Any, reply: Any, **fields: Any) -> str:
    """Return ``done`` or the code of the refusal."""
    try:
        desk.ask(request, reply, **fields)
    except NearhandError as error:
        return error.code
    return "done"


def test_without_a_key_or_with_a_foreign_one_nobody_gets_in(
    service: ServiceProcess, chief: ClientKey, context: Context, tmp_path: Path
) -> None:
    foreign = KeyFolder(tmp_path / "other").new("mallory", ["view", "drive", "teach", "release"], tmp_path / "m.key")
    stranger = foreign.model_copy(update={"service": chief.service})
    for key, part in ((None, "--key"), (stranger, "mallory")):
        with Desk(service.lanes["desk"], 5.0, key=key) as desk, pytest.raises(RefusedError, match=part) as caught:
            desk.ask(messages.ListRigs, messages.RigsReply)
        assert caught.value.code == "refused.key"
    hello = Hello(rig="crane", session="s", observations=("a",), actions=("b",), period_s=0.05)
    episode = OpenEpisode(episode="e", rig="crane", operator="o", started_utc="", observations=1, actions=1)
    for lane, message in (("action", hello), ("intake", episode)):
        for key in (None, stranger, foreign):
            assert ask_raw(context, service.lanes[lane], key, message, 200) is None
    with Desk(service.lanes["desk"], key=chief) as desk:
        turned_away = wait_for(
            lambda: [
                event
                for event in desk.ask(messages.ListEvents, messages.EventsReply).events
                if event["what"] == "request-refused" and event["detail"]["lane"] == "door"
            ],
            "the record of strangers",
        )
        assert turned_away[0]["who"] == "unknown key"


#: What each role may do at the desk, one request each; names that do not exist show that the door was passed.
DESK_REQUESTS: dict[str, tuple[Any, Any, dict[str, Any]]] = {
    "where": (messages.Where, messages.WhereReply, {}),
    "list-rigs": (messages.ListRigs, messages.RigsReply, {}),
    "get-health": (messages.GetHealth, messages.HealthReply, {}),
    "verify-events": (messages.VerifyEvents, messages.VerifyReply, {}),
    "put-rig": (messages.PutRig, messages.RigReply, {"toml": CRANE, **WHO}),
    "put-rig changed": (
        messages.PutRig,
        messages.RigReply,
        {"toml": CRANE.replace("title = ", 'title = "x" # '), **WHO},
    ),
    "start-job": (messages.StartJob, messages.JobReply, {"job_kind": "inspect", "rig": "none", **WHO}),
    "cancel-job": (messages.CancelJob, messages.JobReply, {"job": 99, **WHO}),
    "release": (messages.Release, messages.ReleaseReply, {"version": 99, **WHO}),
    "rollback": (messages.Rollback, messages.ReleaseReply, {"rig": "none", **WHO}),
    "stand-down": (messages.StandDown, messages.ReleaseReply, {"rig": "none", **WHO}),
    "rearm": (messages.Rearm, messages.RigStateReply, {"rig": "none", **WHO}),
    "halt": (messages.Halt, messages.RigStateReply, {"rig": "none", **WHO}),
}
ANYBODY = {"where", "halt"}
MAY = {
    "view": ANYBODY | {"list-rigs", "get-health", "verify-events"},
    "drive": ANYBODY | {"rearm"},
    "teach": ANYBODY | {"put-rig", "start-job", "cancel-job"},
    "release": ANYBODY | {"put-rig changed", "release", "rollback", "stand-down"},
}


def test_each_role_may_do_what_is_written_and_nothing_else(
    service: ServiceProcess, chief: ClientKey, give: Give, context: Context
) -> None:
    with Desk(service.lanes["desk"], key=chief) as desk:
        desk.ask(messages.PutRig, messages.RigReply, toml=CRANE, **WHO)
        keys = {role: give(f"only-{role}", role) for role in MAY}
        wait_for(lambda: outcome_of_key(service, keys["release"]) == "done", "the new keys")
        for role, key in keys.items():
            with Desk(service.lanes["desk"], key=key) as other:
                found = {what: outcome(other, *parts[:2], **parts[2]) for what, parts in DESK_REQUESTS.items()}
            allowed = MAY[role]
            if role == "release":  # a changed rig is put by who may both put rigs and change what is in service
                assert found["put-rig changed"] == "refused.role"
                allowed = allowed - {"put-rig changed"}
            assert {what for what, code in found.items() if not code.startswith("refused.")} == allowed, (role, found)
            assert {code for code in found.values() if code.startswith("refused.")} == {"refused.role"}
        both = give("both", "teach", "release")
        wait_for(lambda: outcome_of_key(service, both) == "done", "the new key")
        with Desk(service.lanes["desk"], key=both) as other:
            request, reply, fields = DESK_REQUESTS["put-rig changed"]
            assert outcome(other, request, reply, **fields) == "done"
        hello = Hello(rig="none", session="s", observations=("a",), actions=("b",), period_s=0.05)
        act = Act(rig="none", session="s", seq=7, sent_ns=1, obs=b"1234")
        episode = OpenEpisode(episode="e", rig="none", operator="o", started_utc="", observations=1, actions=1)
        for role, key in keys.items():
            for lane, message, wanted in (
                ("action", hello, "drive"), ("action", act, "drive"), ("intake", episode, "teach"),
            ):  # fmt: skip
                reply = ask_raw(context, service.lanes[lane], key, message)
                assert reply["code"] == ("unknown.rig" if role == wanted else "refused.role")
                assert message is not act or reply["seq"] == 7
        health = desk.ask(messages.GetHealth, messages.HealthReply)
        assert health.counters["refusals.desk"] > 20
        assert health.counters["refusals.intake"] == 3
        recorded = wait_for(
            lambda: (
                rows
                if len(rows := [e for e in desk.ask(messages.ListEvents, messages.EventsReply).events
                                if e["what"] == "request-refused"]) > 20
                and any(e["detail"]["lane"] == "action" for e in rows) else ()
            ),
            "the record of refusals",
        )  # fmt: skip
        assert {e["who"] for e in recorded} >= {f"only-{role}" for role in MAY}
        assert desk.ask(messages.VerifyEvents, messages.VerifyReply).intact


def outcome_of_key(service: ServiceProcess, key: ClientKey) -> str:
    """Return how a request that any key may make ends."""
    with Desk(service.lanes["desk"], 5.0, key=key) as desk:
        return outcome(desk, messages.Where, messages.WhereReply)


def test_the_record_names_the_key_behind_a_deed(service: ServiceProcess, chief: ClientKey) -> None:
    with Desk(service.lanes["desk"], key=chief) as desk:
        desk.ask(messages.PutRig, messages.RigReply, toml=CRANE, who="somebody else", why="test")
        events = desk.ask(messages.ListEvents, messages.EventsReply).events
    registered = next(event for event in events if event["what"] == "rig-registered")
    assert (registered["who"], registered["detail"]["key"]) == ("somebody else", "chief")


def test_a_revoked_key_is_out_of_every_lane_within_a_second(
    service: ServiceProcess, chief: ClientKey, give: Give, folder: KeyFolder, tmp_path: Path
) -> None:
    """Connections that stand are cut as well: a driven rig falls back, a subscriber hears no more."""
    rig = rig_from_toml(CRANE)
    ann = give("ann", "view", "drive", "teach")
    wait_for(lambda: outcome_of_key(service, ann) == "done", "the new key")
    with (
        Desk(service.lanes["desk"], key=chief) as desk,
        Desk(service.lanes["desk"], 2.0, key=ann) as hers,
        Feed(service.lanes["feed"], key=ann) as her_feed,
        Feed(service.lanes["feed"], key=chief) as feed,
        RigLink(rig, service.lanes["action"], key=ann, wait_s=2.0) as link,
        DemonstrationStream(rig, service.lanes["intake"], tmp_path / "spool", key=ann) as stream,
    ):
        desk.ask(messages.PutRig, messages.RigReply, toml=CRANE, **WHO)
        halt = (messages.Halt, messages.RigStateReply)
        wait_for(lambda: outcome(desk, *halt, rig="crane", **WHO) == "done", "the action server's knowledge of the rig")
        observation = np.zeros(len(rig.observations), dtype=np.float32)
        wait_for(lambda: link.exchange(observation).fresh, "an answer to the rig")
        wait_for(lambda: deed_is_heard(desk, her_feed), "the feed")
        folder.revoke("ann")
        end_s = time.monotonic() + 1.0
        wait_for(lambda: outcome(hers, messages.Where, messages.WhereReply) == "refused.key", "the desk", 1.0)
        wait_for(lambda: Reason.LINK & link.exchange(observation).reasons, "the action lane", 1.0)
        recording = stream.open("ann")
        for row in range(3):
            recording.add(0.05 * row, observation, np.zeros(len(rig.actions), dtype=np.float32))
        recording.close("success", observation)
        wait_for(lambda: any("no longer" in d.reason for d in stream.deliveries().values()), "the intake lane", 3.0)
        assert [delivery.state for delivery in stream.deliveries().values()] == ["waiting"], "the spool keeps it"
        while (left_s := end_s - time.monotonic()) > 0 or her_feed.receive(0.0) is not None:
            her_feed.receive(max(0.0, left_s))
        stream.close(timeout_s=0.0)
        wait_for(lambda: deed_is_heard(desk, feed), "the feed of a key in force")
        assert her_feed.receive(0.3) is None


def deed_is_heard(desk: Desk, feed: Feed) -> bool:
    """Do something that the feed tells of, and return whether it was heard there."""
    desk.ask(messages.Halt, messages.RigStateReply, rig="crane", **WHO)
    return feed.receive(0.1) is not None


def test_a_damaged_table_lets_in_nobody_until_it_is_put_right(
    service: ServiceProcess, chief: ClientKey, folder: KeyFolder
) -> None:
    text = folder.table_file.read_text()
    with Desk(service.lanes["desk"], 10.0, key=chief) as desk, Desk(service.lanes["desk"], key=chief) as newcomer:
        assert outcome(desk, messages.Where, messages.WhereReply) == "done"
        folder.table_file.write_text("[[key]]\nname = ")
        wait_for(lambda: outcome(desk, messages.Where, messages.WhereReply) == "refused.key", "the damage")
        folder.table_file.write_text(text)
        wait_for(lambda: outcome(desk, messages.Where, messages.WhereReply) == "done", "the repair")
        assert outcome(newcomer, messages.Where, messages.WhereReply) == "done", "it has gone on trying"


def test_with_keys_any_address_may_be_bound(tmp_path: Path, chief: ClientKey) -> None:
    with (
        ServiceProcess(tmp_path / "data", "--host", "0.0.0.0") as service,
        Desk(service.lanes["desk"].replace("0.0.0.0", "127.0.0.1"), key=chief) as desk,
    ):
        assert service.lanes["desk"].startswith("tcp://0.0.0.0:")
        assert desk.lanes().feed == service.lanes["feed"].replace("0.0.0.0", "127.0.0.1")
