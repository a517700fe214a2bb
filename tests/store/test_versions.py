"""Versions are immutable, one per rig is in service, and the way back leads back."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from pathlib import Path

import pytest

from nearhand.service.errors import ConfigError, StoreError, UnknownNameError
from nearhand.service.policy.format import read_policy, sha256
from nearhand.service.rigs import rig_from_toml
from nearhand.service.store.rigs import machine_digest
from nearhand.service.store.store import Store

Make = Callable[[int], bytes]


@pytest.fixture
def versions(stocked: Store, make_policy_bytes: Make) -> list[int]:
    """Three drafted versions of the crane."""
    return [
        stocked.versions.add(
            rig="yard-crane", rig_digest="d", name="clone", method="clone", policy=make_policy_bytes(seed),
            provenance={"seed": seed},
        ).version
        for seed in range(3)
    ]  # fmt: skip


def put(store: Store, what: str, version: int, previous: int) -> None:
    store.releases.add(what, rig="yard-crane", version=version, previous=previous, who="w", why="")


def test_a_version_comes_out_as_it_went_in(stocked: Store, versions: list[int], make_policy_bytes: Make) -> None:
    row = stocked.versions.get(versions[1])
    data = stocked.versions.policy(versions[1])
    assert data == make_policy_bytes(1)
    assert row.sha256 == sha256(data)
    assert read_policy(data, expected_sha256=row.sha256).extra == {"seed": 1}
    assert (row.state, row.provenance, row.parent) == ("drafted", {"seed": 1}, None)


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE versions SET policy = x'00' WHERE version = 1",
        "UPDATE versions SET provenance = '{}' WHERE version = 1",
        "DELETE FROM versions WHERE version = 1",
    ],
)
def test_the_database_itself_keeps_versions_as_they_are(stocked: Store, versions: list[int], statement: str) -> None:
    with pytest.raises(StoreError) as caught:
        stocked.database.execute(statement)
    assert caught.value.code == "store.constraint"


def test_a_policy_changed_on_disk_is_found(stocked: Store, versions: list[int], tmp_path: Path) -> None:
    other = sqlite3.connect(tmp_path / "nearhand.sqlite3")
    other.execute("DROP TRIGGER versions_keep_their_content")
    other.execute("UPDATE versions SET policy = CAST(policy || x'00' AS BLOB) WHERE version = ?", (versions[0],))
    other.commit()
    other.close()
    with pytest.raises(StoreError, match="SHA-256"):
        stocked.versions.policy(versions[0])


def test_only_one_version_of_a_rig_is_in_service(stocked: Store, versions: list[int]) -> None:
    put(stocked, "release", versions[0], 0)
    with pytest.raises(StoreError) as caught:
        stocked.versions.set_state(versions[1], "in-service")
    assert caught.value.code == "store.constraint"
    put(stocked, "release", versions[1], versions[0])
    assert [row.state for row in stocked.versions.of_rig("yard-crane")] == ["stood-down", "in-service", "drafted"]
    assert stocked.versions.in_service("yard-crane") == versions[1]


def test_the_way_back_never_returns_to_what_was_just_left(stocked: Store, versions: list[int]) -> None:
    one, two, three = versions
    before = stocked.releases.before
    assert before("yard-crane", 0) == 0
    put(stocked, "release", one, 0)
    assert before("yard-crane", one) == 0
    put(stocked, "release", two, one)
    put(stocked, "release", three, two)
    assert before("yard-crane", three) == two
    put(stocked, "rollback", two, three)
    assert before("yard-crane", two) == one
    put(stocked, "rollback", one, two)
    assert before("yard-crane", one) == 0
    put(stocked, "release", three, one)
    assert before("yard-crane", three) == one
    put(stocked, "stand-down", 0, three)
    assert before("yard-crane", 0) == three
    assert stocked.releases.was_in_service("yard-crane", two)


def test_a_measurement_measures(stocked: Store, versions: list[int]) -> None:
    content = {"version": versions[0], "figures": {"action error": {"value": 0.1, "low": 0.05, "high": 0.2}}}
    for seed in (1, 2):
        stocked.versions.add_measurement(versions[0], {**content, "seed": seed}, rig_digest="d", machine_digest="m")
    latest = stocked.versions.measurement(versions[0])
    assert latest is not None
    assert latest.content == {**content, "seed": 2}
    assert stocked.versions.get(versions[0]).state == "measured"
    assert stocked.versions.measurement(versions[1]) is None
    put(stocked, "release", versions[0], 0)
    stocked.versions.add_measurement(versions[0], content, rig_digest="d", machine_digest="m")
    assert stocked.versions.get(versions[0]).state == "in-service"


def test_numbers_of_versions_are_never_used_again(stocked: Store, versions: list[int], make_policy_bytes: Make) -> None:
    with pytest.raises(LookupError), stocked.database.atomic():
        stocked.versions.add(
            rig="yard-crane", rig_digest="d", name="n", method="m", policy=make_policy_bytes(9), provenance={}
        )
        raise LookupError
    assert len(stocked.versions.of_rig("yard-crane")) == 3
    with pytest.raises(UnknownNameError):
        stocked.versions.get(99)


def test_a_rig_keeps_every_description_that_it_had(stocked: Store, rig_toml: str) -> None:
    same = rig_from_toml(rig_toml)
    assert not stocked.rigs.put(same, rig_toml, "w")
    changed = rig_toml.replace("0.6", "0.5")
    assert stocked.rigs.put(rig_from_toml(changed), changed, "somebody else")
    stored = stocked.rigs.get("yard-crane")
    assert stored.rig == rig_from_toml(changed)
    assert stored.digest == stored.rig.digest() == stocked.rigs.digests()["yard-crane"]
    history = stocked.rigs.history("yard-crane")
    assert [(digest, who) for digest, _, who in history] == [
        (same.digest(), "an operator"),
        (stored.digest, "somebody else"),
    ]


def test_a_measurement_depends_on_the_machine_not_on_its_title_or_gate(rig_toml: str) -> None:
    original = rig_from_toml(rig_toml)
    gated = rig_from_toml(rig_toml.replace("stone yard", "yard") + '[[gate]]\nfigure = "f"\nat_most = 1.0\n')
    slower = rig_from_toml(rig_toml.replace("slew_per_s = 2.0", "slew_per_s = 1.0"))
    assert gated.digest() != original.digest()
    assert machine_digest(gated) == machine_digest(original) != machine_digest(slower)


def test_jobs_keep_what_was_asked_and_how_it_ended(stocked: Store) -> None:
    job = stocked.jobs.add("distil", "yard-crane", {"recipe": {"seed": 1}}, who="w", why="y")
    assert (job.state, job.options) == ("queued", {"recipe": {"seed": 1}})
    assert stocked.jobs.begin(job.job).state == "running"
    ended = stocked.jobs.end(job.job, "failed", code="learn.failed", message="m", result={"code": "learn.failed"})
    assert (ended.state, ended.code, ended.result) == ("failed", "learn.failed", {"code": "learn.failed"})
    assert [row.job for row in stocked.jobs.in_state("failed", "queued")] == [job.job]
    assert [row.job for row in stocked.jobs.newest("yard-crane")] == [job.job]
    assert stocked.jobs.newest("other") == []
    with pytest.raises(ConfigError, match="JSON"):
        stocked.jobs.add("distil", "yard-crane", {"recipe": b"bytes"}, who="w", why="y")
