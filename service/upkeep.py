"""What is done to a data folder from outside the service: checking it, backing it up, restoring it."""

from __future__ import annotations

import shutil
from dataclasses import dataclass
from pathlib import Path

from nearhand.service.bus.keys import KeyFolder
from nearhand.service.errors import ConfigError
from nearhand.service.main import take_lock
from nearhand.service.store.backups import Backup, backup_at, default_name, list_backups, make_backup, restore_backup
from nearhand.service.store.check import Finding, check_database

__all__ = ["Backup", "Finding", "Restored", "back_up", "backups", "check", "restore"]

DATABASE = "nearhand.sqlite3"
#: Less free space than this is worth a word.
LITTLE_BYTES = 500_000_000


def check(data: Path) -> list[Finding]:
    """Check a data folder, changing nothing; a service may be running on it.

    Raises:
        ConfigError: there is no such folder.
    """
    if not data.is_dir():
        raise ConfigError(f"there is no data folder {data}", code="config.data")
    if not (data / DATABASE).exists():
        advice = "is this the right folder? The service makes the file at its first start"
        findings = [Finding("file", str(data / DATABASE), "there is no database", advice)]
    else:
        findings = check_database(data / DATABASE)
    return [*findings, _keys(data), _space(data)]


def _keys(data: Path) -> Finding:
    folder = KeyFolder(data / "keys")
    if not folder.is_there:
        return Finding("keys", "none: loopback only")
    try:
        folder.service_key()
        in_force = [entry for entry in folder.table().key if entry.revoked_utc is None]
    except ConfigError as error:
        return Finding("keys", "unusable", error.message, "put the file right; until then nobody is let in")
    return Finding("keys", f"{len(in_force)} in force")


def _space(data: Path) -> Finding:
    free = shutil.disk_usage(data).free
    seen = f"{free / 1e9:.1f} GB free"
    return Finding("disk", seen, "" if free > LITTLE_BYTES else "little space is left", "free some space")


def back_up(data: Path, target: Path | None) -> Backup:
    """Make a backup of a data folder that may be in use; in its ``backups`` folder unless told otherwise.

    Raises:
        ConfigError: the target exists.
        StoreError: it failed; nothing is left of it.
    """
    return make_backup(data / DATABASE, target or data / "backups" / default_name())


def backups(data: Path) -> list[Backup]:
    """Return the backups in a data folder, oldest first."""
    return list_backups(data / "backups")


@dataclass(frozen=True, slots=True)
class Restored:
    """What was put back, and where the replaced database lies now (None if there was none)."""

    backup: Backup
    aside: Path | None


def restore(data: Path, *, file: Path | None, at_utc: str, who: str, why: str) -> Restored:
    """Put a backup in the place of a data folder's database: a file, or the newest not newer than a moment.

    Raises:
        ConfigError, UnknownNameError: no such backup.
        StoreError: a service is running there, or the backup is at fault; nothing was changed.
    """
    chosen = file or backup_at(data / "backups", at_utc)
    (data / "run").mkdir(parents=True, exist_ok=True)
    with take_lock(data):
        described, aside = restore_backup(chosen, data / DATABASE, who=who, why=why)
    return Restored(described, aside)
