"""Jobs as stored: what was asked, by whom, and how it ended."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nearhand.service.clock import utc_now
from nearhand.service.errors import UnknownNameError
from nearhand.service.store.canonical import canonical, plain
from nearhand.service.store.database import Database


@dataclass(frozen=True, slots=True)
class JobRow:
    """One job; ``result`` is a map once it has ended, for a failed one with ``code`` and ``message``."""

    job: int
    kind: str
    rig: str
    options: dict[str, Any]
    state: str
    who: str
    why: str
    created_utc: str
    started_utc: str | None
    ended_utc: str | None
    code: str
    message: str
    result: dict[str, Any] | None


def _row(row: sqlite3.Row) -> JobRow:
    values = {name: row[name] for name in JobRow.__slots__}
    values["options"] = json.loads(values["options"])
    values["result"] = None if values["result"] is None else json.loads(values["result"])
    return JobRow(**values)


class Jobs:
    """The jobs in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def add(self, kind: str, rig: str, options: Mapping[str, Any], *, who: str, why: str) -> JobRow:
        """Queue a job.

        Raises:
            ConfigError: the options cannot be stored as JSON.
        """
        job = self._database.insert(
            "INSERT INTO jobs (kind, rig, options, state, who, why, created_utc) VALUES (?, ?, ?, 'queued', ?, ?, ?)",
            (kind, rig, canonical(options), who, why, utc_now()),
        )
        return self.get(job)

    def get(self, job: int) -> JobRow:
        """Return a job.

        Raises:
            UnknownNameError: there is none of that number.
        """
        row = self._database.row("SELECT * FROM jobs WHERE job = ?", (job,))
        if row is None:
            raise UnknownNameError(f"there is no job {job}; list-jobs tells which there are", code="unknown.job")
        return _row(row)

    def in_state(self, *states: str) -> list[JobRow]:
        """Return the jobs in these states, oldest first."""
        marks = ", ".join("?" * len(states))
        return [
            _row(row)
            for row in self._database.rows(f"SELECT * FROM jobs WHERE state IN ({marks}) ORDER BY job", states)
        ]

    def newest(self, rig: str | None, *, limit: int = 200) -> list[JobRow]:
        """Return the latest jobs, of one rig or of all, newest first."""
        rows = self._database.rows(
            "SELECT * FROM jobs WHERE ?1 IS NULL OR rig = ?1 ORDER BY job DESC LIMIT ?2", (rig, limit)
        )
        return [_row(row) for row in rows]

    def begin(self, job: int) -> JobRow:
        """Note that a job runs."""
        self._database.execute(
            "UPDATE jobs SET state = 'running', started_utc = coalesce(started_utc, ?) WHERE job = ?", (utc_now(), job)
        )
        return self.get(job)

    def end(
        self, job: int, state: str, *, code: str = "", message: str = "", result: Mapping[str, Any] | None = None
    ) -> JobRow:
        """Note how a job ended."""
        text = None if result is None else canonical(plain(result))
        self._database.execute(
            "UPDATE jobs SET state = ?, ended_utc = ?, code = ?, message = ?, result = ? WHERE job = ?",
            (state, utc_now(), code, message, text, job),
        )
        return self.get(job)
