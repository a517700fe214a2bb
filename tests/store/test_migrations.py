"""The schema's steps: from nothing, from any prefix, never from the future."""

from __future__ import annotations

from pathlib import Path

import pytest

from nearhand.service.errors import StoreError
from nearhand.service.store.database import Database
from nearhand.service.store.migrations import MIGRATIONS, Migration, migrate, schema_number
from nearhand.service.store.store import Store

STEPS = (
    Migration(1, "one", ("CREATE TABLE one (a INTEGER) STRICT",)),
    Migration(2, "two", ("CREATE TABLE two (a INTEGER) STRICT", "INSERT INTO one VALUES (2)")),
    Migration(3, "three", ("ALTER TABLE two ADD COLUMN b TEXT",)),
)


@pytest.fixture
def database(tmp_path: Path):  # type: ignore[no-untyped-def]
    """An empty database."""
    opened = Database(tmp_path / "n.sqlite3")
    yield opened
    opened.close()


def shape(database: Database) -> list[tuple[str, str]]:
    return [(row["name"], row["sql"]) for row in database.rows("SELECT name, sql FROM sqlite_master ORDER BY name")]


def test_the_steps_are_numbered_without_gaps() -> None:
    assert [step.number for step in MIGRATIONS] == list(range(1, len(MIGRATIONS) + 1))


def test_an_empty_file_gets_every_table(database: Database) -> None:
    assert schema_number(database) == 0
    assert migrate(database) == MIGRATIONS[-1].number
    tables = {name for name, sql in shape(database) if sql and sql.startswith("CREATE TABLE")}
    assert {"rigs", "episodes", "chunks", "versions", "jobs", "measurements", "releases", "events"} <= tables
    assert database.rows("PRAGMA foreign_key_check") == []


def test_migrating_again_changes_nothing(database: Database) -> None:
    migrate(database)
    before = shape(database)
    migrate(database)
    assert shape(database) == before
    assert database.value("SELECT count(*) FROM migrations") == len(MIGRATIONS)


@pytest.mark.parametrize("prefix", range(len(STEPS) + 1))
def test_every_prefix_leads_to_the_same_schema(prefix: int, tmp_path: Path, database: Database) -> None:
    migrate(database, STEPS)
    other = Database(tmp_path / "other.sqlite3")
    migrate(other, STEPS[:prefix])
    assert schema_number(other) == prefix
    migrate(other, STEPS)
    assert shape(other) == shape(database)
    assert other.value("SELECT a FROM one") == 2
    other.close()


def test_a_failing_step_is_undone_as_a_whole(database: Database) -> None:
    broken = (
        STEPS[0],
        Migration(2, "broken", ("CREATE TABLE two (a INTEGER) STRICT", "INSERT INTO nowhere VALUES (1)")),
    )
    with pytest.raises(StoreError, match="nowhere"):
        migrate(database, broken)
    assert schema_number(database) == 1
    assert "two" not in dict(shape(database))
    migrate(database, STEPS)
    assert schema_number(database) == 3


def test_a_newer_schema_is_refused_and_left_as_it_is(tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    Store(path).close()
    newer = Database(path)
    newer.execute("INSERT INTO migrations VALUES (?, 'from the future', '')", (MIGRATIONS[-1].number + 1,))
    newer.close()
    with pytest.raises(StoreError, match="newer release") as caught:
        Store(path)
    assert caught.value.code == "store.newer_schema"


def test_the_store_opens_in_a_folder_that_it_makes(tmp_path: Path) -> None:
    Store(tmp_path / "a" / "b" / "nearhand.sqlite3").close()
    assert (tmp_path / "a" / "b" / "nearhand.sqlite3").is_file()
