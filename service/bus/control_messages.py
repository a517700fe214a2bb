"""Messages between keeper and action server, inside the service (ipc); not part of the public wire."""

from __future__ import annotations

from typing import ClassVar

from pydantic import Field

from nearhand.service.bus.message import Count, ErrorReply, Identifier, Label, Message, Table, Text, kinds


class Load(Message):
    """Prepare a rig and put a version in service between two queries; ``version`` 0 takes it out of service.

    ``policy`` is the version's file; its SHA-256 and its probe are checked before anything changes.
    """

    lane: ClassVar[str] = "control"
    kind: str = "load"
    request: Identifier
    rig: Identifier
    description: Table
    version: Count
    sha256: Label = ""
    policy: bytes = b""


class Accompany(Message):
    """Have a version look on beside whoever acts, without acting; ``version`` 0 ends it."""

    lane: ClassVar[str] = "control"
    kind: str = "accompany"
    request: Identifier
    rig: Identifier
    version: Count
    sha256: Label = ""
    policy: bytes = b""


class Arm(Message):
    """Clear a rig's latch."""

    lane: ClassVar[str] = "control"
    kind: str = "arm"
    request: Identifier
    rig: Identifier
    who: Label
    why: Text


class Latch(Message):
    """Latch a rig for the operator."""

    lane: ClassVar[str] = "control"
    kind: str = "latch"
    request: Identifier
    rig: Identifier
    who: Label
    why: Text


class Drain(Message):
    """Ask for counters, rig states and the occurrences after number ``after``; earlier ones may be forgotten.

    ``shadows``: by rig, the number of the last row of its shadow that is stored.
    """

    lane: ClassVar[str] = "control"
    kind: str = "drain"
    request: Identifier
    after: Count
    shadows: dict[str, Count] = Field(default_factory=dict)


class ControlReply(Message):
    """Reply to ``load``, ``accompany``, ``arm`` and ``latch``: the rig's state."""

    lane: ClassVar[str] = "control"
    kind: str = "control-reply"
    request: Identifier
    rig: Identifier
    mode: Label
    version: Count
    reasons: Count


class DrainReply(Message):
    """``instance`` changes with every start of the action server.

    ``occurrences``: maps {number, utc, rig, what, detail}; ``what`` is ``trip``, ``armed``, ``latched``, ``loaded``,
    ``session``, ``taken``, ``handed-back``. ``rigs``: name → {mode, version, reasons, observation, action, novelty,
    queries, interventions, interventions_per_minute, trips, age_s, rate_hz, shadow}. ``shadows``: rig → {version,
    first, count, would, done, driver}: rows from number ``first`` on, float32 rows and one byte each for who acted
    (0 fallback, 1 policy, 2 operator).
    """

    lane: ClassVar[str] = "control"
    kind: str = "drain-reply"
    request: Identifier
    instance: Identifier
    occurrences: tuple[Table, ...]
    rigs: dict[str, Table]
    counters: dict[str, int]
    shadows: dict[str, Table] = Field(default_factory=dict)


CONTROL_REQUESTS = kinds(Load, Accompany, Arm, Latch, Drain)
CONTROL_REPLIES = kinds(ControlReply, DrainReply, ErrorReply)
