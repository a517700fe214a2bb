"""The desk lane: each request goes to the room of its subject; every error is answered."""

from __future__ import annotations

import traceback
from typing import Any

from nearhand.service.bus.codec import decode_map, from_map
from nearhand.service.bus.desk_messages import DESK_REQUESTS
from nearhand.service.bus.desk_request import DeskRequest
from nearhand.service.bus.message import Message
from nearhand.service.errors import NearhandError
from nearhand.service.keeper import (
    curation_room,
    episode_room,
    job_room,
    record_room,
    rig_room,
    shadow_room,
    version_room,
)
from nearhand.service.keeper.lane import Lane, Request, error_reply
from nearhand.service.keeper.ledger import log_line
from nearhand.service.keeper.office import Office, Room

MAX_AT_ONCE = 16
ROOMS: Room = {
    **rig_room.ROOM, **episode_room.ROOM, **curation_room.ROOM, **job_room.ROOM, **version_room.ROOM,
    **shadow_room.ROOM, **record_room.ROOM,
}  # fmt: skip


class Desk:
    """Answers operators.

    Args:
        office: what the rooms work with.
        lane: where requests arrive.
    """

    def __init__(self, office: Office, lane: Lane) -> None:
        self._office = office
        self._lane = lane

    def serve(self) -> int:
        """Answer what waits, up to a bound; return how many requests that were."""
        for served in range(MAX_AT_ONCE):
            request = self._lane.receive()
            if request is None:
                return served
            self._lane.reply(request, self._answer(request))
        return MAX_AT_ONCE

    def _answer(self, request: Request) -> Message:
        counters = self._office.ledger.counters
        counters["desk.requests"] += 1
        table: dict[str, Any] | None = None
        try:
            table = decode_map(request.frame(), self._lane.limits)
            self._office.access.begin("desk", request)
            message = from_map(table, DESK_REQUESTS)
            assert isinstance(message, DeskRequest)
            self._office.access.require(message.role, "desk", message.kind)
            return ROOMS[message.kind](self._office, message)
        except NearhandError as error:
            counters["desk.errors"] += 1
            counters[f"errors.{error.code}"] += 1
            return error_reply(error, table)
        except Exception as error:
            log_line(f"desk-defect message={error!r}\n{traceback.format_exc()}")
            counters["desk.errors"] += 1
            counters["errors.internal"] += 1
            return error_reply(NearhandError("an internal error; see the service's log", code="error.internal"), table)
