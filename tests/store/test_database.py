"""Transactions, durability settings and the translation of the database's errors."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.service.errors import StoreError
from nearhand.service.store.database import Database


@pytest.fixture
def database(tmp_path: Path):  # type: ignore[no-untyped-def]
    """A database with one table of numbers."""
    opened = Database(tmp_path / "numbers.sqlite3", busy_timeout_s=0.05)
    opened.execute("CREATE TABLE numbers (number INTEGER PRIMARY KEY, text TEXT) STRICT")
    yield opened
    opened.close()


def numbers(database: Database) -> list[int]:
    return [row["number"] for row in database.rows("SELECT number FROM numbers ORDER BY number")]


def test_the_settings_that_make_it_durable_are_in_force(database: Database) -> None:
    assert database.value("PRAGMA journal_mode") == "wal"
    assert database.value("PRAGMA synchronous") == 2  # FULL, per the SQLite manual
    assert database.value("PRAGMA foreign_keys") == 1


def test_an_inner_block_fails_alone(database: Database) -> None:
    with database.atomic():
        database.execute("INSERT INTO numbers VALUES (1, '')")
        with pytest.raises(LookupError, match="inner"), database.atomic():
            database.execute("INSERT INTO numbers VALUES (2, '')")
            raise LookupError("inner")
        database.execute("INSERT INTO numbers VALUES (3, '')")
    assert numbers(database) == [1, 3]


def test_an_outer_block_takes_its_inner_ones_along(database: Database) -> None:
    with pytest.raises(LookupError, match="outer"), database.atomic():
        with database.atomic():
            database.execute("INSERT INTO numbers VALUES (1, '')")
        raise LookupError("outer")
    assert numbers(database) == []
    assert not database.in_transaction


def test_the_first_error_is_the_one_that_is_seen(database: Database) -> None:
    with pytest.raises(LookupError, match="the first"), database.atomic():
        database.execute("INSERT INTO numbers VALUES (1, '')")
        # What a full disk does: the database itself has rolled back, so that rolling back fails.
        database.execute("ROLLBACK")
        raise LookupError("the first")
    assert not database.in_transaction
    with database.atomic():
        database.execute("INSERT INTO numbers VALUES (2, '')")
    assert numbers(database) == [2]


def test_nothing_is_written_outside_a_transaction_that_the_database_has_ended(database: Database) -> None:
    with pytest.raises(StoreError, match="rolled back"), database.atomic():
        database.execute("INSERT INTO numbers VALUES (1, '')")
        database.execute("ROLLBACK")
        database.execute("INSERT INTO numbers VALUES (2, '')")
    assert numbers(database) == []


@given(st.recursive(st.booleans(), lambda inner: st.lists(inner, max_size=4), max_leaves=12))
def test_nested_blocks_keep_exactly_what_succeeded(tmp_path_factory: pytest.TempPathFactory, plan: object) -> None:
    opened = Database(tmp_path_factory.mktemp("nested") / "n.sqlite3")
    opened.execute("CREATE TABLE numbers (number INTEGER PRIMARY KEY) STRICT")
    counter = iter(range(10_000))

    def carry_out(node: object) -> list[int]:
        """Insert a number per leaf; a False leaf fails the block around it. Returns what should be there."""
        if isinstance(node, bool):
            number = next(counter)
            opened.execute("INSERT INTO numbers VALUES (?)", (number,))
            if not node:
                raise LookupError
            return [number]
        kept: list[int] = []
        assert isinstance(node, list)
        for child in node:
            try:
                with opened.atomic():
                    inserted = carry_out(child)
            except LookupError:
                continue
            kept += inserted
        return kept

    try:
        with opened.atomic():
            expected = carry_out(plan)
    except LookupError:
        expected = []
    found = [row["number"] for row in opened.rows("SELECT number FROM numbers ORDER BY number")]
    opened.close()
    assert found == expected


def test_a_full_disk_is_told_as_such_and_harms_nothing(database: Database) -> None:
    with database.atomic():
        database.execute("INSERT INTO numbers VALUES (1, 'kept')")
    pages = int(database.value("PRAGMA page_count"))
    database.execute(f"PRAGMA max_page_count = {pages + 1}")
    with pytest.raises(StoreError, match="disk is full") as caught, database.atomic():
        database.execute("INSERT INTO numbers VALUES (2, ?)", ("x" * 100_000,))
    assert caught.value.code == "store.full"
    database.execute("PRAGMA max_page_count = 1000000")
    with database.atomic():
        database.execute("INSERT INTO numbers VALUES (3, 'after')")
    assert numbers(database) == [1, 3]


def test_a_lock_held_elsewhere_is_told_as_such(database: Database) -> None:
    other = sqlite3.connect(database.path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(StoreError, match="another program") as caught, database.atomic():
        raise AssertionError("the block must not begin")
    assert caught.value.code == "store.locked"
    other.execute("ROLLBACK")
    other.close()
    with database.atomic():
        database.execute("INSERT INTO numbers VALUES (1, '')")
    assert numbers(database) == [1]


def test_a_file_that_is_no_database_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    path.write_bytes(b"certainly no database" * 100)
    with pytest.raises(StoreError, match="restore it from a backup") as caught:
        Database(path)
    assert caught.value.code == "store.damaged"


def test_a_damaged_page_is_told_as_damage(database: Database, tmp_path: Path) -> None:
    with database.atomic():
        for number in range(400):
            database.execute("INSERT INTO numbers VALUES (?, ?)", (number, "x" * 200))
    database.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    database.close()
    data = bytearray(Path(database.path).read_bytes())
    data[4096 : 3 * 4096] = b"\xff" * (2 * 4096)
    Path(database.path).write_bytes(data)
    opened = Database(Path(database.path))
    with pytest.raises(StoreError) as caught:
        numbers(opened)
    opened.close()
    assert caught.value.code == "store.damaged"


def test_another_programs_database_is_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "other.sqlite3"
    other = sqlite3.connect(path)
    other.execute("CREATE TABLE theirs (a)")
    other.commit()
    other.close()
    before = path.read_bytes()
    with pytest.raises(StoreError, match="another program") as caught:
        Database(path)
    assert caught.value.code == "store.foreign"
    assert path.read_bytes() == before


def test_a_folder_that_is_not_there_is_told(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match="data folder") as caught:
        Database(tmp_path / "missing" / "n.sqlite3")
    assert caught.value.code == "store.access"
