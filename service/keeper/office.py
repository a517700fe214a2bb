"""What the desk's rooms work with."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from importlib import metadata
from typing import Any

from nearhand.service.bus.desk_request import DeskReply
from nearhand.service.config import ServiceSettings
from nearhand.service.keeper.access import Access
from nearhand.service.keeper.action_server import ActionServer
from nearhand.service.keeper.job_queue import JobQueue
from nearhand.service.keeper.ledger import Ledger


@dataclass(frozen=True, slots=True)
class Office:
    """The keeper's parts, as the desk needs them.

    Attributes:
        settings: with the lanes' addresses in force.
        started_s: monotonic time of the keeper's start.
        access: what the key of the present request may do.
    """

    ledger: Ledger
    server: ActionServer
    queue: JobQueue
    settings: ServiceSettings
    started_s: float
    access: Access


#: A room answers requests of its subject: request kind → function.
Room = dict[str, Callable[[Office, Any], DeskReply]]


def software_version() -> str:
    """Return the installed version of Nearhand."""
    try:
        return metadata.version("nearhand")
    except metadata.PackageNotFoundError:
        return "unknown"
