"""JSON Schema of every message, by lane and kind, for clients in other languages."""

from __future__ import annotations

from typing import Any

from nearhand.service.bus.action_messages import ACTION_REPLIES, ACTION_REQUESTS
from nearhand.service.bus.desk_messages import DESK_REPLIES, DESK_REQUESTS
from nearhand.service.bus.feed_messages import FEED_MESSAGES
from nearhand.service.bus.intake_messages import INTAKE_REPLIES, INTAKE_REQUESTS
from nearhand.service.bus.message import PROTOCOL_VERSION, Message

PUBLIC_LANES: dict[str, tuple[dict[str, type[Message]], ...]] = {
    "action": (ACTION_REQUESTS, ACTION_REPLIES),
    "intake": (INTAKE_REQUESTS, INTAKE_REPLIES),
    "desk": (DESK_REQUESTS, DESK_REPLIES),
    "feed": (FEED_MESSAGES,),
}


def schemas() -> dict[str, Any]:
    """Return protocol version and, per lane and kind, the JSON Schema; binary fields have format ``binary``."""
    return {
        "protocol": PROTOCOL_VERSION,
        "lanes": {
            lane: {kind: model.model_json_schema() for group in groups for kind, model in group.items()}
            for lane, groups in PUBLIC_LANES.items()
        },
    }
