"""Desk requests about rigs, the service and its record."""

from __future__ import annotations

from typing import TYPE_CHECKING

import msgpack

from nearhand.service.bus.codec import decode
from nearhand.service.bus.desk_messages import (
    DESK_REPLIES,
    GetHealth,
    GetRig,
    HealthReply,
    ListEpisodes,
    ListRigs,
    ListVersions,
    PutRig,
    RigReply,
    RigsReply,
    VerifyEvents,
    VerifyReply,
    VersionsReply,
    Where,
    WhereReply,
)
from nearhand.service.bus.message import ErrorReply
from nearhand.service.rigs import rig_from_toml

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, KeeperProcess, Samples


def test_the_desk_tells_where_the_lanes_are(client: Client, keeper: KeeperProcess) -> None:
    reply = client.ask(Where, WhereReply)
    settings = keeper.settings
    assert (reply.action, reply.intake, reply.desk, reply.feed) == (
        settings.action, settings.intake, settings.desk, settings.feed,
    )  # fmt: skip


def test_a_rig_is_registered_once_and_its_changes_are_recorded(
    client: Client, keeper_thread: None, samples: Samples
) -> None:
    first = client.put_rig()
    rig = rig_from_toml(samples.rig_toml)
    assert (first.rig, first.digest, first.in_service) == ("yard-crane", rig.digest(), 0)
    assert first.description["timing"]["period_s"] == 0.05
    assert client.put_rig().digest == first.digest
    assert len(client.events()) == 1
    changed = client.put_rig(samples.gated_toml)
    assert changed.digest != first.digest
    assert client.ask(GetRig, RigReply, rig="yard-crane").digest == changed.digest
    assert [event["what"] for event in client.events()] == ["rig-registered", "rig-changed"]
    assert client.events()[1]["detail"] == {"digest": changed.digest, "previous": first.digest}
    assert [row["rig"] for row in client.ask(ListRigs, RigsReply).rigs] == ["yard-crane"]


def test_a_bad_description_is_refused_with_the_field_that_is_wrong(
    client: Client, keeper_thread: None, samples: Samples
) -> None:
    assert client.refused(PutRig, who="w", toml="name = ") == "config.toml"
    assert client.refused(PutRig, who="w", toml=samples.rig_toml.replace("period_s", "periode")) == "config.rig"
    nobody = msgpack.packb({"v": 1, "kind": "put-rig", "request": "r", "who": "", "toml": samples.rig_toml})
    reply = decode(client.raw("desk", nobody)[-1], DESK_REPLIES)
    assert isinstance(reply, ErrorReply)
    assert (reply.code, reply.request) == ("wire.fields", "r")
    assert client.ask(ListRigs, RigsReply).rigs == ()


def test_channels_with_episodes_on_them_stay(client: Client, keeper_thread: None, samples: Samples) -> None:
    client.put_rig()
    renamed = samples.rig_toml.replace('"swing"', '"sway"')
    client.put_rig(renamed)
    client.put_rig()
    client.record("e1")
    assert client.refused(PutRig, who="w", toml=renamed) == "conflict.channels"
    client.put_rig(samples.rig_toml.replace("high = 12.0", "high = 11.0"))


def test_names_that_are_not_there_say_so(client: Client, keeper_thread: None) -> None:
    assert client.refused(GetRig, rig="nobody") == "unknown.rig"
    assert client.refused(ListEpisodes, rig="nobody") == "unknown.rig"
    assert client.refused(ListVersions, rig="nobody") == "unknown.rig"
    client.put_rig()
    assert client.ask(ListVersions, VersionsReply, rig="yard-crane").versions == ()


def test_health_counts_and_the_record_verifies(client: Client, keeper_thread: None) -> None:
    client.put_rig()
    client.raw("desk", b"\xc1")
    health = client.ask(GetHealth, HealthReply)
    assert health.counters["desk.errors"] == health.counters["errors.wire.malformed"] == 1
    assert health.counters["desk.requests"] == 3
    assert health.rigs["yard-crane"]["in_service"] == 0
    assert health.action_server["reachable"] is False
    verdict = client.ask(VerifyEvents, VerifyReply)
    assert (verdict.intact, verdict.events) == (True, 1)


def test_it_starts_quickly_and_ends_cleanly(keeper: KeeperProcess, client: Client) -> None:
    client.put_rig()
    assert keeper.stop() == 0
    client.close()
    # A second is the promise on an idle machine; the machine of a test run may be busy.
    assert keeper.start() < 5
    assert client.ask(GetRig, RigReply, rig="yard-crane").rig == "yard-crane"


def test_a_damaged_database_ends_the_start_with_a_sentence(stopped_keeper: KeeperProcess, client: Client) -> None:
    stopped_keeper.settings.data.mkdir()
    stopped_keeper.settings.database.write_bytes(b"no database at all, but long enough to be looked at" * 20)
    try:
        stopped_keeper.start()
    except AssertionError as error:
        assert "store.damaged" in str(error)
    else:
        raise AssertionError("a damaged database must not be served")
    assert stopped_keeper.process is not None
    assert stopped_keeper.process.wait(10) == 1
    stopped_keeper.process = None
