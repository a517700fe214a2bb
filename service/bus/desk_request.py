"""What every request and reply of the desk lane has."""

from __future__ import annotations

from typing import ClassVar

from pydantic import Field

from nearhand.service.bus.message import Identifier, Label, Message, Text


class DeskRequest(Message):
    """Base of desk requests; ``request`` comes back in the reply.

    ``role`` is what a key needs for it, where the service has keys; an empty one means that any key will do.
    """

    lane: ClassVar[str] = "desk"
    role: ClassVar[str] = "view"
    request: Identifier


class DeskReply(Message):
    """Base of desk replies."""

    lane: ClassVar[str] = "desk"
    request: Identifier


class Deed(DeskRequest):
    """Base of requests that change something: who does it and why go to the event record."""

    role: ClassVar[str] = "release"
    who: Label = Field(min_length=1)
    why: Text = ""
