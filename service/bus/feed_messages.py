"""Messages of the feed lane: lossy by design, nothing that must arrive travels here.

Each is two frames: the topic (the kind), then the message.
"""

from __future__ import annotations

from typing import ClassVar

from pydantic import Field, FiniteFloat

from nearhand.service.bus.message import Count, Identifier, Label, Message, Table, Text, kinds


class Progress(Message):
    """How far a job is. ``figures`` are its diagnostics (see the trainer); ``eta_s`` is absent until known."""

    lane: ClassVar[str] = "feed"
    kind: str = "progress"
    job: Count
    stage: Label
    fraction: FiniteFloat
    eta_s: FiniteFloat | None = None
    figures: dict[str, float] = Field(default_factory=dict)
    message: Text = ""


class Event(Message):
    """A new line of the event record."""

    lane: ClassVar[str] = "feed"
    kind: str = "event"
    event: Count
    utc: Label
    rig: Label
    what: Label
    who: Label
    why: Text
    detail: Table


class RigHealth(Message):
    """A rig's state, several times a second while it is driven."""

    lane: ClassVar[str] = "feed"
    kind: str = "rig-health"
    rig: Identifier
    state: Table


FEED_MESSAGES = kinds(Progress, Event, RigHealth)
