"""What was decided about episodes, and named training sets; the samples themselves are never touched."""

from __future__ import annotations

import hashlib
import json
import sqlite3
from collections.abc import Sequence
from dataclasses import dataclass

from nearhand.service.clock import utc_now
from nearhand.service.episodes.curation import Decision
from nearhand.service.errors import ConflictError, UnknownNameError
from nearhand.service.store.canonical import canonical
from nearhand.service.store.database import Database
from nearhand.service.store.episodes import EpisodeRow


@dataclass(frozen=True, slots=True)
class Member:
    """One episode of a training set: how it was cut and weighted, and the SHA-256 of its stored samples."""

    episode: str
    decision: Decision
    sha256: str


@dataclass(frozen=True, slots=True)
class SetRow:
    """A training set; ``sha256`` covers names, trims, weights and contents of its members, in order."""

    rig: str
    name: str
    sha256: str
    created_utc: str
    who: str
    why: str


def _decision(row: sqlite3.Row) -> Decision:
    return Decision(bool(row["excluded"]), row["start_s"], row["end_s"], row["weight"], tuple(json.loads(row["tags"])))


def set_digest(members: Sequence[Member]) -> str:
    """Return the SHA-256 over a set's members, in order."""
    listing = [
        [item.episode, item.decision.start_s, item.decision.end_s, item.decision.weight, item.sha256]
        for item in members
    ]
    return hashlib.sha256(canonical(listing).encode()).hexdigest()


class Curation:
    """The decisions and training sets in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def of(self, episode: str) -> Decision:
        """Return what was decided about an episode; the plain one where nothing was."""
        row = self._database.row("SELECT * FROM curation WHERE episode = ?", (episode,))
        return Decision() if row is None else _decision(row)

    def of_rig(self, rig: str) -> dict[str, Decision]:
        """Return episode → decision, for the episodes of a rig that something was decided about."""
        rows = self._database.rows(
            "SELECT c.* FROM curation c JOIN episodes e ON e.episode = c.episode WHERE e.rig = ?", (rig,)
        )
        return {row["episode"]: _decision(row) for row in rows}

    def decide(self, episode: str, decision: Decision) -> None:
        """Put a decision in force, in place of the one before."""
        self._database.execute(
            "INSERT INTO curation VALUES (?, ?, ?, ?, ?, ?) ON CONFLICT (episode) DO UPDATE SET "
            "excluded = excluded.excluded, start_s = excluded.start_s, end_s = excluded.end_s, "
            "weight = excluded.weight, tags = excluded.tags",
            (
                episode, int(decision.excluded), float(decision.start_s), decision.end_s, float(decision.weight),
                json.dumps(decision.tags, ensure_ascii=False),
            ),
        )  # fmt: skip

    def content_digest(self, row: EpisodeRow) -> str:
        """Return the SHA-256 over an episode's stored samples and last observation."""
        digest = hashlib.sha256()
        for chunk in self._database.rows(
            "SELECT times, obs, act FROM chunks WHERE episode = ? ORDER BY chunk", (row.episode,)
        ):
            for name in ("times", "obs", "act"):
                digest.update(chunk[name])
        digest.update(row.final_obs or b"")
        return digest.hexdigest()

    def save_set(self, rig: str, name: str, members: Sequence[Member], *, who: str, why: str) -> SetRow:
        """Save a training set for good.

        Raises:
            ConflictError: the name is taken.
            StoreError: a member is not for training; the database refuses it.
        """
        if self._database.row("SELECT 1 FROM training_sets WHERE rig = ? AND name = ?", (rig, name)) is not None:
            raise ConflictError(
                f"rig {rig} has a training set {name!r} already, and a set never changes; choose another name",
                code="conflict.set",
            )
        with self._database.atomic():
            for place, item in enumerate(members):
                decision = item.decision
                self._database.execute(
                    "INSERT INTO training_set_members VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
                    (
                        rig, name, place, item.episode, float(decision.start_s), decision.end_s,
                        float(decision.weight), item.sha256,
                    ),
                )  # fmt: skip
            self._database.execute(
                "INSERT INTO training_sets VALUES (?, ?, ?, ?, ?, ?)",
                (rig, name, set_digest(members), utc_now(), who, why),
            )
        return self.get_set(rig, name)

    def get_set(self, rig: str, name: str) -> SetRow:
        """Return a training set.

        Raises:
            UnknownNameError: the rig has none of that name.
        """
        row = self._database.row("SELECT * FROM training_sets WHERE rig = ? AND name = ?", (rig, name))
        if row is None:
            known = (
                ", ".join(found.name for found in self.sets(rig)) or "none yet; nearhand curate --save-set makes one"
            )
            raise UnknownNameError(f"rig {rig} has no training set {name!r}; it has: {known}", code="unknown.set")
        return SetRow(**{key: row[key] for key in SetRow.__slots__})

    def sets(self, rig: str) -> list[SetRow]:
        """Return a rig's training sets in order of saving."""
        rows = self._database.rows("SELECT * FROM training_sets WHERE rig = ? ORDER BY rowid", (rig,))
        return [SetRow(**{key: row[key] for key in SetRow.__slots__}) for row in rows]

    def members(self, rig: str, name: str) -> list[Member]:
        """Return a set's members, in order."""
        rows = self._database.rows(
            "SELECT * FROM training_set_members WHERE rig = ? AND name = ? ORDER BY place", (rig, name)
        )
        return [
            Member(row["episode"], Decision(False, row["start_s"], row["end_s"], row["weight"]), row["sha256"])
            for row in rows
        ]
