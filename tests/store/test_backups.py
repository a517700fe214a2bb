"""Backups are tested by putting them back."""

from __future__ import annotations

import sqlite3
import stat
import threading
from pathlib import Path

import pytest

from nearhand.service.errors import ConfigError, NearhandError, StoreError, UnknownNameError
from nearhand.service.store.backups import backup_at, list_backups, make_backup, restore_backup
from nearhand.service.store.check import check_database
from nearhand.service.store.store import Store

WHO = {"who": "ann", "why": "the disk was changed"}


def text_of(path: Path) -> list[str]:
    """Return the whole content of a database as text."""
    connection = sqlite3.connect(path)
    lines = list(connection.iterdump())
    connection.close()
    return lines


def test_a_backup_holds_what_the_database_held_at_that_moment(stocked: Store, tmp_path: Path) -> None:
    stocked.events.append("before", who="test")
    expected = text_of(tmp_path / "nearhand.sqlite3")
    backup = make_backup(tmp_path / "nearhand.sqlite3", tmp_path / "backups" / "nearhand-20240501T120000Z.sqlite3")
    stocked.events.append("after", who="test")
    assert text_of(backup.file) == expected
    assert (backup.utc, backup.events) == ("2024-05-01T12:00:00+00:00", 1)
    assert stat.S_IMODE(backup.file.stat().st_mode) == 0o600
    assert [path.name for path in backup.file.parent.iterdir()] == [backup.file.name], "one file that stands alone"


def test_restoring_brings_that_moment_back_and_says_so(stocked: Store, tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    stocked.events.append("before", who="test")
    backup = make_backup(path, tmp_path / "nearhand-20240501T120000Z.sqlite3")
    stocked.events.append("after", who="test")
    stocked.close()
    _, aside = restore_backup(backup.file, path, **WHO)
    restored = Store(path)
    assert [row.what for row in restored.events.after(0)] == ["before", "restored"]
    assert restored.events.after(1)[0].why == WHO["why"]
    assert restored.rigs.names() == ["yard-crane"]
    restored.close()
    assert [found for found in check_database(path) if found.fault] == []
    assert aside is not None
    replaced = Store(aside / path.name)
    assert [row.what for row in replaced.events.after(0)] == ["before", "after"], "what was replaced is kept whole"
    replaced.close()


def test_while_a_writer_goes_on_every_copy_is_whole(tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    Store(path).close()
    stop = threading.Event()
    counts: list[int] = []

    def write() -> None:
        store = Store(path)
        count = 0
        while not stop.is_set():
            with store.database.atomic():
                store.events.append("first of a pair", who="test")
                store.events.append("second of a pair", who="test")
            count += 2
        counts.append(count)
        store.close()

    writer = threading.Thread(target=write)
    writer.start()
    try:
        made = [make_backup(path, tmp_path / f"copy-{k}.sqlite3").events for k in range(8)]
    finally:
        stop.set()
        writer.join()
    assert made == sorted(made)
    assert 0 < made[-1] <= counts[0]
    assert [events % 2 for events in made] == [0] * 8, "a transaction is in a copy as a whole or not at all"


def test_the_newest_that_is_old_enough_is_chosen(stocked: Store, tmp_path: Path) -> None:
    folder = tmp_path / "backups"
    for day in ("01", "03", "05"):
        make_backup(tmp_path / "nearhand.sqlite3", folder / f"nearhand-202405{day}T120000Z.sqlite3")
    (folder / "nearhand-notes.sqlite3").write_text("something else")
    assert [backup.utc[:10] for backup in list_backups(folder)] == ["2024-05-01", "2024-05-03", "2024-05-05"]
    assert backup_at(folder, "").name == "nearhand-20240505T120000Z.sqlite3"
    assert backup_at(folder, "2024-05-04").name == "nearhand-20240503T120000Z.sqlite3"
    assert backup_at(folder, "2024-05-03T14:00:00+02:00").name == "nearhand-20240503T120000Z.sqlite3"
    with pytest.raises(UnknownNameError):
        backup_at(folder, "2024-05-01T11:59:59")
    with pytest.raises(ConfigError):
        backup_at(folder, "last tuesday")


def test_a_damaged_or_newer_backup_is_refused_and_nothing_is_touched(stocked: Store, tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    stocked.close()
    good = make_backup(path, tmp_path / "good.sqlite3").file
    damaged = tmp_path / "damaged.sqlite3"
    damaged.write_bytes(good.read_bytes()[:8192] + b"\xa5" * 4096 + good.read_bytes()[12288:])
    newer = tmp_path / "newer.sqlite3"
    newer.write_bytes(good.read_bytes())
    connection = sqlite3.connect(newer, isolation_level=None)
    connection.execute("INSERT INTO migrations VALUES (99, 'from the future', '')")
    connection.close()
    before = text_of(path)
    for backup in (damaged, newer, tmp_path / "missing.sqlite3"):
        with pytest.raises(NearhandError):
            restore_backup(backup, path, **WHO)
        assert text_of(path) == before
        assert not list(tmp_path.glob("replaced-*"))
        assert not list(tmp_path.glob(".*"))


def test_a_damaged_database_gives_no_backup(stocked: Store, tmp_path: Path) -> None:
    path = tmp_path / "nearhand.sqlite3"
    stocked.close()
    path.write_bytes(path.read_bytes()[:8192] + b"\xa5" * 4096 + path.read_bytes()[12288:])
    with pytest.raises(StoreError):
        make_backup(path, tmp_path / "copy.sqlite3")
    assert not (tmp_path / "copy.sqlite3").exists()
    assert not list(tmp_path.glob(".*"))


def test_no_file_is_overwritten(stocked: Store, tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("precious")
    with pytest.raises(ConfigError, match="taken"):
        make_backup(tmp_path / "nearhand.sqlite3", tmp_path / "taken")
    assert (tmp_path / "taken").read_text() == "precious"
