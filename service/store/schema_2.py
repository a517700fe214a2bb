"""The second step of the schema: versions that look on beside whoever acts."""

from __future__ import annotations

SCHEMA_2: tuple[str, ...] = (
    """
    CREATE TABLE shadows (
        shadow INTEGER PRIMARY KEY AUTOINCREMENT,
        rig TEXT NOT NULL REFERENCES rigs (rig),
        version INTEGER NOT NULL REFERENCES versions (version),
        began_utc TEXT NOT NULL,
        ended_utc TEXT,
        who TEXT NOT NULL,
        why TEXT NOT NULL,
        rows INTEGER NOT NULL DEFAULT 0
    ) STRICT
    """,
    "CREATE UNIQUE INDEX one_shadow_per_rig ON shadows (rig) WHERE ended_utc IS NULL",
    # Rows as the action server numbered them in one life; would and done are float32 rows, driver one byte each.
    """
    CREATE TABLE shadow_rows (
        shadow INTEGER NOT NULL REFERENCES shadows (shadow),
        instance TEXT NOT NULL,
        first INTEGER NOT NULL,
        count INTEGER NOT NULL,
        would BLOB NOT NULL,
        done BLOB NOT NULL,
        driver BLOB NOT NULL,
        UNIQUE (shadow, instance, first)
    ) STRICT
    """,
)
