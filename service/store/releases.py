"""Releases as stored: which version was put in service when, by whom, on what evidence."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from nearhand.service.clock import utc_now
from nearhand.service.store.canonical import canonical, plain
from nearhand.service.store.database import Database


@dataclass(frozen=True, slots=True)
class ReleaseRow:
    """One change of what is in service; ``what`` is ``release``, ``rollback`` or ``stand-down``, version 0 is none."""

    release: int
    utc: str
    rig: str
    what: str
    version: int
    previous: int
    who: str
    why: str
    override: bool
    measurement: int | None
    bounds: list[dict[str, Any]]


def _row(row: sqlite3.Row) -> ReleaseRow:
    values = {name: row[name] for name in ReleaseRow.__slots__}
    values["override"] = bool(values["override"])
    values["bounds"] = json.loads(values["bounds"])
    return ReleaseRow(**values)


class Releases:
    """The releases in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def add(
        self,
        what: str,
        *,
        rig: str,
        version: int,
        previous: int,
        who: str,
        why: str,
        override: bool = False,
        measurement: int | None = None,
        bounds: Sequence[Mapping[str, Any]] = (),
    ) -> int:
        """Put ``version`` in service in place of ``previous`` (0 for none) and record it; returns its number."""
        with self._database.atomic():
            self._database.execute(
                "UPDATE versions SET state = 'stood-down' WHERE rig = ? AND state = 'in-service'", (rig,)
            )
            if version:
                self._database.execute(
                    "UPDATE versions SET state = 'in-service', refusal = '' WHERE version = ? AND rig = ?",
                    (version, rig),
                )
            return self._database.insert(
                "INSERT INTO releases (utc, rig, what, version, previous, who, why, override, measurement, bounds) "
                "VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
                (
                    utc_now(), rig, what, version, previous, who, why, int(override), measurement,
                    canonical(plain(bounds)),
                ),
            )  # fmt: skip

    def of_rig(self, rig: str) -> list[ReleaseRow]:
        """Return a rig's releases, oldest first."""
        return [
            _row(row) for row in self._database.rows("SELECT * FROM releases WHERE rig = ? ORDER BY release", (rig,))
        ]

    def was_in_service(self, rig: str, version: int) -> bool:
        """Tell whether a version was ever in service for a rig."""
        return bool(
            self._database.value("SELECT EXISTS (SELECT 1 FROM releases WHERE rig = ? AND version = ?)", (rig, version))
        )

    def before(self, rig: str, version: int) -> int:
        """Return the version that was in service before ``version`` was released, 0 if none.

        Rollbacks are looked through, so that rolling back twice goes further back and never returns to the version
        that was just left. With nothing in service (``version`` 0) it is the one that was in service last.
        """
        history = self.of_rig(rig)
        if version:
            released = [row.release for row in history if row.what == "release" and row.version == version]
            history = [row for row in history if released and row.release < released[-1]]
        return next((row.version for row in reversed(history) if row.version not in (0, version)), 0)
