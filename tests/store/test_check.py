"""The check of a database: silent on a sound one, and it names what was done to a damaged one."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from pathlib import Path

import pytest

from nearhand.service.store.check import check_database
from nearhand.service.store.store import Store

DUMP = Path(__file__).parent / "schemas" / "schema_1.sql"
PAGE = 4096


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """A database with episodes, versions, releases and events."""
    made = tmp_path / "nearhand.sqlite3"
    connection = sqlite3.connect(made)
    connection.executescript(DUMP.read_text(encoding="utf-8"))
    connection.close()
    Store(made).close()
    return made


def faults(path: Path) -> dict[str, str]:
    """Return part → fault."""
    return {found.part: found.fault for found in check_database(path) if found.fault}


def test_a_sound_database_has_no_fault_and_is_not_changed(path: Path) -> None:
    before = path.read_bytes()
    findings = check_database(path)
    assert [found.fault for found in findings] == [""] * 8
    assert path.read_bytes() == before


TAMPERING: dict[str, tuple[str, str, str]] = {
    "an observation": ("UPDATE chunks SET obs = zeroblob(length(obs)) WHERE rowid = 3", "samples", "chunk 0"),
    "a lost chunk": ("DELETE FROM chunks WHERE rowid = 3", "episodes", "yard-crane-1"),
    "a count": ("UPDATE episodes SET samples = samples + 1 WHERE episode = 'yard-crane-2'", "episodes", "yard-crane-2"),
    "an orphan": ("UPDATE chunks SET episode = 'nobody' WHERE rowid = 1", "references", "chunks row 1"),
    "a description": ("UPDATE rigs SET description = '{}'", "rigs", "ValidationError"),
    "an event": ("UPDATE events SET who = 'mallory' WHERE event = 2", "event record", "2"),
    "the last event": ("DELETE FROM events WHERE event = (SELECT max(event) FROM events)", "event record", "missing"),
    "a policy": ("UPDATE versions SET policy = zeroblob(100) WHERE version = 2", "versions", "version 2"),
    "the schema": ("INSERT INTO migrations VALUES (99, 'later', '')", "schema", "knows schemas up to"),
}


@pytest.mark.parametrize("what", TAMPERING)
def test_what_was_tampered_with_is_named(path: Path, what: str) -> None:
    statement, part, words = TAMPERING[what]
    connection = sqlite3.connect(path, isolation_level=None)
    for (trigger,) in connection.execute("SELECT name FROM sqlite_master WHERE type = 'trigger'").fetchall():
        connection.execute(f"DROP TRIGGER {trigger}")
    connection.execute(statement)
    connection.close()
    found = faults(path)
    assert words in found[part]
    assert all(finding.advice for finding in check_database(path) if finding.fault)


def test_every_damaged_page_is_noticed(path: Path) -> None:
    """Each page in turn is overwritten with noise: none may pass as sound, and no check may fall over."""
    sound = path.read_bytes()
    pages = len(sound) // PAGE
    assert pages > 10
    missed = []
    connection = sqlite3.connect(path)
    assert connection.execute("PRAGMA freelist_count").fetchone() == (0,)
    connection.close()
    for page in range(pages):
        path.write_bytes(sound[: page * PAGE] + b"\xa5" * PAGE + sound[(page + 1) * PAGE :])
        if not faults(path):
            missed.append(page)
    assert missed == []


@pytest.mark.parametrize("change", [lambda d: d[: len(d) // 2], lambda d: b"", lambda d: b"no database" * 1000])
def test_a_file_cut_short_or_replaced_is_noticed(path: Path, change: Callable[[bytes], bytes]) -> None:
    path.write_bytes(change(path.read_bytes()))
    assert faults(path)
