"""The queries of the action lane, checked by hand where they are as usual; anything else goes to the message models."""

from __future__ import annotations

from typing import NamedTuple

import msgpack

from nearhand.service.bus.action_messages import Act
from nearhand.service.bus.message import PROTOCOL_VERSION

#: How many fields an ``act`` has besides ``applied``.
FIELDS = 7
#: First byte of a map of at most fifteen entries, but for the count (MessagePack specification, "map format family").
FIXMAP = 0x80
SHORT_FRAME_BYTES = 4096
LIMIT = 2**63


class Query(NamedTuple):
    """What ``act`` says."""

    rig: str
    session: str
    seq: int
    sent_ns: int
    obs: bytes | tuple[float, ...]
    applied: bytes | tuple[float, ...] | None


def of(message: Act) -> Query:
    """Return the query of a message."""
    return Query(message.rig, message.session, message.seq, message.sent_ns, message.obs, message.applied)


def usual(frame: bytes) -> Query | None:
    """Return the query in a frame if it is an ``act`` with vectors of bytes; None leaves it to the model.

    No hook is called per map, as the codec does to find a key that appears twice: that shows in the count at the
    frame's start. The names' form is not looked at: a name that is no rig's and no session's is refused later.
    """
    count = frame[0] - FIXMAP if frame else 0
    if not FIELDS <= count <= FIELDS + 1 or len(frame) > SHORT_FRAME_BYTES:
        return None
    try:
        table = msgpack.unpackb(frame, use_list=False, max_map_len=FIELDS + 1, max_ext_len=0)
        version, seq, sent_ns = table["v"], table["seq"], table["sent_ns"]
        rig, session, obs, kind = table["rig"], table["session"], table["obs"], table["kind"]
        applied = table["applied"] if count > FIELDS else None
    except Exception:  # whatever it is, the codec finds words for it
        return None
    if (
        len(table) == count
        and kind == "act"
        and type(version) is int
        and version == PROTOCOL_VERSION
        and type(rig) is str
        and type(session) is str
        and type(seq) is int
        and 0 <= seq < LIMIT
        and type(sent_ns) is int
        and 0 <= sent_ns < LIMIT
        and type(obs) is bytes
        and (applied is None or type(applied) is bytes)
    ):
        return Query(rig, session, seq, sent_ns, obs, applied)
    return None
