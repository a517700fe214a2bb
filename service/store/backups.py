"""Backups: the database as it was at one moment, in a file that stands alone, and the way back."""

from __future__ import annotations

import contextlib
import os
import shutil
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from nearhand.service.errors import ConfigError, StoreError, UnknownNameError
from nearhand.service.policy.format import sha256
from nearhand.service.store.check import check_database
from nearhand.service.store.database import Database
from nearhand.service.store.store import Store

STAMP = "%Y%m%dT%H%M%SZ"
PREFIX, SUFFIX = "nearhand-", ".sqlite3"


@dataclass(frozen=True, slots=True)
class Backup:
    """One backup: its file, the moment it shows, its size, and the last event that it holds."""

    file: Path
    utc: str
    size_bytes: int
    events: int


def make_backup(database: Path, target: Path) -> Backup:
    """Copy the database while it may be in use, check the copy, and only then give it its name.

    Raises:
        ConfigError: the target exists or cannot be written.
        StoreError: the copy failed or is at fault; nothing is left of it.
    """
    if not database.is_file():
        raise StoreError(f"there is no database {database}; is this the data folder?", code="store.access")
    beside = target.with_name(f".{target.name}.{os.getpid()}")
    with _translated(target):
        target.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
        if os.path.lexists(target):
            raise ConfigError(f"{target} exists; name another file", code="config.backup")
        try:
            os.close(os.open(beside, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o600))
            source = Database(database, read_only=True)
            try:
                source.copy_to(beside)
            finally:
                source.close()
            _refuse_faults(beside)
            _sync(beside)
            beside.rename(target)
            _sync(target.parent)
        finally:
            beside.unlink(missing_ok=True)
    return _described(target)


def list_backups(folder: Path) -> list[Backup]:
    """Return the backups in a folder, oldest first; files with other names are passed over."""
    found = []
    for path in sorted(folder.glob(f"{PREFIX}*{SUFFIX}")) if folder.is_dir() else ():
        with contextlib.suppress(StoreError, ValueError):
            found.append(_described(path))
    return found


def backup_at(folder: Path, utc: str) -> Path:
    """Return the newest backup that is not newer than a moment; the newest of all for an empty one.

    Raises:
        ConfigError: the moment cannot be read.
        UnknownNameError: there is none so old.
    """
    try:
        moment = datetime.fromisoformat(utc) if utc else datetime.max
    except ValueError as error:
        raise ConfigError(
            f"--at {utc}: expected a UTC time such as 2024-05-01T12:00:00", code="config.option"
        ) from error
    moment = moment.replace(tzinfo=UTC) if moment.tzinfo is None else moment
    old = [backup for backup in list_backups(folder) if _moment(backup.file) <= moment]
    if not old:
        raise UnknownNameError(f"there is no backup in {folder}{f' from before {utc}' if utc else ''}")
    return old[-1].file


def restore_backup(backup: Path, database: Path, *, who: str, why: str) -> tuple[Backup, Path | None]:
    """Put a backup in the place of the database, which is set aside; the caller holds the data folder's lock.

    Returns:
        The backup, and the folder that the replaced database now lies in, or None if there was none.

    Raises:
        StoreError: the backup is at fault or from a newer release, or a file operation failed; the database is as it
            was.
    """
    described = _described(backup)
    _refuse_faults(backup)
    fresh = database.with_name(f".{database.name}.{os.getpid()}")
    aside: Path | None = None
    with _translated(database):
        database.parent.mkdir(parents=True, exist_ok=True)
        try:
            shutil.copyfile(backup, fresh)
            fresh.chmod(0o600)
            store = Store(fresh)
            try:
                with store.database.atomic():
                    detail = {"backup_utc": described.utc, "events": described.events, "sha256": sha256_of(backup)}
                    store.events.append("restored", who=who, why=why, detail=detail)
            finally:
                store.close()
            _sync(fresh)
            if database.exists():
                aside = database.with_name(f"replaced-{datetime.now(UTC).strftime(STAMP)}-{os.getpid()}")
                aside.mkdir(mode=0o700)
                for name in (f"{database.name}-wal", f"{database.name}-shm", database.name):
                    if (database.parent / name).exists():
                        (database.parent / name).rename(aside / name)
            fresh.rename(database)
            _sync(database.parent)
        finally:
            for name in (fresh.name, f"{fresh.name}-wal", f"{fresh.name}-shm"):
                (fresh.parent / name).unlink(missing_ok=True)
    return described, aside


def default_name() -> str:
    """Return the name of a backup that is made now."""
    return f"{PREFIX}{datetime.now(UTC).strftime(STAMP)}{SUFFIX}"


def sha256_of(path: Path) -> str:
    """Return a file's SHA-256 in hexadecimal."""
    return sha256(path.read_bytes())


def _moment(path: Path) -> datetime:
    return datetime.strptime(path.name.removeprefix(PREFIX).removesuffix(SUFFIX), STAMP).replace(tzinfo=UTC)


def _described(path: Path) -> Backup:
    if not path.is_file():
        raise StoreError(f"there is no file {path}", code="store.access")
    database = Database(path, read_only=True)
    try:
        events = int(database.value("SELECT coalesce(max(event), 0) FROM events"))
    finally:
        database.close()
    try:
        utc = _moment(path).isoformat()
    except ValueError:
        utc = datetime.fromtimestamp(path.stat().st_mtime, UTC).isoformat(timespec="seconds")
    return Backup(path, utc, path.stat().st_size, events)


def _refuse_faults(path: Path) -> None:
    faults = [f"{found.part}: {found.fault}" for found in check_database(path) if found.fault]
    if faults:
        raise StoreError(f"{path} cannot serve as a backup: {'; '.join(faults)[:1000]}", code="store.damaged")


def _sync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


@contextlib.contextmanager
def _translated(path: Path) -> Iterator[None]:
    try:
        yield
    except OSError as error:
        raise StoreError(f"{path}: {error}; nothing was changed", code="store.access") from error
