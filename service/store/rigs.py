"""Rigs as stored: the present description of each, and every description that it ever had."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass

from nearhand.service.clock import utc_now
from nearhand.service.errors import UnknownNameError
from nearhand.service.rigs import Rig
from nearhand.service.store.canonical import canonical
from nearhand.service.store.database import Database


@dataclass(frozen=True, slots=True)
class RigRow:
    """A stored rig; ``toml`` is the text as it was given."""

    rig: Rig
    digest: str
    toml: str
    put_utc: str


def machine_digest(rig: Rig) -> str:
    """Return the SHA-256 of what a measurement depends on: the description without its title, gate and health rules."""
    aside = ("title", "gate", "health")
    description = {key: value for key, value in rig.model_dump(mode="json").items() if key not in aside}
    return hashlib.sha256(canonical(description).encode()).hexdigest()


class Rigs:
    """The rigs in a database."""

    def __init__(self, database: Database) -> None:
        self._database = database

    def put(self, rig: Rig, toml: str, who: str) -> bool:
        """Store a description; return whether anything changed."""
        digest, now = rig.digest(), utc_now()
        description = canonical(rig.model_dump(mode="json"))
        with self._database.atomic():
            if self._database.value("SELECT digest FROM rigs WHERE rig = ?", (rig.name,)) == digest:
                return False
            self._database.execute(
                "INSERT INTO rigs VALUES (?, ?, ?, ?, ?) ON CONFLICT (rig) DO UPDATE SET toml = excluded.toml, "
                "description = excluded.description, digest = excluded.digest, put_utc = excluded.put_utc",
                (rig.name, toml, description, digest, now),
            )
            self._database.execute(
                "INSERT INTO rig_history (rig, digest, toml, description, put_utc, who) VALUES (?, ?, ?, ?, ?, ?)",
                (rig.name, digest, toml, description, now, who),
            )
        return True

    def find(self, name: str) -> RigRow | None:
        """Return a rig, or None."""
        row = self._database.row("SELECT * FROM rigs WHERE rig = ?", (name,))
        if row is None:
            return None
        rig = Rig.model_validate(json.loads(row["description"]))
        return RigRow(rig=rig, digest=row["digest"], toml=row["toml"], put_utc=row["put_utc"])

    def get(self, name: str) -> RigRow:
        """Return a rig.

        Raises:
            UnknownNameError: there is none of that name.
        """
        row = self.find(name)
        if row is None:
            known = ", ".join(self.names()) or "none yet"
            raise UnknownNameError(
                f"no rig is called {name!r}; known: {known}; register it with put-rig", code="unknown.rig"
            )
        return row

    def names(self) -> list[str]:
        """Return the rigs' names, sorted."""
        return [str(row["rig"]) for row in self._database.rows("SELECT rig FROM rigs ORDER BY rig")]

    def digests(self) -> dict[str, str]:
        """Return the digest of each rig's present description, by name."""
        return {str(row["rig"]): str(row["digest"]) for row in self._database.rows("SELECT rig, digest FROM rigs")}

    def history(self, name: str) -> list[tuple[str, str, str]]:
        """Return (digest, time, who) of every description that a rig had, oldest first."""
        rows = self._database.rows("SELECT digest, put_utc, who FROM rig_history WHERE rig = ? ORDER BY entry", (name,))
        return [(row["digest"], row["put_utc"], row["who"]) for row in rows]

    def is_bound(self, name: str) -> bool:
        """Tell whether episodes or versions hang on the rig's channels."""
        return bool(
            self._database.value(
                "SELECT EXISTS (SELECT 1 FROM episodes WHERE rig = ?1 AND state <> 'discarded') "
                "OR EXISTS (SELECT 1 FROM versions WHERE rig = ?1)",
                (name,),
            )
        )
