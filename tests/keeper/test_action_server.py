"""The keeper beside an action server that comes, goes, stays silent, refuses and starts again."""

from __future__ import annotations

from typing import TYPE_CHECKING

import zmq

from nearhand.service.bus.codec import decode
from nearhand.service.bus.desk_messages import (
    GetHealth,
    Halt,
    HealthReply,
    PutRig,
    Rearm,
    RigStateReply,
    VerifyEvents,
    VerifyReply,
)
from nearhand.service.bus.feed_messages import FEED_MESSAGES, Event, RigHealth
from nearhand.service.bus.message import Message
from nearhand.service.config import ServiceSettings

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, KeeperProcess, PretendedServer, Samples


def await_server(client: Client) -> None:
    """Wait until the keeper has heard of the server."""
    client.until(lambda reply: bool(reply.action_server["reachable"]), GetHealth, HealthReply)


def test_a_new_rig_is_loaded_before_put_rig_is_answered(
    server: PretendedServer, keeper_thread: None, client: Client
) -> None:
    await_server(client)
    client.put_rig()
    assert server.loads == [("yard-crane", 0)]
    client.put_rig()
    assert server.loads == [("yard-crane", 0)]


def test_a_description_that_the_server_refuses_is_not_stored(
    server: PretendedServer, keeper_thread: None, client: Client, samples: Samples
) -> None:
    await_server(client)
    server.refuse = "config.rig"
    assert client.refused(PutRig, who="w", toml=samples.rig_toml) == "config.rig"
    assert client.events() == []
    client.put_rig()


def test_a_server_that_comes_later_gets_what_it_missed(
    server: PretendedServer, keeper_thread: None, client: Client
) -> None:
    server.stop()
    client.put_rig()
    server.begin_life("life-2")
    server.wait_for(lambda it: it.loads == [("yard-crane", 0)])


def test_a_new_life_of_the_server_is_loaded_again(server: PretendedServer, keeper_thread: None, client: Client) -> None:
    client.put_rig()
    server.wait_for(lambda it: ("yard-crane", 0) in it.loads)
    server.begin_life("life-2")
    server.wait_for(lambda it: it.loads == [("yard-crane", 0)])
    client.until(lambda reply: reply.action_server["instance"] == "life-2", GetHealth, HealthReply)


def test_a_load_that_is_wrong_at_the_server_is_put_right(
    server: PretendedServer, keeper_thread: None, client: Client
) -> None:
    client.put_rig()
    server.wait_for(lambda it: ("yard-crane", 0) in it.loads)
    server.loads.clear()
    server.states["yard-crane"]["version"] = 7
    server.wait_for(lambda it: it.loads == [("yard-crane", 0)])


def test_occurrences_become_events_exactly_once(server: PretendedServer, keeper: KeeperProcess, client: Client) -> None:
    client.put_rig()
    for number in range(3):
        server.happen("trip", reason="gap", number=number)
    server.wait_for(lambda it: it.drained_after[-1:] == [3])
    keeper.kill()
    client.close()
    server.happen("armed")
    server.drained_after.clear()
    keeper.start()
    server.wait_for(lambda it: 4 in it.drained_after)
    assert server.drained_after[0] == 0, "a fresh keeper asks for everything that is remembered"
    trips = client.events("trip", "armed")
    assert [event["detail"].get("number") for event in trips] == [0, 1, 2, None]
    assert {event["who"] for event in trips} == {"action-server"}
    server.begin_life("life-2")
    server.happen("trip", reason="novel", number=0)
    client.until(lambda reply: reply.action_server["instance"] == "life-2", GetHealth, HealthReply)
    server.wait_for(lambda it: it.drained_after[-1:] == [1])
    assert len(client.events("trip")) == 4
    assert client.ask(VerifyEvents, VerifyReply).intact


def test_a_server_that_starts_again_at_once_loses_no_occurrence(
    server: PretendedServer, keeper_thread: None, client: Client
) -> None:
    client.put_rig()
    for life in range(1, 13):
        for _ in range(4):
            server.happen("trip")
        server.wait_for(lambda it: it.drained_after[-1:] >= [4])
        # The new life has fewer occurrences than the old one, and forgets those that are passed over.
        server.drained_after.clear()
        server.begin_life(f"life-{life + 1}", "armed", "latched")
        server.wait_for(lambda it: 2 in it.drained_after)
        assert len(client.events("armed")) == len(client.events("latched")) == life
    assert client.ask(VerifyEvents, VerifyReply).intact


def test_arming_and_halting_are_relayed_and_recorded(
    server: PretendedServer, keeper_thread: None, client: Client
) -> None:
    client.put_rig()
    server.wait_for(lambda it: "yard-crane" in it.states)
    armed = client.ask(Rearm, RigStateReply, rig="yard-crane", who="ann", why="checked the hook")
    assert (armed.mode, armed.version) == ("armed", 0)
    assert client.ask(GetHealth, HealthReply).rigs["yard-crane"]["mode"] == "armed"
    halted = client.ask(Halt, RigStateReply, rig="yard-crane", who="ben", why="somebody in the bay")
    assert halted.mode == "latched"
    recorded = [(event["what"], event["who"], event["why"]) for event in client.events("rearm", "halt")]
    assert recorded == [("rearm", "ann", "checked the hook"), ("halt", "ben", "somebody in the bay")]
    assert client.refused(Rearm, rig="nobody", who="ann") == "unknown.rig"


def test_a_silent_or_absent_server_is_told_and_nothing_is_recorded(
    server: PretendedServer, keeper_thread: None, client: Client
) -> None:
    client.put_rig()
    server.wait_for(lambda it: "yard-crane" in it.states)
    server.silent = True
    assert client.refused(Halt, rig="yard-crane", who="ann") == "link.action_server"
    server.stop()
    assert client.refused(Halt, rig="yard-crane", who="ann") == "link.action_server"
    assert client.events("halt") == []
    client.record("e1")


def test_the_feed_tells_of_events_and_of_changed_rigs(
    server: PretendedServer, keeper_thread: None, client: Client, settings: ServiceSettings, context: object
) -> None:
    assert isinstance(context, zmq.Context)
    feed = context.socket(zmq.SUB)
    feed.setsockopt(zmq.LINGER, 0)
    feed.subscribe(b"")
    feed.connect(settings.feed)
    client.put_rig()
    server.wait_for(lambda it: "yard-crane" in it.states)
    seen: list[Message] = []
    while not {"event", "rig-health"} <= {message.kind for message in seen}:
        # A subscriber hears nothing until its subscription has arrived: make something happen until it does.
        client.ask(Halt, RigStateReply, rig="yard-crane", who="ann")
        client.ask(Rearm, RigStateReply, rig="yard-crane", who="ann")
        while feed.poll(150):
            topic, frame = feed.recv_multipart()
            seen.append(decode(frame, FEED_MESSAGES))
            assert topic.decode() == seen[-1].kind
    feed.close()
    events = [message for message in seen if isinstance(message, Event)]
    assert {event.what for event in events} <= {"rig-registered", "halt", "rearm"}
    states = [message.state for message in seen if isinstance(message, RigHealth)]
    assert all(state["mode"] in ("armed", "latched") for state in states)


def test_health_shows_the_servers_view(server: PretendedServer, keeper_thread: None, client: Client) -> None:
    client.put_rig()
    reply = client.until(lambda it: "mode" in it.rigs["yard-crane"], GetHealth, HealthReply)
    assert reply.rigs["yard-crane"] == {"mode": "latched", "version": 0, "reasons": 2048, "in_service": 0}
    assert reply.action_server == {"reachable": True, "instance": "life-1", "counters": {"queries": 7}}
