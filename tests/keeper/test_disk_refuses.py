"""A database that may not be written for a while: each request is refused as such, and goes through afterwards."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, TypeVar

import pytest

from nearhand.service.bus.desk_messages import ListRigs, RigsReply
from nearhand.service.bus.message import ErrorReply
from nearhand.service.config import ServiceSettings
from nearhand.service.keeper.process import Keeper

if TYPE_CHECKING:
    from tests.keeper.conftest import Client, PretendedServer, Samples

Answer = TypeVar("Answer")


@pytest.fixture
def keeper_here(settings: ServiceSettings, server: PretendedServer) -> Iterator[Keeper]:
    """A keeper in this process."""
    made = Keeper(settings)
    yield made
    made.close()


def during(keeper: Keeper, ask: Callable[[], Answer]) -> Answer:
    """Turn the keeper until a client, in a thread of its own, has its answer."""
    answers: list[Answer] = []
    thread = threading.Thread(target=lambda: answers.append(ask()))
    thread.start()
    while thread.is_alive():
        keeper.turn()
        thread.join(0.001)
    return answers[0]


def turn_for(keeper: Keeper, most_s: float, until: Callable[[], bool]) -> None:
    """Turn the keeper until something holds."""
    end_s = time.monotonic() + most_s
    while not until() and time.monotonic() < end_s:
        keeper.turn()
        time.sleep(0.001)


def test_while_the_database_is_read_only_nothing_is_acknowledged(
    keeper_here: Keeper, client: Client, samples: Samples, server: PretendedServer
) -> None:
    """``PRAGMA query_only`` makes SQLite refuse every write with SQLITE_READONLY, as it does on a read-only disk."""
    during(keeper_here, client.put_rig)
    during(keeper_here, lambda: client.ack(samples.open("e1")))
    keeper_here.store.database.execute("PRAGMA query_only = ON")
    reply = during(keeper_here, lambda: client.intake(samples.chunk("e1", 0)))
    assert isinstance(reply, ErrorReply)
    assert (reply.code, reply.episode) == ("store.access", "e1")
    assert "cannot be written" in reply.message
    server.happen("trip", reason="gap")
    turn_for(keeper_here, 5.0, lambda: bool(keeper_here.ledger.counters["errors.store.access"] > 1))
    assert during(keeper_here, lambda: client.ask(ListRigs, RigsReply)).rigs[0]["rig"] == "yard-crane"
    keeper_here.store.database.execute("PRAGMA query_only = OFF")
    assert during(keeper_here, lambda: client.ack(samples.chunk("e1", 0))).durable == 1
    turn_for(keeper_here, 5.0, lambda: any(row.what == "trip" for row in keeper_here.store.events.after(0)))
    assert [row.what for row in keeper_here.store.events.after(0)].count("trip") == 1, "the trip was kept and came once"
