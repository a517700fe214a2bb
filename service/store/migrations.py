"""The schema, as numbered steps; each is one transaction together with the record that it was taken."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from nearhand.service.clock import utc_now
from nearhand.service.errors import StoreError
from nearhand.service.store.database import Database
from nearhand.service.store.schema_1 import SCHEMA_1
from nearhand.service.store.schema_2 import SCHEMA_2
from nearhand.service.store.schema_3 import SCHEMA_3


@dataclass(frozen=True, slots=True)
class Migration:
    """One step of the schema: its number, its name and its statements."""

    number: int
    name: str
    statements: tuple[str, ...]


MIGRATIONS: tuple[Migration, ...] = (
    Migration(1, "first schema", SCHEMA_1),
    Migration(2, "shadows", SCHEMA_2),
    Migration(3, "curation", SCHEMA_3),
)

_RECORD = """
CREATE TABLE IF NOT EXISTS migrations (
    number INTEGER PRIMARY KEY,
    name TEXT NOT NULL,
    applied_utc TEXT NOT NULL
) STRICT
"""


def schema_number(database: Database) -> int:
    """Return the number of the last step taken, 0 for an empty file."""
    if not database.value("SELECT count(*) FROM sqlite_master WHERE type = 'table' AND name = 'migrations'"):
        return 0
    return int(database.value("SELECT coalesce(max(number), 0) FROM migrations"))


def migrate(database: Database, migrations: Sequence[Migration] = MIGRATIONS) -> int:
    """Take every step that the file lacks and return the schema's number.

    Raises:
        StoreError: the file's schema is newer than this software, or a step failed; the step is undone as a whole.
    """
    present = schema_number(database)
    newest = migrations[-1].number if migrations else 0
    if present > newest:
        raise StoreError(
            f"database {database.path} has schema {present}, this release knows schemas up to {newest}; "
            "start the newer release that wrote it, or restore a backup from before the upgrade",
            code="store.newer_schema",
        )
    for step in migrations:
        if step.number <= present:
            continue
        with database.atomic():
            database.execute(_RECORD)
            for statement in step.statements:
                database.execute(statement)
            database.execute("INSERT INTO migrations VALUES (?, ?, ?)", (step.number, step.name, utc_now()))
    return newest
