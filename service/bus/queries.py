"""The queries of the action lane, written and read by hand where they are as usual; the models have the rest."""

from __future__ import annotations

from typing import NamedTuple

import msgpack

from nearhand.service.bus.action_messages import Act
from nearhand.service.bus.message import PROTOCOL_VERSION

#: How many fields an ``act`` has at least; ``applied`` and ``by_operator`` may be left out.
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
    by_operator: bool = False


def pack_query(
    rig: str, session: str, seq: int, sent_ns: int, obs: bytes, applied: bytes, *, by_operator: bool = False
) -> bytes:
    """Return the frame of a usual query."""
    return bytes(
        msgpack.packb(
            {
                "v": PROTOCOL_VERSION, "kind": "act", "rig": rig, "session": session, "seq": seq, "sent_ns": sent_ns,
                "obs": obs, "applied": applied, "by_operator": by_operator,
            }
        )
    )  # fmt: skip


def of(message: Act) -> Query:
    """Return the query of a message."""
    return Query(
        message.rig, message.session, message.seq, message.sent_ns, message.obs, message.applied, message.by_operator
    )


def usual(frame: bytes) -> Query | None:
    """Return the query in a frame if it is an ``act`` with vectors of bytes; None leaves it to the model.

    No hook is called per map, as the codec does to find a key that appears twice: that shows in the count at the
    frame's start. The names' form is not looked at: a name that is no rig's and no session's is refused later.
    """
    count = frame[0] - FIXMAP if frame else 0
    if not FIELDS <= count <= FIELDS + 2 or len(frame) > SHORT_FRAME_BYTES:
        return None
    try:
        table = msgpack.unpackb(frame, use_list=False, max_map_len=FIELDS + 2, max_ext_len=0)
        version, seq, sent_ns = table["v"], table["seq"], table["sent_ns"]
        rig, session, obs, kind = table["rig"], table["session"], table["obs"], table["kind"]
        applied, by_operator = table.get("applied"), table.get("by_operator", False)
        known = FIELDS + ("applied" in table) + ("by_operator" in table)
    except Exception:  # whatever it is, the codec finds words for it
        return None
    if (
        len(table) == count == known
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
        and type(by_operator) is bool
    ):
        return Query(rig, session, seq, sent_ns, obs, applied, by_operator)
    return None
