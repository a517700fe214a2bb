"""Curation: decisions are recorded and change no sample; a training set never changes and never holds other uses."""

from __future__ import annotations

import sqlite3
from typing import TYPE_CHECKING, Any

import pytest

from nearhand.service.bus.curation_messages import Curate, CurationReply, ListSets, SaveSet, SetsReply
from nearhand.service.bus.desk_messages import EpisodeReply, GetEpisode, StartJob
from nearhand.service.config import ServiceSettings
from nearhand.service.errors import StoreError
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.keeper.job_files import _given, chosen_episodes, decisions, write_job
from nearhand.service.store.curation import Member, set_digest
from nearhand.service.store.store import Store

if TYPE_CHECKING:
    from pathlib import Path

    from tests.keeper.conftest import Client, KeeperProcess


@pytest.fixture
def stocked(keeper: KeeperProcess, client: Client) -> Client:
    """A client of a keeper with seven episodes by one operator: a0, a2, a4 and a6 train, a1 is held out."""
    client.put_rig()
    for index in range(7):
        client.record(f"a{index}", operator="ann", seed=index)
    return client


def decide(client: Client, *episodes: str, **wishes: Any) -> CurationReply:
    return client.ask(
        Curate, CurationReply, rig="yard-crane", episodes=episodes, who="ann", why="looked at it", **wishes
    )


def save(client: Client, name: str, *episodes: str) -> dict[str, Any]:
    (found,) = client.ask(SaveSet, SetsReply, rig="yard-crane", name=name, episodes=episodes, who="ann", why="w").sets
    return dict(found)


def test_decisions_are_events_and_the_samples_stay(stocked: Client) -> None:
    before = stocked.ask(GetEpisode, EpisodeReply, episode="a0")
    (row,) = decide(stocked, "a0", start_s=0.1, weight=2.5, tag=("windy", "calm")).episodes
    assert (row["start_s"], row["end_s"], row["weight"], tuple(row["tags"])) == (0.1, None, 2.5, ("calm", "windy"))
    (row,) = decide(stocked, "a0", untag=("calm",), excluded=True).episodes
    assert (row["excluded"], row["weight"], tuple(row["tags"])) == (True, 2.5, ("windy",))
    after = stocked.ask(GetEpisode, EpisodeReply, episode="a0")
    assert (before.times, before.obs, before.act) == (after.times, after.obs, after.act)
    events = stocked.events("curated")
    assert [(item["who"], item["why"]) for item in events] == [("ann", "looked at it")] * 2
    assert events[1]["detail"]["before"]["excluded"] is False
    assert events[1]["detail"]["after"]["excluded"] is True


def test_a_decision_is_for_all_its_episodes_or_none(stocked: Client) -> None:
    wishes: dict[str, Any] = {"rig": "yard-crane", "who": "ann", "why": "w"}
    assert stocked.refused(Curate, episodes=("a0", "nowhere"), weight=2.0, **wishes) == "unknown.episode"
    assert stocked.refused(Curate, episodes=("a0",), start_s=1e6, **wishes) == "conflict.trim"
    assert stocked.refused(Curate, episodes=("a0",), start_s=0.3, end_s=0.2, **wishes) == "conflict.trim"
    assert stocked.events("curated") == []


def test_a_set_holds_training_episodes_alone_and_never_changes(stocked: Client) -> None:
    decide(stocked, "a4", excluded=True)
    decide(stocked, "a2", weight=3.0)
    saved = save(stocked, "first")
    assert [item["episode"] for item in saved["members"]] == ["a0", "a2", "a6"]
    wishes: dict[str, Any] = {"rig": "yard-crane", "who": "ann"}
    assert stocked.refused(SaveSet, name="first", **wishes) == "conflict.set"
    assert stocked.refused(SaveSet, name="bad", episodes=("a1",), **wishes) == "conflict.split"
    assert stocked.refused(SaveSet, name="bad", episodes=("a3",), **wishes) == "conflict.split"
    assert stocked.refused(SaveSet, name="bad", episodes=("a4",), **wishes) == "conflict.excluded"
    decide(stocked, "a2", weight=1.0)
    (again,) = stocked.ask(ListSets, SetsReply, rig="yard-crane").sets
    assert again == saved
    assert save(stocked, "second")["sha256"] != saved["sha256"]
    assert stocked.events("set-saved")[0]["detail"]["sha256"] == saved["sha256"]


def test_the_database_itself_refuses_other_uses(
    stocked: Client, keeper: KeeperProcess, settings: ServiceSettings
) -> None:
    save(stocked, "first")
    assert keeper.stop() == 0
    store = Store(settings.database)
    held_out = store.episodes.get("a1")
    assert held_out.split == "held-out"
    member = Member("a1", store.curation.of("a1"), store.curation.content_digest(held_out))
    with pytest.raises(StoreError, match="training episodes of its rig only"):
        store.curation.save_set("yard-crane", "smuggled", [member], who="w", why="w")
    assert [row.name for row in store.curation.sets("yard-crane")] == ["first"]
    members = store.curation.members("yard-crane", "first")
    assert set_digest(members) == store.curation.get_set("yard-crane", "first").sha256
    store.close()
    connection = sqlite3.connect(settings.database)
    for statement in (
        "UPDATE episodes SET split = 'train' WHERE episode = 'a1'",
        "UPDATE training_sets SET sha256 = 'x'",
        "DELETE FROM training_sets",
        "UPDATE training_set_members SET weight = 9",
        "DELETE FROM training_set_members",
        "INSERT INTO training_set_members VALUES ('yard-crane', 'first', 99, 'a4', 0, NULL, 1, 'x')",
    ):
        with pytest.raises(sqlite3.IntegrityError):
            connection.execute(statement)
    connection.close()


def test_a_job_sees_trims_and_weights_and_names_its_set(
    stocked: Client, keeper: KeeperProcess, settings: ServiceSettings, tmp_path: Path
) -> None:
    whole = len(stocked.ask(GetEpisode, EpisodeReply, episode="a0").act) // 4
    times_s = stocked.ask(GetEpisode, EpisodeReply, episode="a0").times
    assert len(times_s) == 8 * whole
    decide(stocked, "a0", weight=2.0, start_s=0.06)
    decide(stocked, "a2", excluded=True)
    saved = save(stocked, "first")
    decide(stocked, "a0", weight=1.0, start_s=0.0, excluded=True)
    assert (
        stocked.refused(
            StartJob, job_kind="distil", rig="yard-crane", who="ann", options={"recipe": {}, "set": "nowhere"}
        )
        == "unknown.set"
    )
    assert keeper.stop() == 0
    store = Store(settings.database)
    job = store.jobs.add("distil", "yard-crane", {"set": "first"}, who="ann", why="")
    folder = JobFolder(tmp_path / "job")
    write_job(store, job, folder, "nowhere")
    seen = {item.episode: item for item in folder.read_episodes()}
    assert {name for name, item in seen.items() if item.split == "train"} == {"a0", "a4", "a6"}
    assert not any(item.split == "held-out" for item in seen.values())
    assert seen["a0"].weight == 2.0
    assert seen["a0"].length == whole - 2
    original = store.episodes.load(store.episodes.get("a0"))
    assert seen["a0"].actions.tobytes() == original.actions[2:].tobytes()
    assert len(seen["a0"].observations) == seen["a0"].length + 1
    assert folder.read_json("job.json")["given"]["set"] == {"name": "first", "sha256": saved["sha256"]}
    plain = store.jobs.add("distil", "yard-crane", {}, who="ann", why="")
    rows = chosen_episodes(store, plain)
    assert "a0" not in {row.episode for row in rows}
    assert _given(rows, decisions(store, plain))["episodes"]["train"] == 2
    store.close()
