"""The third step of the schema: what was decided about demonstrations, and the training sets saved from them."""

from __future__ import annotations

SCHEMA_3: tuple[str, ...] = (
    """
    CREATE TABLE curation (
        episode TEXT PRIMARY KEY REFERENCES episodes (episode),
        excluded INTEGER NOT NULL DEFAULT 0,
        start_s REAL NOT NULL DEFAULT 0 CHECK (start_s >= 0),
        end_s REAL CHECK (end_s IS NULL OR end_s > start_s),
        weight REAL NOT NULL DEFAULT 1 CHECK (weight > 0),
        tags TEXT NOT NULL DEFAULT '[]'
    ) STRICT
    """,
    """
    CREATE TABLE training_sets (
        rig TEXT NOT NULL REFERENCES rigs (rig),
        name TEXT NOT NULL,
        sha256 TEXT NOT NULL,
        created_utc TEXT NOT NULL,
        who TEXT NOT NULL,
        why TEXT NOT NULL,
        PRIMARY KEY (rig, name)
    ) STRICT
    """,
    """
    CREATE TABLE training_set_members (
        rig TEXT NOT NULL,
        name TEXT NOT NULL,
        place INTEGER NOT NULL,
        episode TEXT NOT NULL REFERENCES episodes (episode),
        start_s REAL NOT NULL,
        end_s REAL,
        weight REAL NOT NULL,
        sha256 TEXT NOT NULL,
        PRIMARY KEY (rig, name, place),
        UNIQUE (rig, name, episode)
    ) STRICT
    """,
    # What a version will be measured or calibrated on never trains: the database itself refuses it.
    """
    CREATE TRIGGER training_sets_hold_training_episodes BEFORE INSERT ON training_set_members
    WHEN NOT EXISTS (
        SELECT 1 FROM episodes WHERE episode = NEW.episode AND rig = NEW.rig AND state = 'closed' AND split = 'train'
    ) BEGIN SELECT RAISE(ABORT, 'a training set holds training episodes of its rig only'); END
    """,
    """
    CREATE TRIGGER a_use_is_settled_once BEFORE UPDATE OF split ON episodes
    WHEN OLD.split IS NOT NULL AND NEW.split IS NOT OLD.split
    BEGIN SELECT RAISE(ABORT, 'the use of an episode is settled once'); END
    """,
    # Members come before the set's own row, which closes it.
    """
    CREATE TRIGGER training_sets_are_closed BEFORE INSERT ON training_set_members
    WHEN EXISTS (SELECT 1 FROM training_sets WHERE rig = NEW.rig AND name = NEW.name)
    BEGIN SELECT RAISE(ABORT, 'a training set is immutable'); END
    """,
    """
    CREATE TRIGGER training_sets_never_change BEFORE UPDATE ON training_sets
    BEGIN SELECT RAISE(ABORT, 'a training set is immutable'); END
    """,
    """
    CREATE TRIGGER training_sets_stay BEFORE DELETE ON training_sets
    BEGIN SELECT RAISE(ABORT, 'a training set is never deleted'); END
    """,
    """
    CREATE TRIGGER training_set_members_never_change BEFORE UPDATE ON training_set_members
    BEGIN SELECT RAISE(ABORT, 'a training set is immutable'); END
    """,
    """
    CREATE TRIGGER training_set_members_stay BEFORE DELETE ON training_set_members
    BEGIN SELECT RAISE(ABORT, 'a training set is immutable'); END
    """,
)
