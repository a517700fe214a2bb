"""Messages of the intake lane: episodes in chunks, cumulative acknowledgements of what is durable, credit."""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal

from pydantic import Field

from nearhand.service.bus.message import Count, ErrorReply, Identifier, Label, Message, Text, kinds

MAX_CHUNK_SAMPLES = 4096
Outcome = Literal["success", "failure", "cut", "unknown"]


class OpenEpisode(Message):
    """Begin, or take up again, an episode; the client chooses the identifier. Repeating it does no harm."""

    lane: ClassVar[str] = "intake"
    kind: str = "open-episode"
    episode: Identifier
    rig: Identifier
    operator: Label
    task: Label = ""
    notes: Text = ""
    started_utc: Label
    observations: Annotated[int, Field(ge=1, le=256)]
    actions: Annotated[int, Field(ge=1, le=256)]


class Chunk(Message):
    """``count`` consecutive samples: time (float64 seconds), observation and action (float32), little-endian rows.

    ``crc`` is CRC-32 (IEEE 802.3) of times + obs + act.
    """

    lane: ClassVar[str] = "intake"
    kind: str = "chunk"
    episode: Identifier
    chunk: Count
    count: Annotated[int, Field(ge=1, le=MAX_CHUNK_SAMPLES)]
    times: bytes
    obs: bytes
    act: bytes
    crc: Annotated[int, Field(ge=0, le=0xFFFFFFFF)]


class CloseEpisode(Message):
    """End an episode. ``final_obs`` is the observation after the last action; ``terminated`` marks a true terminal."""

    lane: ClassVar[str] = "intake"
    kind: str = "close-episode"
    episode: Identifier
    chunks: Count
    samples: Count
    outcome: Outcome
    terminated: bool = False
    final_obs: bytes


class DiscardEpisode(Message):
    """Throw an unfinished episode away."""

    lane: ClassVar[str] = "intake"
    kind: str = "discard-episode"
    episode: Identifier


class Ack(Message):
    """Reply to every intake request: all chunks below ``durable`` are on disk; ``credit`` more may be under way."""

    lane: ClassVar[str] = "intake"
    kind: str = "ack"
    episode: Identifier
    durable: Count
    samples: Count
    credit: Count
    state: Literal["open", "closed", "discarded"]


INTAKE_REQUESTS = kinds(OpenEpisode, Chunk, CloseEpisode, DiscardEpisode)
INTAKE_REPLIES = kinds(Ack, ErrorReply)
