"""A database that cannot grow: refused as such, nothing half done, and all is well once there is room."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, TypeVar

import pytest

from nearhand.service.bus.desk_messages import Release, ReleaseReply
from nearhand.service.bus.message import ErrorReply, Message
from nearhand.service.config import ServiceSettings
from nearhand.service.jobs.folder import JobFolder
from nearhand.service.keeper.process import Keeper
from nearhand.service.rigs import rig_from_toml
from nearhand.service.store.rigs import machine_digest
from nearhand.service.store.store import Store

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, PretendedServer, Samples

Answer = TypeVar("Answer")


class InProcess:
    """The keeper's parts, turned by hand, so that the database's size can be limited from within."""

    def __init__(self, settings: ServiceSettings) -> None:
        self.keeper = Keeper(settings)

    def limit(self, pages: int | None) -> None:
        """Let the database grow by so many pages of 4 KiB, or without limit."""
        database = self.keeper.store.database
        database.execute("PRAGMA wal_checkpoint(TRUNCATE)")
        most = 1_000_000_000 if pages is None else int(database.value("PRAGMA page_count")) + pages
        database.execute(f"PRAGMA max_page_count = {most}")

    def during(self, ask: Callable[[], Answer]) -> Answer:
        """Turn the keeper until a client, in a thread of its own, has its answer."""
        answers: list[Answer] = []
        thread = threading.Thread(target=lambda: answers.append(ask()))
        thread.start()
        while thread.is_alive():
            self.keeper.turn()
            thread.join(0.001)
        return answers[0]


@pytest.fixture
def keeper_here(settings: ServiceSettings, server: PretendedServer) -> Iterator[InProcess]:
    """A keeper in this process."""
    made = InProcess(settings)
    yield made
    made.keeper.close()


def code(reply: Message) -> str:
    assert isinstance(reply, ErrorReply), reply
    return reply.code


def test_a_chunk_that_finds_no_room_is_not_acknowledged(
    keeper_here: InProcess, client: Client, samples: Samples
) -> None:
    keeper_here.during(client.put_rig)
    keeper_here.during(lambda: client.ack(samples.open("e1")))
    keeper_here.during(lambda: client.ack(samples.chunk("e1", 0)))
    keeper_here.limit(1)
    big = samples.chunk("e1", 1, count=4000)
    reply = keeper_here.during(lambda: client.intake(big))
    assert (code(reply), getattr(reply, "episode", "")) == ("store.full", "e1")
    keeper_here.limit(None)
    assert keeper_here.during(lambda: client.ack(samples.open("e1"))).durable == 1
    assert keeper_here.during(lambda: client.ack(big)).durable == 2


def test_a_release_that_cannot_be_recorded_is_taken_back(
    settings: ServiceSettings, server: PretendedServer, client: Client, samples: Samples
) -> None:
    rig = rig_from_toml(samples.gated_toml)
    store = Store(settings.database)
    store.rigs.put(rig, samples.gated_toml, "w")
    store.versions.add(
        rig=rig.name, rig_digest="d", name="clone", method="clone", policy=samples.policy(1), provenance={}
    )
    figure = {"value": 0.1, "low": 0.0, "high": 0.1, "n": 9, "unit": "", "better": "low"}
    store.versions.add_measurement(
        1, {"figures": {"action error": figure}}, rig_digest="d", machine_digest=machine_digest(rig)
    )
    store.close()
    here = InProcess(settings)
    try:
        here.limit(0)
        reply = here.during(lambda: client.desk(Release, version=1, who="ann", why="\N{BUILDING CONSTRUCTION}" * 2000))
        assert code(reply) == "store.full"
        assert server.loads[-2:] == [("yard-crane", 1), ("yard-crane", 0)]
        assert here.keeper.store.versions.in_service("yard-crane") == 0
        assert here.keeper.store.releases.of_rig("yard-crane") == []
        assert here.keeper.store.events.after(0) == []
        here.limit(None)
        released = here.during(lambda: client.ask(Release, ReleaseReply, version=1, who="ann"))
        assert released.released
        assert here.keeper.store.versions.in_service("yard-crane") == 1
    finally:
        here.keeper.close()


def test_a_result_that_finds_no_room_is_taken_in_later(
    settings: ServiceSettings, server: PretendedServer, samples: Samples
) -> None:
    rig = rig_from_toml(samples.rig_toml)
    store = Store(settings.database)
    store.rigs.put(rig, samples.rig_toml, "w")
    job = store.jobs.begin(store.jobs.add("inspect", rig.name, {}, who="w", why="").job)
    store.close()
    folder = JobFolder(settings.jobs / "job-000001")
    folder.write_json("job.json", {"job": 1, "kind": "inspect", "rig": rig.model_dump(mode="json"), "options": {}})
    folder.write_json("result.json", {"state": "done", "result": {"words": "x" * 20_000}})
    here = InProcess(settings)
    try:
        here.limit(0)
        for _ in range(3):
            here.keeper.turn()
        assert here.keeper.store.jobs.get(job.job).state == "running"
        here.limit(None)
        here.keeper.turn()
        assert here.keeper.store.jobs.get(job.job).state == "done"
    finally:
        here.keeper.close()
