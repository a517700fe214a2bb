"""Schema 1: the tables, and the rules that the database itself enforces."""

from __future__ import annotations

SCHEMA_1: tuple[str, ...] = (
    """
    CREATE TABLE rigs (
        rig TEXT PRIMARY KEY,
        toml TEXT NOT NULL,
        description TEXT NOT NULL,
        digest TEXT NOT NULL,
        put_utc TEXT NOT NULL
    ) STRICT
    """,
    """
    CREATE TABLE rig_history (
        entry INTEGER PRIMARY KEY AUTOINCREMENT,
        rig TEXT NOT NULL REFERENCES rigs (rig),
        digest TEXT NOT NULL,
        toml TEXT NOT NULL,
        description TEXT NOT NULL,
        put_utc TEXT NOT NULL,
        who TEXT NOT NULL
    ) STRICT
    """,
    "CREATE INDEX rig_history_by_rig ON rig_history (rig, digest)",
    """
    CREATE TABLE episodes (
        episode TEXT PRIMARY KEY,
        rig TEXT NOT NULL REFERENCES rigs (rig),
        rig_digest TEXT NOT NULL,
        operator TEXT NOT NULL,
        task TEXT NOT NULL,
        notes TEXT NOT NULL,
        started_utc TEXT NOT NULL,
        opened_utc TEXT NOT NULL,
        closed_utc TEXT,
        observations INTEGER NOT NULL,
        actions INTEGER NOT NULL,
        state TEXT NOT NULL CHECK (state IN ('open', 'closed', 'discarded')),
        chunks INTEGER NOT NULL DEFAULT 0,
        samples INTEGER NOT NULL DEFAULT 0,
        finite INTEGER NOT NULL DEFAULT 1,
        outcome TEXT NOT NULL DEFAULT 'unknown',
        terminated INTEGER NOT NULL DEFAULT 0,
        final_obs BLOB,
        split TEXT,
        CHECK (state <> 'closed' OR (final_obs IS NOT NULL AND split IS NOT NULL AND samples > 0))
    ) STRICT
    """,
    "CREATE INDEX episodes_by_rig ON episodes (rig, state, operator)",
    """
    CREATE TABLE chunks (
        episode TEXT NOT NULL REFERENCES episodes (episode),
        chunk INTEGER NOT NULL,
        count INTEGER NOT NULL,
        times BLOB NOT NULL,
        obs BLOB NOT NULL,
        act BLOB NOT NULL,
        crc INTEGER NOT NULL,
        UNIQUE (episode, chunk)
    ) STRICT
    """,
    """
    CREATE TABLE jobs (
        job INTEGER PRIMARY KEY AUTOINCREMENT,
        kind TEXT NOT NULL,
        rig TEXT NOT NULL REFERENCES rigs (rig),
        options TEXT NOT NULL,
        state TEXT NOT NULL CHECK (state IN ('queued', 'running', 'done', 'failed', 'cancelled')),
        who TEXT NOT NULL,
        why TEXT NOT NULL,
        created_utc TEXT NOT NULL,
        started_utc TEXT,
        ended_utc TEXT,
        code TEXT NOT NULL DEFAULT '',
        message TEXT NOT NULL DEFAULT '',
        result TEXT
    ) STRICT
    """,
    """
    CREATE TABLE versions (
        version INTEGER PRIMARY KEY AUTOINCREMENT,
        rig TEXT NOT NULL REFERENCES rigs (rig),
        rig_digest TEXT NOT NULL,
        name TEXT NOT NULL,
        method TEXT NOT NULL,
        state TEXT NOT NULL CHECK (state IN ('drafted', 'measured', 'in-service', 'stood-down')),
        created_utc TEXT NOT NULL,
        sha256 TEXT NOT NULL,
        policy BLOB NOT NULL,
        provenance TEXT NOT NULL,
        parent INTEGER REFERENCES versions (version),
        job INTEGER REFERENCES jobs (job),
        refusal TEXT NOT NULL DEFAULT ''
    ) STRICT
    """,
    "CREATE INDEX versions_by_rig ON versions (rig, version)",
    "CREATE UNIQUE INDEX one_version_in_service ON versions (rig) WHERE state = 'in-service'",
    """
    CREATE TRIGGER versions_keep_their_content
    BEFORE UPDATE OF version, rig, rig_digest, name, method, created_utc, sha256, policy, provenance, parent, job
    ON versions BEGIN SELECT RAISE(ABORT, 'a version is immutable'); END
    """,
    """
    CREATE TRIGGER versions_stay BEFORE DELETE ON versions
    BEGIN SELECT RAISE(ABORT, 'a version is never deleted'); END
    """,
    """
    CREATE TABLE measurements (
        measurement INTEGER PRIMARY KEY AUTOINCREMENT,
        version INTEGER NOT NULL REFERENCES versions (version),
        job INTEGER REFERENCES jobs (job),
        utc TEXT NOT NULL,
        rig_digest TEXT NOT NULL,
        machine_digest TEXT NOT NULL,
        content TEXT NOT NULL
    ) STRICT
    """,
    "CREATE INDEX measurements_by_version ON measurements (version, measurement)",
    """
    CREATE TABLE releases (
        release INTEGER PRIMARY KEY AUTOINCREMENT,
        utc TEXT NOT NULL,
        rig TEXT NOT NULL REFERENCES rigs (rig),
        what TEXT NOT NULL CHECK (what IN ('release', 'rollback', 'stand-down')),
        version INTEGER NOT NULL,
        previous INTEGER NOT NULL,
        who TEXT NOT NULL,
        why TEXT NOT NULL,
        override INTEGER NOT NULL,
        measurement INTEGER REFERENCES measurements (measurement),
        bounds TEXT NOT NULL
    ) STRICT
    """,
    "CREATE INDEX releases_by_rig ON releases (rig, release)",
    """
    CREATE TABLE events (
        event INTEGER PRIMARY KEY,
        utc TEXT NOT NULL,
        rig TEXT NOT NULL,
        what TEXT NOT NULL,
        who TEXT NOT NULL,
        why TEXT NOT NULL,
        detail TEXT NOT NULL,
        previous TEXT NOT NULL,
        digest TEXT NOT NULL
    ) STRICT
    """,
    "CREATE INDEX events_by_rig ON events (rig, event)",
    """
    CREATE TRIGGER events_are_appended BEFORE INSERT ON events
    WHEN NEW.event <> (SELECT coalesce(max(event), 0) + 1 FROM events)
    BEGIN SELECT RAISE(ABORT, 'events are only ever appended'); END
    """,
    """
    CREATE TRIGGER events_never_change BEFORE UPDATE ON events
    BEGIN SELECT RAISE(ABORT, 'an event is never changed'); END
    """,
    """
    CREATE TRIGGER events_never_go BEFORE DELETE ON events
    BEGIN SELECT RAISE(ABORT, 'an event is never deleted'); END
    """,
    """
    CREATE TABLE event_head (
        head INTEGER PRIMARY KEY CHECK (head = 1),
        event INTEGER NOT NULL,
        digest TEXT NOT NULL
    ) STRICT
    """,
    """
    CREATE TABLE occurrences (
        instance TEXT NOT NULL,
        number INTEGER NOT NULL,
        event INTEGER NOT NULL REFERENCES events (event),
        PRIMARY KEY (instance, number)
    ) STRICT, WITHOUT ROWID
    """,
)
