"""Desk messages about shadows: a version that looks on beside whoever acts, without acting."""

from __future__ import annotations

from nearhand.service.bus.desk_request import Deed, DeskReply, DeskRequest
from nearhand.service.bus.message import Count, Identifier, Label, Table


class StartShadow(Deed):
    """Have a version look on; an earlier shadow of its rig ends."""

    kind: str = "start-shadow"
    version: Count


class StopShadow(Deed):
    """End the rig's present shadow, if there is one."""

    kind: str = "stop-shadow"
    rig: Identifier


class GetShadow(DeskRequest):
    """Ask how far a rig's latest shadow (of a version, if given) is from what was done."""

    kind: str = "get-shadow"
    rig: Identifier
    version: Count | None = None


class ShadowReply(DeskReply):
    """``beside``: who acted (``policy``, ``operator``, ``fallback``) → {periods, figures by channel}.

    A figure is {value, low, high, n, unit}: root mean square of would-be less done action, over stretches of a second.
    """

    kind: str = "shadow-reply"
    rig: Identifier
    version: Count
    state: Label
    began_utc: Label
    ended_utc: Label
    rows: Count
    beside: dict[str, Table]
