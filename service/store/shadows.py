"""Versions that look on beside whoever acts: what they would have done, and what was done."""

from __future__ import annotations

import sqlite3
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from nearhand.service.clock import utc_now
from nearhand.service.store.database import Database


@dataclass(frozen=True, slots=True)
class ShadowRow:
    """One shadow; ``ended_utc`` is None while it looks on; ``rows`` are stored."""

    shadow: int
    rig: str
    version: int
    began_utc: str
    ended_utc: str | None
    who: str
    why: str
    rows: int


@dataclass(frozen=True, slots=True)
class Seen:
    """What a shadow has seen: would-be and done actions (N, m) float32, driver (N,) 0 fallback, 1 policy, 2 operator.

    ``starts`` are the row numbers at which a stretch without gap begins.
    """

    would: NDArray[np.float32]
    done: NDArray[np.float32]
    driver: NDArray[np.uint8]
    starts: tuple[int, ...]


def _row(row: sqlite3.Row) -> ShadowRow:
    return ShadowRow(**{name: row[name] for name in ShadowRow.__slots__})


class Shadows:
    """The shadows in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def begin(self, rig: str, version: int, who: str, why: str) -> int:
        """Begin one and return its number; an earlier one of the rig ends."""
        with self._database.atomic():
            self.end(rig)
            self._database.execute(
                "INSERT INTO shadows (rig, version, began_utc, who, why) VALUES (?, ?, ?, ?, ?)",
                (rig, version, utc_now(), who, why),
            )
            return int(self._database.value("SELECT max(shadow) FROM shadows"))

    def end(self, rig: str) -> None:
        """End the rig's present one, if there is one."""
        self._database.execute("UPDATE shadows SET ended_utc = ? WHERE rig = ? AND ended_utc IS NULL", (utc_now(), rig))

    def present(self) -> dict[str, ShadowRow]:
        """Return those that look on now, by rig."""
        rows = self._database.rows("SELECT * FROM shadows WHERE ended_utc IS NULL")
        return {row["rig"]: _row(row) for row in rows}

    def latest(self, rig: str, version: int | None = None) -> ShadowRow | None:
        """Return a rig's latest one, of a version if given."""
        row = self._database.row(
            "SELECT * FROM shadows WHERE rig = ? AND (? IS NULL OR version = ?) ORDER BY shadow DESC LIMIT 1",
            (rig, version, version),
        )
        return None if row is None else _row(row)

    def last_number(self, shadow: int, instance: str) -> int:
        """Return the number of the last row stored of an action server's life, 0 for none."""
        return int(
            self._database.value(
                "SELECT coalesce(max(first + count - 1), 0) FROM shadow_rows WHERE shadow = ? AND instance = ?",
                (shadow, instance),
            )
        )

    def append(
        self, shadow: int, instance: str, first: int, count: int, would: bytes, done: bytes, driver: bytes
    ) -> None:
        """Store rows; those that are stored already stay as they are."""
        with self._database.atomic():
            self._database.execute(
                "INSERT OR IGNORE INTO shadow_rows VALUES (?, ?, ?, ?, ?, ?, ?)",
                (shadow, instance, first, count, would, done, driver),
            )
            self._database.execute(
                "UPDATE shadows SET rows = (SELECT sum(count) FROM shadow_rows WHERE shadow = ?) WHERE shadow = ?",
                (shadow, shadow),
            )

    def seen(self, shadow: int, m: int, most: int) -> Seen:
        """Return the latest ``most`` rows, at least, in order; the m actions of a row are side by side."""
        rows, count = [], 0
        for row in self._database.rows("SELECT * FROM shadow_rows WHERE shadow = ? ORDER BY rowid DESC", (shadow,)):
            rows.append(row)
            count += row["count"]
            if count >= most:
                break
        rows.reverse()
        starts, place, follows = [], 0, ("", 0)
        for row in rows:
            if (row["instance"], row["first"]) != follows:
                starts.append(place)
            place += row["count"]
            follows = row["instance"], row["first"] + row["count"]
        return Seen(
            np.frombuffer(b"".join(row["would"] for row in rows), dtype="<f4").reshape(-1, m),
            np.frombuffer(b"".join(row["done"] for row in rows), dtype="<f4").reshape(-1, m),
            np.frombuffer(b"".join(row["driver"] for row in rows), dtype=np.uint8),
            tuple(starts),
        )
