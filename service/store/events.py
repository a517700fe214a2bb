"""The event record: append-only, each row bound to the one before by its hash."""

from __future__ import annotations

import hashlib
import json
import sqlite3
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nearhand.service.clock import utc_now
from nearhand.service.store.canonical import canonical, plain
from nearhand.service.store.database import Database

#: What stands for the predecessor of the first event.
BEFORE_FIRST = "0" * 64
MAX_EVENTS = 1_000


@dataclass(frozen=True, slots=True)
class EventRow:
    """One event. ``detail`` is a map of plain values; ``who`` is a person, ``keeper`` or ``action-server``."""

    event: int
    utc: str
    rig: str
    what: str
    who: str
    why: str
    detail: dict[str, Any]


@dataclass(frozen=True, slots=True)
class Verdict:
    """What a check of the record found; ``first_bad`` is the first event number that does not hold."""

    intact: bool
    events: int
    first_bad: int | None
    message: str


def event_digest(row: EventRow, previous: str) -> str:
    """Return the SHA-256 over the canonical JSON of an event and its predecessor's digest."""
    content = {
        "event": row.event, "utc": row.utc, "rig": row.rig, "what": row.what, "who": row.who, "why": row.why,
        "detail": row.detail, "previous": previous,
    }  # fmt: skip
    return hashlib.sha256(canonical(content).encode()).hexdigest()


def _row(row: sqlite3.Row) -> EventRow:
    return EventRow(
        event=row["event"], utc=row["utc"], rig=row["rig"], what=row["what"], who=row["who"], why=row["why"],
        detail=json.loads(row["detail"]),
    )  # fmt: skip


class Events:
    """The event record in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def append(
        self,
        what: str,
        *,
        rig: str = "",
        who: str,
        why: str = "",
        detail: Mapping[str, Any] | None = None,
        utc: str = "",
    ) -> EventRow:
        """Append an event and return it."""
        with self._database.atomic():
            head = self._database.row("SELECT event, digest FROM event_head WHERE head = 1")
            number, previous = (int(head["event"]) + 1, str(head["digest"])) if head else (1, BEFORE_FIRST)
            row = EventRow(number, utc or utc_now(), rig, what, who, why, plain(detail or {}))
            digest = event_digest(row, previous)
            self._database.execute(
                "INSERT INTO events VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
                (number, row.utc, rig, what, who, why, canonical(row.detail), previous, digest),
            )
            self._database.execute(
                "INSERT INTO event_head VALUES (1, ?, ?) "
                "ON CONFLICT (head) DO UPDATE SET event = excluded.event, digest = excluded.digest",
                (number, digest),
            )
        return row

    def append_occurrence(
        self, instance: str, number: int, what: str, *, rig: str, utc: str, detail: Mapping[str, Any]
    ) -> EventRow | None:
        """Append what an action server tells of, once; None if it is in the record already."""
        with self._database.atomic():
            if self._database.value("SELECT 1 FROM occurrences WHERE instance = ? AND number = ?", (instance, number)):
                return None
            row = self.append(what, rig=rig, who="action-server", utc=utc, detail=detail)
            self._database.execute("INSERT INTO occurrences VALUES (?, ?, ?)", (instance, number, row.event))
        return row

    def last_occurrence(self, instance: str) -> int:
        """Return the highest number stored of an action server's instance, 0 if none."""
        return int(
            self._database.value("SELECT coalesce(max(number), 0) FROM occurrences WHERE instance = ?", (instance,))
        )

    def after(self, event: int, *, rig: str | None = None, limit: int = 200) -> list[EventRow]:
        """Return events after a number, oldest first."""
        chosen = ("", ()) if rig is None else (" AND rig = ?", (rig,))
        rows = self._database.rows(
            f"SELECT * FROM events WHERE event > ?{chosen[0]} ORDER BY event LIMIT ?",
            (event, *chosen[1], min(limit, MAX_EVENTS)),
        )
        return [_row(row) for row in rows]

    def verify(self) -> Verdict:
        """Check every row's digest, its number and its link to the row before, and the recorded end.

        A hash chain shows what was changed, removed or put in another order by somebody who did not recompute it to
        its end; noting the end's digest elsewhere shows the rest.
        """
        previous, expected = BEFORE_FIRST, 1
        for row in self._database.rows("SELECT * FROM events ORDER BY event"):
            number = int(row["event"])
            fault = ""
            if number != expected:
                fault = f"event {expected} is missing"
            elif row["previous"] != previous:
                fault = f"event {expected} does not follow the event before it"
            else:
                try:
                    event = _row(row)
                    if canonical(event.detail) != row["detail"] or event_digest(event, previous) != row["digest"]:
                        fault = f"event {expected} was changed"
                except (ValueError, AttributeError):
                    fault = f"event {expected} was changed: its detail cannot be read"
            if fault:
                return Verdict(False, self._count(), expected, fault)
            previous, expected = str(row["digest"]), expected + 1
        head = self._database.row("SELECT event, digest FROM event_head WHERE head = 1")
        end = (int(head["event"]), str(head["digest"])) if head else (0, BEFORE_FIRST)
        if end != (expected - 1, previous):
            return Verdict(False, self._count(), expected, f"event {expected} is missing: the record ends too early")
        return Verdict(True, expected - 1, None, f"intact; the end's SHA-256 is {previous}")

    def _count(self) -> int:
        return int(self._database.value("SELECT count(*) FROM events"))
