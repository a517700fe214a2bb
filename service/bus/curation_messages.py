"""Desk messages about curation: what is decided about episodes, and training sets."""

from __future__ import annotations

from typing import ClassVar

from pydantic import Field, FiniteFloat

from nearhand.service.bus.desk_request import Deed, DeskReply, DeskRequest
from nearhand.service.bus.message import Identifier, Label, Table, Text


class Curate(Deed):
    """Decide about closed episodes; a field that is not given stays as it is. Nothing stored is changed.

    ``start_s`` and ``end_s`` count from the episode's first sample; ``end_s`` = 0 takes the cut at the end back.
    """

    role: ClassVar[str] = "teach"
    kind: str = "curate"
    rig: Identifier
    episodes: tuple[Identifier, ...] = Field(min_length=1, max_length=10_000)
    why: Text = Field(min_length=1)
    excluded: bool | None = None
    start_s: FiniteFloat | None = Field(default=None, ge=0)
    end_s: FiniteFloat | None = Field(default=None, ge=0)
    weight: FiniteFloat | None = Field(default=None, gt=0, le=1000)
    tag: tuple[Label, ...] = Field(default=(), max_length=64)
    untag: tuple[Label, ...] = Field(default=(), max_length=64)


class ListCuration(DeskRequest):
    """Ask what is decided about a rig's closed episodes."""

    kind: str = "list-curation"
    rig: Identifier


class CurationReply(DeskReply):
    """One map per episode: episode, operator, split, samples, excluded, start_s, end_s, weight, tags."""

    kind: str = "curation-reply"
    rig: Identifier
    episodes: tuple[Table, ...]


class SaveSet(Deed):
    """Save a named training set for good: the named training episodes, or all that are not excluded."""

    role: ClassVar[str] = "teach"
    kind: str = "save-set"
    rig: Identifier
    name: Identifier
    episodes: tuple[Identifier, ...] = Field(default=(), max_length=100_000)


class ListSets(DeskRequest):
    """Ask for a rig's training sets."""

    kind: str = "list-sets"
    rig: Identifier


class SetsReply(DeskReply):
    """One map per set: name, sha256, created_utc, who, why, and members (episode, start_s, end_s, weight, sha256)."""

    kind: str = "sets-reply"
    rig: Identifier
    sets: tuple[Table, ...]
