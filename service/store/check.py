"""Does a data folder hold what it should: the file itself, checksums, hashes, counts, the event record."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

from nearhand.service.errors import NearhandError, StoreError
from nearhand.service.policy.format import read_policy
from nearhand.service.rigs import Rig
from nearhand.service.store.database import Database
from nearhand.service.store.episodes import ChunkRow
from nearhand.service.store.events import Events
from nearhand.service.store.migrations import MIGRATIONS, schema_number

RESTORE = "stop the service and put back a backup: nearhand backup restore (nearhand backup list shows them)"
MOST_NAMED = 5


@dataclass(frozen=True, slots=True)
class Finding:
    """What one part of the check found: ``fault`` is empty if all is well, ``advice`` what to do if not."""

    part: str
    seen: str
    fault: str = ""
    advice: str = ""


def check_database(path: Path) -> list[Finding]:
    """Check a database file, changing nothing; a service may be running on it.

    Returns:
        One finding per part; later parts are looked at even if earlier ones are at fault.
    """
    try:
        database = Database(path, read_only=True)
    except StoreError as error:
        return [Finding("file", str(path), error.message, RESTORE)]
    try:
        return [_guarded(part, look, database) for part, look in _PARTS.items()]
    finally:
        database.close()


def _guarded(part: str, look: Callable[[Database], Finding], database: Database) -> Finding:
    try:
        return look(database)
    except NearhandError as error:
        return Finding(part, "cannot be read", error.message, RESTORE)
    except Exception as error:  # damaged content may break any reader; it is a finding, not a failure of the check
        return Finding(part, "cannot be read", f"{type(error).__name__}: {error}", RESTORE)


def _structure(database: Database) -> Finding:
    lines = [str(row[0]) for row in database.rows(f"PRAGMA integrity_check({MOST_NAMED})")]
    seen = f"{database.value('PRAGMA page_count')} pages"
    return Finding("structure", seen, "" if lines == ["ok"] else "; ".join(lines), RESTORE)


def _references(database: Database) -> Finding:
    broken = [f"{row[0]} row {row[1]} → {row[2]}" for row in database.rows("PRAGMA foreign_key_check")]
    return Finding("references", "between all tables", _named(broken), RESTORE)


def _schema(database: Database) -> Finding:
    number, newest = schema_number(database), MIGRATIONS[-1].number
    if number > newest:
        fault = f"this release knows schemas up to {newest}"
        return Finding("schema", str(number), fault, "start the newer release that wrote it")
    later = "" if number == newest else f"; the next start brings it to {newest}"
    return Finding("schema", f"{number}{later}", "" if number else "there are no tables", RESTORE)


def _rigs(database: Database) -> Finding:
    broken, count = [], 0
    for row in database.rows("SELECT rig, description FROM rigs"):
        count += 1
        if Rig.model_validate(json.loads(row["description"])).name != row["rig"]:
            broken.append(str(row["rig"]))
    return Finding("rigs", f"{count} rigs", _named(broken), RESTORE)


def _chunks(database: Database) -> Finding:
    broken = [name for name, good in _each_chunk(database) if not good]
    count = database.value("SELECT count(*) FROM chunks")
    return Finding("samples", f"{count} chunks against their CRC-32", _named(broken), RESTORE)


def _each_chunk(database: Database) -> Iterator[tuple[str, bool]]:
    for key in database.rows("SELECT rowid, episode, chunk FROM chunks ORDER BY rowid"):
        row = database.row("SELECT count, times, obs, act, crc FROM chunks WHERE rowid = ?", (key["rowid"],))
        chunk = None if row is None else ChunkRow(*row)
        good = chunk is not None and chunk.computed_crc() == chunk.crc and len(chunk.times) == 8 * chunk.count
        yield f"episode {key['episode']}, chunk {key['chunk']}", good


def _episodes(database: Database) -> Finding:
    rows = database.rows(
        "SELECT e.episode FROM episodes e LEFT JOIN chunks c ON c.episode = e.episode GROUP BY e.episode "
        "HAVING e.chunks <> count(c.chunk) OR e.samples <> coalesce(sum(c.count), 0) "
        "OR (e.chunks > 0 AND (min(c.chunk) <> 0 OR max(c.chunk) <> e.chunks - 1))"
    )
    count = database.value("SELECT count(*) FROM episodes")
    return Finding("episodes", f"{count} episodes against their counts", _named([str(row[0]) for row in rows]), RESTORE)


def _versions(database: Database) -> Finding:
    broken = []
    keys = database.rows("SELECT version, sha256 FROM versions ORDER BY version")
    for key in keys:
        data = database.value("SELECT policy FROM versions WHERE version = ?", (key["version"],))
        try:
            read_policy(bytes(data), expected_sha256=key["sha256"])
        except NearhandError as error:
            broken.append(f"version {key['version']}: {error.message}")
    return Finding("versions", f"{len(keys)} policy files against SHA-256, shapes and probe", _named(broken), RESTORE)


def _events(database: Database) -> Finding:
    verdict = Events(database).verify()
    return Finding("event record", f"{verdict.events} events", "" if verdict.intact else verdict.message, RESTORE)


def _named(broken: list[str]) -> str:
    more = len(broken) - MOST_NAMED
    return "; ".join(broken[:MOST_NAMED]) + (f"; and {more} more" if more > 0 else "")


_PARTS: dict[str, Callable[[Database], Finding]] = {
    "structure": _structure,
    "references": _references,
    "schema": _schema,
    "rigs": _rigs,
    "samples": _chunks,
    "episodes": _episodes,
    "versions": _versions,
    "event record": _events,
}
