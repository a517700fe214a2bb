"""Versions as stored: immutable policy files, their states and their measurements."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nearhand.service.clock import utc_now
from nearhand.service.errors import StoreError, UnknownNameError
from nearhand.service.policy.format import sha256
from nearhand.service.store.canonical import canonical, plain
from nearhand.service.store.database import Database

_COLUMNS = "version, rig, rig_digest, name, method, state, created_utc, sha256, provenance, parent, job, refusal"


@dataclass(frozen=True, slots=True)
class VersionRow:
    """One version without its file; ``parent`` is what it grew from, ``refusal`` why it was not released."""

    version: int
    rig: str
    rig_digest: str
    name: str
    method: str
    state: str
    created_utc: str
    sha256: str
    provenance: dict[str, Any]
    parent: int | None
    job: int | None
    refusal: str


@dataclass(frozen=True, slots=True)
class MeasurementRow:
    """One measurement. ``machine_digest`` is that of the description it was made under, title and gate aside."""

    measurement: int
    version: int
    job: int | None
    utc: str
    rig_digest: str
    machine_digest: str
    content: dict[str, Any]


def _row(row: sqlite3.Row) -> VersionRow:
    values = {name: row[name] for name in VersionRow.__slots__}
    values["provenance"] = json.loads(values["provenance"])
    return VersionRow(**values)


class Versions:
    """The versions in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def add(
        self,
        *,
        rig: str,
        rig_digest: str,
        name: str,
        method: str,
        policy: bytes,
        provenance: Mapping[str, Any],
        parent: int | None = None,
        job: int | None = None,
    ) -> VersionRow:
        """Store a drafted version; the caller has checked the policy file."""
        version = self._database.insert(
            "INSERT INTO versions (rig, rig_digest, name, method, state, created_utc, sha256, policy, provenance, "
            "parent, job) VALUES (?, ?, ?, ?, 'drafted', ?, ?, ?, ?, ?, ?)",
            (
                rig, rig_digest, name, method, utc_now(), sha256(policy), policy, canonical(plain(provenance)), parent,
                job,
            ),
        )  # fmt: skip
        return self.get(version)

    def get(self, version: int) -> VersionRow:
        """Return a version.

        Raises:
            UnknownNameError: there is none of that number.
        """
        row = self._database.row(f"SELECT {_COLUMNS} FROM versions WHERE version = ?", (version,))
        if row is None:
            raise UnknownNameError(
                f"there is no version {version}; list-versions tells which there are", code="unknown.version"
            )
        return _row(row)

    def policy(self, version: int) -> bytes:
        """Return a version's file, checked against its SHA-256.

        Raises:
            UnknownNameError: there is none of that number.
            StoreError: the file is not what was stored.
        """
        row = self.get(version)
        data = bytes(self._database.value("SELECT policy FROM versions WHERE version = ?", (version,)))
        if sha256(data) != row.sha256:
            raise StoreError(
                f"version {version}: its file does not have the recorded SHA-256; restore a backup",
                code="store.damaged",
            )
        return data

    def of_rig(self, rig: str) -> list[VersionRow]:
        """Return a rig's versions, oldest first."""
        rows = self._database.rows(f"SELECT {_COLUMNS} FROM versions WHERE rig = ? ORDER BY version", (rig,))
        return [_row(row) for row in rows]

    def of_job(self, job: int) -> list[VersionRow]:
        """Return the versions that a job drafted."""
        rows = self._database.rows(f"SELECT {_COLUMNS} FROM versions WHERE job = ? ORDER BY version", (job,))
        return [_row(row) for row in rows]

    def in_service(self, rig: str) -> int:
        """Return the number of the version in service, 0 when none."""
        return int(
            self._database.value("SELECT version FROM versions WHERE rig = ? AND state = 'in-service'", (rig,)) or 0
        )

    def set_state(self, version: int, state: str, *, refusal: str = "") -> None:
        """Change a version's state and say why it was refused, if it was."""
        self._database.execute(
            "UPDATE versions SET state = ?, refusal = ? WHERE version = ?", (state, refusal, version)
        )

    def add_measurement(
        self, version: int, content: Mapping[str, Any], *, rig_digest: str, machine_digest: str, job: int | None = None
    ) -> int:
        """Store a measurement; a drafted version becomes a measured one. Returns the measurement's number."""
        with self._database.atomic():
            number = self._database.insert(
                "INSERT INTO measurements (version, job, utc, rig_digest, machine_digest, content) "
                "VALUES (?, ?, ?, ?, ?, ?)",
                (version, job, utc_now(), rig_digest, machine_digest, canonical(plain(content))),
            )
            self._database.execute(
                "UPDATE versions SET state = 'measured' WHERE version = ? AND state = 'drafted'", (version,)
            )
        return number

    def measurement(self, version: int) -> MeasurementRow | None:
        """Return a version's latest measurement, or None."""
        rows = self.measurements(version, most=1)
        return rows[0] if rows else None

    def measurements(self, version: int, *, most: int = -1) -> list[MeasurementRow]:
        """Return a version's measurements, latest first; at most so many if given."""
        rows = self._database.rows(
            "SELECT * FROM measurements WHERE version = ? ORDER BY measurement DESC LIMIT ?", (version, most)
        )
        return [
            MeasurementRow(**{
                name: json.loads(row[name]) if name == "content" else row[name] for name in MeasurementRow.__slots__
            })
            for row in rows
        ]  # fmt: skip
