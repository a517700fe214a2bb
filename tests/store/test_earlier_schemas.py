"""Every earlier schema with data that its own release wrote: brought up to date, nothing lost, nothing changed.

``schemas/schema_N.sql`` is the text of a database that the release with schema N has written, as sqlite3's
``iterdump`` gives it.
"""

from __future__ import annotations

import sqlite3
from pathlib import Path
from typing import Any

import pytest

from nearhand.service.store.check import check_database
from nearhand.service.store.database import Database
from nearhand.service.store.migrations import MIGRATIONS, migrate
from nearhand.service.store.store import Store

SCHEMAS = Path(__file__).parent / "schemas"
NEWEST = MIGRATIONS[-1].number
EARLIER = list(range(1, NEWEST))


def loaded(path: Path, number: int) -> sqlite3.Connection:
    """Return a connection to a fresh database with an earlier schema's data."""
    connection = sqlite3.connect(path)
    connection.executescript((SCHEMAS / f"schema_{number}.sql").read_text(encoding="utf-8"))
    return connection


def content(connection: sqlite3.Connection) -> dict[str, tuple[list[str], list[tuple[Any, ...]]]]:
    """Return table → column names and sorted rows."""
    found = {}
    tables = connection.execute("SELECT name FROM sqlite_master WHERE type = 'table' AND name NOT LIKE 'sqlite_%'")
    for (table,) in tables.fetchall():
        columns = [row[1] for row in connection.execute(f"PRAGMA table_info({table})")]
        found[table] = columns, sorted(connection.execute(f"SELECT * FROM {table}").fetchall(), key=repr)
    return found


def test_there_is_data_of_every_earlier_schema() -> None:
    assert [number for number in EARLIER if not (SCHEMAS / f"schema_{number}.sql").is_file()] == []


@pytest.mark.parametrize("number", EARLIER)
def test_real_data_survives_the_way_up(number: int, tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    connection = loaded(path, number)
    before = content(connection)
    connection.close()
    assert all(before[table][1] for table in ("rigs", "episodes", "chunks", "versions", "releases", "events", "jobs"))
    Store(path).close()
    connection = sqlite3.connect(path)
    after = content(connection)
    assert connection.execute("SELECT max(number) FROM migrations").fetchone() == (NEWEST,)
    for table, (columns, rows) in before.items():
        if table == "migrations":
            continue
        chosen = [after[table][0].index(column) for column in columns]
        assert sorted((tuple(row[k] for k in chosen) for row in after[table][1]), key=repr) == rows, table
    connection.close()
    assert [found for found in check_database(path) if found.fault] == []


@pytest.mark.parametrize("number", EARLIER)
def test_the_way_up_ends_where_a_fresh_database_begins(number: int, tmp_path: Path) -> None:
    loaded(tmp_path / "old.sqlite3", number).close()
    shapes = []
    for name in ("old.sqlite3", "fresh.sqlite3"):
        database = Database(tmp_path / name)
        migrate(database)
        rows = database.rows("SELECT name, sql FROM sqlite_master WHERE name NOT LIKE 'sqlite_%' ORDER BY name")
        shapes.append({row["name"]: " ".join(str(row["sql"]).split()) for row in rows})
        database.close()
    assert shapes[0] == shapes[1]


@pytest.mark.parametrize("number", EARLIER)
def test_it_goes_on_working_after_the_way_up(number: int, tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    loaded(path, number).close()
    store = Store(path)
    rig = store.rigs.names()[0]
    episodes = [store.episodes.load(row) for row in store.episodes.closed(rig)]
    assert all(len(episode.observations) == len(episode.actions) + 1 for episode in episodes)
    assert store.versions.policy(store.versions.in_service(rig))
    store.events.append("looked", who="test")
    assert store.events.verify().intact
    store.close()
