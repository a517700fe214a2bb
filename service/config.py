"""Settings of a running service: where its data lie and where its sockets are."""

from __future__ import annotations

import json
from pathlib import Path

from pydantic import ValidationError

from nearhand.service.bus.limits import USUAL, Limits
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, sentence

DEFAULT_HOST = "127.0.0.1"
DEFAULT_PORTS = {"action": 5870, "intake": 5871, "desk": 5872, "feed": 5873}


class ServiceSettings(Frozen):
    """What the supervisor hands to each of its processes.

    ``action``, ``intake``, ``desk`` and ``feed`` are the public lanes; ``control`` (keeper ↔ action server) and
    ``progress`` (jobs → keeper) are ipc addresses inside the service. ``keys`` is the folder of keys, None where the
    service has none and lets in whoever can reach it.
    """

    data: Path
    action: str
    intake: str
    desk: str
    feed: str
    control: str
    progress: str
    keys: Path | None = None
    limits: Limits = USUAL

    @property
    def database(self) -> Path:
        """The one SQLite file."""
        return self.data / "nearhand.sqlite3"

    @property
    def jobs(self) -> Path:
        """Folder of the jobs' folders."""
        return self.data / "jobs"

    @property
    def run(self) -> Path:
        """Folder of what only matters while the service runs."""
        return self.data / "run"


def read_settings(path: Path) -> ServiceSettings:
    """Read the settings that the supervisor wrote.

    Raises:
        ConfigError: missing or wrong.
    """
    try:
        return ServiceSettings.model_validate(json.loads(path.read_text(encoding="utf-8")))
    except (OSError, ValueError) as error:
        detail = sentence(error) if isinstance(error, ValidationError) else str(error)
        raise ConfigError(f"cannot use the settings in {path}: {detail}; the supervisor writes this file") from error
