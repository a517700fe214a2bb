"""The SQLite connection: durable, one writer, nested transactions, errors that say what to do."""

from __future__ import annotations

import contextlib
import sqlite3
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

from nearhand.service.errors import StoreError

BUSY_TIMEOUT_S = 5.0
#: Marks the file as ours in its header ("NHND").
APPLICATION_ID = 0x4E484E44

_ADVICE: tuple[tuple[str, str, str], ...] = (
    ("SQLITE_FULL", "store.full", "the disk is full; free some space, nothing that was acknowledged is lost"),
    ("SQLITE_BUSY", "store.locked", "another program holds the database; close it and try again"),
    ("SQLITE_LOCKED", "store.locked", "another program holds the database; close it and try again"),
    ("SQLITE_CORRUPT", "store.damaged", "the file is damaged; stop the service and restore it from a backup"),
    ("SQLITE_NOTADB", "store.damaged", "the file is no database; restore it from a backup or give another data folder"),
    ("SQLITE_CANTOPEN", "store.access", "the file cannot be opened; check that the data folder exists and is writable"),
    ("SQLITE_READONLY", "store.access", "the file cannot be written; check the permissions of the data folder"),
    ("SQLITE_PERM", "store.access", "the file cannot be used; check the permissions of the data folder"),
    ("SQLITE_IOERR", "store.io", "the disk failed to read or write; check its health and its free space"),
    ("SQLITE_CONSTRAINT", "store.constraint", "the change would break a rule of the store; nothing was changed"),
    ("SQLITE_TOOBIG", "store.too_big", "a value is too large for the database; send smaller pieces"),
)


def store_error(error: sqlite3.Error, path: str) -> StoreError:
    """Return the store error that a database error stands for, with what to do about it."""
    name = str(getattr(error, "sqlite_errorname", "") or "")
    for prefix, code, advice in _ADVICE:
        if name.startswith(prefix):
            return StoreError(f"database {path}: {error}: {advice}", code=code)
    return StoreError(f"database {path}: {error}", code="store.failed")


class Database:
    """One connection to the store's file, for one thread; close it when done.

    Args:
        path: the file; made if it does not exist, in a folder that does.
        busy_timeout_s: how long a write waits for another program's lock.
        read_only: change nothing, not even in an empty file; the file exists.

    Raises:
        StoreError: the file cannot be opened, is damaged or belongs to something else.
    """

    def __init__(self, path: Path, *, busy_timeout_s: float = BUSY_TIMEOUT_S, read_only: bool = False) -> None:
        self.path = str(path)
        self._depth = 0
        try:
            if read_only:
                name = f"{path.absolute().as_uri()}?mode=ro"
                self._connection = sqlite3.connect(name, timeout=busy_timeout_s, isolation_level=None, uri=True)
            else:
                self._connection = sqlite3.connect(path, timeout=busy_timeout_s, isolation_level=None)
        except sqlite3.Error as error:
            raise store_error(error, self.path) from error
        try:
            self._connection.row_factory = sqlite3.Row
            if read_only:
                self._recognise()
            else:
                self._prepare()
        except BaseException:
            self._connection.close()
            raise

    def _recognise(self) -> None:
        if self.value("PRAGMA application_id") != APPLICATION_ID:
            raise StoreError(f"database {self.path} is none of Nearhand's", code="store.foreign")

    def _prepare(self) -> None:
        owner = self.value("PRAGMA application_id")
        if owner != APPLICATION_ID:
            if owner != 0 or self.value("SELECT count(*) FROM sqlite_master"):
                raise StoreError(
                    f"database {self.path} belongs to another program; give another data folder", code="store.foreign"
                )
            self.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        mode = self.value("PRAGMA journal_mode = WAL")
        if str(mode).lower() != "wal":
            raise StoreError(
                f"database {self.path}: write-ahead logging is not possible there (mode {mode}); "
                "use a data folder on a local disk",
                code="store.access",
            )
        self.execute("PRAGMA synchronous = FULL")
        self.execute("PRAGMA foreign_keys = ON")

    def close(self) -> None:
        """Close the connection; an open transaction is rolled back."""
        self._connection.close()

    def copy_to(self, path: Path) -> None:
        """Copy the database, as it is at one moment, into a fresh file that stands alone; writers go on meanwhile.

        Raises:
            StoreError: reading or writing failed; what is in the file then is of no use.
        """
        try:
            with contextlib.closing(sqlite3.connect(path, isolation_level=None)) as copy:
                self._connection.backup(copy)
                copy.execute("PRAGMA journal_mode = DELETE")
        except sqlite3.Error as error:
            raise store_error(error, str(path)) from error

    def size_bytes(self) -> int:
        """Return the size of the database, without its write-ahead log."""
        return int(self.value("PRAGMA page_count")) * int(self.value("PRAGMA page_size"))

    @property
    def in_transaction(self) -> bool:
        """Whether an ``atomic`` block is open."""
        return self._depth > 0

    def execute(self, statement: str, values: Sequence[Any] = ()) -> sqlite3.Cursor:
        """Run one statement.

        Raises:
            StoreError: the database refused it, or has already rolled back the transaction that it belongs to.
        """
        if self._depth and not self._connection.in_transaction:
            raise StoreError(
                f"database {self.path} has rolled back the transaction after an error", code="store.failed"
            )
        try:
            return self._connection.execute(statement, tuple(values))
        except sqlite3.Error as error:
            raise store_error(error, self.path) from error

    def rows(self, statement: str, values: Sequence[Any] = ()) -> list[sqlite3.Row]:
        """Return all rows of a query."""
        cursor = self.execute(statement, values)
        try:
            return list(cursor.fetchall())
        except sqlite3.Error as error:
            raise store_error(error, self.path) from error

    def row(self, statement: str, values: Sequence[Any] = ()) -> sqlite3.Row | None:
        """Return the first row of a query, or None."""
        rows = self.rows(statement, values)
        return rows[0] if rows else None

    def value(self, statement: str, values: Sequence[Any] = ()) -> Any:
        """Return the first column of the first row, or None."""
        row = self.row(statement, values)
        return None if row is None else row[0]

    def insert(self, statement: str, values: Sequence[Any] = ()) -> int:
        """Run an insert and return the new row's number."""
        return int(self.execute(statement, values).lastrowid or 0)

    @contextlib.contextmanager
    def atomic(self) -> Iterator[None]:
        """Do all or nothing of what the block does; blocks nest, an inner one can fail alone.

        An error within the block is the one that leaves it, whatever happens while rolling back.
        """
        depth = self._depth
        self.execute(f"SAVEPOINT nested_{depth}" if depth else "BEGIN IMMEDIATE")
        self._depth = depth + 1
        try:
            yield
            self.execute(f"RELEASE nested_{depth}" if depth else "COMMIT")
        except BaseException:
            with contextlib.suppress(sqlite3.Error):
                if depth:
                    self._connection.execute(f"ROLLBACK TO nested_{depth}")
                    self._connection.execute(f"RELEASE nested_{depth}")
                elif self._connection.in_transaction:
                    self._connection.execute("ROLLBACK")
            raise
        finally:
            self._depth = depth
