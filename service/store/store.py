"""The store as a whole: one file, its records by subject."""

from __future__ import annotations

from pathlib import Path

from nearhand.service.errors import StoreError
from nearhand.service.store.curation import Curation
from nearhand.service.store.database import Database
from nearhand.service.store.episodes import Episodes
from nearhand.service.store.events import Events
from nearhand.service.store.jobs import Jobs
from nearhand.service.store.migrations import migrate
from nearhand.service.store.releases import Releases
from nearhand.service.store.rigs import Rigs
from nearhand.service.store.shadows import Shadows
from nearhand.service.store.versions import Versions


class Store:
    """Opens the file, brings its schema up to date and gives access to its records; close it when done.

    Raises:
        StoreError: the file cannot be used, or is from a newer release.
    """

    def __init__(self, path: Path) -> None:
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise StoreError(f"cannot make the data folder {path.parent}: {error}", code="store.access") from error
        self.database = Database(path)
        try:
            migrate(self.database)
        except BaseException:
            self.database.close()
            raise
        self.rigs = Rigs(self.database)
        self.episodes = Episodes(self.database)
        self.curation = Curation(self.database)
        self.versions = Versions(self.database)
        self.jobs = Jobs(self.database)
        self.releases = Releases(self.database)
        self.shadows = Shadows(self.database)
        self.events = Events(self.database)

    def close(self) -> None:
        """Close the file."""
        self.database.close()
