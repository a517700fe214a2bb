"""Automatic stand-down: the rules by themselves, and a real service whose rig trips too often."""

from __future__ import annotations

import time
from collections import deque
from pathlib import Path

import numpy as np
import pytest

from nearhand.client.desk import Desk
from nearhand.client.link import RigLink
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.service.bus.desk_messages import (
    EventsReply,
    ListEvents,
    ListRigs,
    Rearm,
    Release,
    ReleaseReply,
    RigsReply,
    RigStateReply,
)
from nearhand.service.keeper.health import Look, broken_rule
from nearhand.service.policy.format import PolicyFile, write_policy
from nearhand.service.policy.network import Policy
from nearhand.service.rigs import Health, Rig
from nearhand.service.store.rigs import machine_digest
from nearhand.service.store.store import Store

PERIOD_S = 0.02


def looks(*rows: tuple[float, int, int, int, int]) -> deque[Look]:
    """Return what was counted: time, queries, interventions, trips, slow."""
    return deque(Look(*row) for row in rows)


@pytest.mark.parametrize(
    ("health", "last", "word"),
    [
        (Health(trips=2), (20.0, 1000, 0, 2, 0), ""),
        (Health(trips=2), (20.0, 1000, 0, 3, 0), "3 trips"),
        (Health(trips=0), (0.1, 5, 0, 1, 0), "1 trips"),
        (Health(interventions_per_minute=60), (20.0, 1000, 20, 0, 0), ""),  # 20 s driven: 60 a minute
        (Health(interventions_per_minute=60), (20.0, 1000, 21, 0, 0), "63 interventions"),
        (Health(interventions_per_minute=60), (20.0, 400, 400, 0, 0), ""),  # 8 s driven are too few to judge
        (Health(latency_s=0.01), (20.0, 1000, 0, 0, 10), ""),
        (Health(latency_s=0.01), (20.0, 1000, 0, 0, 11), "10 ms longer"),
        (Health(), (20.0, 1000, 1000, 99, 1000), ""),
    ],
)
def test_rules_are_broken_just_beyond_their_limits(
    health: Health, last: tuple[float, int, int, int, int], word: str
) -> None:
    broken = broken_rule(health, looks((0.0, 0, 0, 0, 0), last), PERIOD_S)
    assert (word in broken) if word else not broken


def test_one_look_judges_nothing() -> None:
    assert broken_rule(Health(trips=0), looks((0.0, 100, 50, 7, 0)), PERIOD_S) == ""


def test_a_version_that_trips_too_often_makes_room_for_the_one_before(tmp_path: Path) -> None:
    toml = """
name = "cart"
title = "cart"
observations = [{name = "position", unit = "m", low = -2.0, high = 2.0}]
actions = [{name = "push", unit = "m/s", low = -1.0, high = 1.0, slew_per_s = 10.0}]
timing = {period_s = 0.02, deadline_s = 0.1, lease_s = 0.06}
health = {trips = 1, window_s = 60.0}
"""
    rig = _stored(tmp_path / "data" / "nearhand.sqlite3", toml)
    with ServiceProcess(tmp_path / "data") as service, Desk(service.lanes["desk"]) as desk:
        for version in (1, 2):
            desk.ask(Release, ReleaseReply, version=version, who="ann", why="a test of health", override=True)
        trips = 0
        while _serving(desk) == 2:
            assert trips < 10
            _trip(desk, rig, service.lanes["action"])
            trips += 1
            end_s = time.monotonic() + 3.0
            while trips > 1 and _serving(desk) == 2 and time.monotonic() < end_s:
                time.sleep(0.05)
        assert _serving(desk) == 1 and 2 <= trips <= 5
        (back,) = [e for e in desk.ask(ListEvents, EventsReply, limit=500).events if e["what"] == "rollback"]
        assert back["who"] == "health rules" and "2 trips within 60 s" in back["why"]
        assert back["detail"]["previous"] == 2


def _stored(database: Path, toml: str) -> Rig:
    """Put a rig and two measured versions into a fresh database."""
    from nearhand.service.rigs import rig_from_toml

    rig = rig_from_toml(toml)
    store = Store(database)
    store.rigs.put(rig, toml, "w")
    one = np.ones(1, dtype=np.float32)
    for bias in (0.1, 0.2):
        policy = Policy((np.zeros((1, 1), np.float32),), (one * bias,), 0 * one, one, 0 * one, one, 0 * one)
        data = write_policy(PolicyFile(policy, "cart", ("position",), ("push",), "clone", {}, {}))
        row = store.versions.add(
            rig="cart", rig_digest=rig.digest(), name="clone", method="clone", policy=data, provenance={}
        )
        store.versions.add_measurement(
            row.version, {"figures": {}}, rig_digest=rig.digest(), machine_digest=machine_digest(rig)
        )
    store.close()
    return rig


def _serving(desk: Desk) -> int:
    return int(desk.ask(ListRigs, RigsReply).rigs[0]["in_service"])


def _trip(desk: Desk, rig: Rig, address: str) -> None:
    """Drive until armed, and fall silent for longer than the deadline."""
    with RigLink(rig, address) as link:
        end_s = time.monotonic() + 20.0
        while link.exchange(np.zeros(1)).mode != "armed":
            assert time.monotonic() < end_s
            desk.ask(Rearm, RigStateReply, rig="cart", who="ann", why="test")
        time.sleep(2 * rig.timing.deadline_s)
        assert link.exchange(np.zeros(1)).mode == "latched"
