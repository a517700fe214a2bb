"""What every message has: protocol version and kind, strict types, no unknown fields."""

from __future__ import annotations

from typing import Annotated, Any, ClassVar

from pydantic import BaseModel, ConfigDict, Field, FiniteFloat, StringConstraints

PROTOCOL_VERSION = 1

Text = Annotated[str, StringConstraints(max_length=2000)]
Label = Annotated[str, StringConstraints(max_length=200)]
Identifier = Annotated[str, StringConstraints(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$")]
Count = Annotated[int, Field(ge=0, le=2**63 - 1)]
Vector = bytes | tuple[FiniteFloat, ...]
#: A vector that may carry NaN or infinity: those are the envelope's to judge, not the wire's.
RawVector = bytes | tuple[float, ...]


class Message(BaseModel):
    """Base of all messages; ``v`` and ``kind`` stand first on the wire."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=True)

    v: int = PROTOCOL_VERSION
    kind: str = ""

    #: The lane a message travels on, for the schema listing.
    lane: ClassVar[str] = ""


class ErrorReply(Message):
    """The answer to anything that cannot be done: a stable code and a sentence."""

    kind: str = "error"
    code: Label
    message: Text
    #: Echo of the request's ``seq`` or ``request``, where one could be read.
    seq: Count | None = None
    request: Identifier | None = None
    episode: Identifier | None = None


def kinds(*models: type[Message]) -> dict[str, type[Message]]:
    """Return the models keyed by their kind, for :func:`nearhand.service.bus.codec.decode`."""
    return {str(model.model_fields["kind"].default): model for model in models}


Table = dict[str, Any]
