"""Releases: the gate decides, the action server acts first, the record says why, and the way back works."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import pytest

from nearhand.service.bus.desk_messages import (
    GetRig,
    GetVersion,
    ListVersions,
    Release,
    ReleaseReply,
    RigReply,
    Rollback,
    StandDown,
    VerifyEvents,
    VerifyReply,
    VersionReply,
    VersionsReply,
)
from nearhand.service.config import ServiceSettings
from nearhand.service.rigs import rig_from_toml
from nearhand.service.store.rigs import machine_digest
from nearhand.service.store.store import Store

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, KeeperProcess, PretendedServer, Samples

#: The gate of the gated crane asks for an action error of at most 0.2 at the unfavourable end.
GOOD, ALSO_GOOD, BAD, DRAFTED = 1, 2, 3, 4


def figures(high: float) -> dict[str, Any]:
    return {
        "figures": {
            "action error": {"value": high / 2, "low": 0.0, "high": high, "n": 12, "unit": "m/s2", "better": "low"}
        }
    }


@pytest.fixture
def versions(settings: ServiceSettings, samples: Samples) -> Samples:
    """Two good versions, a bad one and an unmeasured one, stored before the keeper starts."""
    rig = rig_from_toml(samples.gated_toml)
    store = Store(settings.database)
    store.rigs.put(rig, samples.gated_toml, "an operator")
    for number, high in ((GOOD, 0.1), (ALSO_GOOD, 0.15), (BAD, 0.9), (DRAFTED, None)):
        row = store.versions.add(
            rig=rig.name, rig_digest=rig.digest(), name="clone", method="clone", policy=samples.policy(number),
            provenance={},
        )  # fmt: skip
        assert row.version == number
        if high is not None:
            store.versions.add_measurement(
                number, figures(high), rig_digest=rig.digest(), machine_digest=machine_digest(rig)
            )
    store.close()
    return samples


@pytest.fixture
def desk(versions: Samples, server: PretendedServer, keeper_thread: None, client: Client) -> Client:
    """A client of a keeper with those versions and a server that has taken the rig in."""
    server.wait_for(lambda it: ("yard-crane", 0) in it.loads)
    server.loads.clear()
    return client


def release(client: Client, version: int, **fields: Any) -> ReleaseReply:
    return client.ask(Release, ReleaseReply, version=version, who="ann", **fields)


def states(client: Client) -> list[str]:
    return [str(row["state"]) for row in client.ask(ListVersions, VersionsReply, rig="yard-crane").versions]


def test_a_version_that_passes_acts_and_is_recorded(desk: Client, server: PretendedServer) -> None:
    reply = release(desk, GOOD, why="first", expected_in_service=0)
    assert (reply.released, reply.version, reply.previous) == (True, GOOD, 0)
    assert [bound["met"] for bound in reply.bounds] == [True]
    assert server.loads == [("yard-crane", GOOD)]
    assert states(desk)[0] == "in-service"
    assert desk.ask(GetRig, RigReply, rig="yard-crane").in_service == GOOD
    (event,) = desk.events("release")
    assert (event["who"], event["why"], event["detail"]["version"]) == ("ann", "first", GOOD)
    assert event["detail"]["sha256"] == desk.ask(GetVersion, VersionReply, version=GOOD).sha256


def test_a_version_that_fails_is_refused_and_says_why(desk: Client, server: PretendedServer) -> None:
    reply = release(desk, BAD)
    assert not reply.released
    assert [bound["met"] for bound in reply.bounds] == [False]
    assert reply.message
    shown = desk.ask(GetVersion, VersionReply, version=BAD)
    assert (shown.state, shown.refusal) == ("measured", reply.message)
    assert server.loads == []
    (event,) = desk.events("refused")
    assert event["detail"]["version"] == BAD
    assert event["detail"]["bounds"][0]["met"] is False


def test_an_override_needs_a_reason_and_is_recorded(desk: Client) -> None:
    assert desk.refused(Release, version=BAD, who="ann", override=True, why="  ") == "refused.override_reason"
    reply = release(desk, BAD, override=True, why="only on the test stand")
    assert reply.released
    (event,) = desk.events("release")
    assert (event["why"], event["detail"]["override"]) == ("only on the test stand", True)
    assert desk.ask(GetVersion, VersionReply, version=BAD).refusal == ""


def test_an_override_of_a_gate_that_is_passed_is_no_override(desk: Client) -> None:
    assert release(desk, GOOD, override=True, why="in a hurry").released
    assert desk.events("release")[0]["detail"]["override"] is False


def test_what_the_state_forbids_is_a_conflict(desk: Client, server: PretendedServer) -> None:
    assert desk.refused(Release, version=DRAFTED, who="ann", override=True, why="w") == "conflict.not_measured"
    assert desk.refused(Release, version=99, who="ann") == "unknown.version"
    assert desk.refused(Release, version=GOOD, who="ann", expected_in_service=ALSO_GOOD) == "conflict.in_service"
    assert desk.refused(StandDown, rig="yard-crane", who="ann") == "conflict.in_service"
    assert desk.refused(Rollback, rig="yard-crane", who="ann") == "conflict.nothing_before"
    assert desk.refused(Rollback, rig="yard-crane", who="ann", version=GOOD) == "conflict.never_in_service"
    release(desk, GOOD)
    assert desk.refused(Release, version=GOOD, who="ann") == "conflict.in_service"
    assert desk.refused(Rollback, rig="yard-crane", who="ann", version=GOOD) == "conflict.in_service"
    assert server.loads == [("yard-crane", GOOD)]


def test_a_rig_without_a_gate_releases_nothing_by_itself(desk: Client, samples: Samples) -> None:
    desk.put_rig(samples.rig_toml)
    reply = release(desk, GOOD)
    assert not reply.released
    assert "no gate" in reply.message
    assert release(desk, GOOD, override=True, why="trying out").released


def test_a_measurement_of_another_machine_does_not_count(desk: Client, samples: Samples) -> None:
    desk.put_rig(samples.gated_toml.replace("slew_per_s = 2.0", "slew_per_s = 1.0"))
    reply = release(desk, GOOD)
    assert not reply.released
    assert "measure again" in reply.message
    # Another title or another gate is not another machine.
    desk.put_rig(samples.gated_toml.replace("at_most = 0.2", "at_most = 0.12").replace("stone yard", "yard"))
    assert release(desk, GOOD).released
    assert not release(desk, ALSO_GOOD).released


def test_the_way_back_and_down(desk: Client, server: PretendedServer) -> None:
    release(desk, GOOD)
    assert release(desk, ALSO_GOOD, expected_in_service=GOOD).previous == GOOD
    back = desk.ask(Rollback, ReleaseReply, rig="yard-crane", who="ben", why="it swings")
    assert (back.released, back.version, back.previous) == (True, GOOD, ALSO_GOOD)
    assert states(desk)[:2] == ["in-service", "stood-down"]
    assert desk.refused(Rollback, rig="yard-crane", who="ben") == "conflict.nothing_before"
    assert desk.ask(Rollback, ReleaseReply, rig="yard-crane", who="ben", version=ALSO_GOOD).version == ALSO_GOOD
    down = desk.ask(StandDown, ReleaseReply, rig="yard-crane", who="ben")
    assert (down.version, down.previous) == (0, ALSO_GOOD)
    assert desk.ask(Rollback, ReleaseReply, rig="yard-crane", who="ben").version == ALSO_GOOD
    assert server.loads == [("yard-crane", v) for v in (GOOD, ALSO_GOOD, GOOD, ALSO_GOOD, 0, ALSO_GOOD)]
    assert [event["what"] for event in desk.events("release", "rollback", "stand-down")] == [
        "release", "release", "rollback", "rollback", "stand-down", "rollback",
    ]  # fmt: skip
    assert desk.ask(VerifyEvents, VerifyReply).intact


def test_nothing_changes_while_the_server_is_away_or_refuses(desk: Client, server: PretendedServer) -> None:
    server.refuse = "policy.format"
    assert desk.refused(Release, version=GOOD, who="ann") == "policy.format"
    server.silent = True
    assert desk.refused(Release, version=GOOD, who="ann") == "link.action_server"
    server.stop()
    assert desk.refused(Release, version=GOOD, who="ann") == "link.action_server"
    assert desk.ask(GetRig, RigReply, rig="yard-crane").in_service == 0
    assert states(desk) == ["measured", "measured", "measured", "drafted"]
    assert desk.events("release") == []
    server.silent = False
    server.begin_life("life-2")
    server.wait_for(lambda it: it.loads == [("yard-crane", 0)])
    assert release(desk, GOOD).released


def test_what_is_in_service_survives_both_processes(
    versions: Samples, server: PretendedServer, keeper: KeeperProcess, client: Client
) -> None:
    server.wait_for(lambda it: ("yard-crane", 0) in it.loads)
    release(client, GOOD)
    keeper.kill()
    client.close()
    server.begin_life("life-2")
    keeper.start()
    server.wait_for(lambda it: it.loads == [("yard-crane", GOOD)])
    assert client.ask(GetRig, RigReply, rig="yard-crane").in_service == GOOD


def test_a_version_is_shown_with_its_file_on_request(desk: Client, samples: Samples) -> None:
    shown = desk.ask(GetVersion, VersionReply, version=GOOD, with_policy=True)
    assert shown.policy == samples.policy(GOOD)
    assert shown.measurement == figures(0.1)
    assert desk.ask(GetVersion, VersionReply, version=GOOD).policy is None


def test_measuring_again_until_the_gate_opens_does_not_open_it(
    versions: Samples, settings: ServiceSettings, server: PretendedServer, keeper: KeeperProcess, client: Client
) -> None:
    keeper.stop()
    store = Store(settings.database)
    rig = store.rigs.get("yard-crane").rig
    for high in (0.01, 0.3, 0.02):  # as chance may have it, on other start states
        store.versions.add_measurement(GOOD, figures(high), rig_digest=rig.digest(), machine_digest=machine_digest(rig))
    store.close()
    client.close()
    keeper.start()
    reply = client.ask(Release, ReleaseReply, version=GOOD, who="ann")
    assert not reply.released
    assert "measurement 5" in reply.message and "0.3" in reply.message


def test_a_measurement_of_a_machine_that_has_changed_since_counts_no_more(
    versions: Samples, settings: ServiceSettings, server: PretendedServer, keeper: KeeperProcess, client: Client
) -> None:
    keeper.stop()
    store = Store(settings.database)
    rig = store.rigs.get("yard-crane").rig
    store.versions.add_measurement(GOOD, figures(0.9), rig_digest="old", machine_digest="of another machine")
    store.versions.add_measurement(GOOD, figures(0.1), rig_digest=rig.digest(), machine_digest=machine_digest(rig))
    store.close()
    client.close()
    keeper.start()
    assert client.ask(Release, ReleaseReply, version=GOOD, who="ann").released
