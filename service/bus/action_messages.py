"""Messages of the action lane: one request, one reply, always."""

from __future__ import annotations

from enum import IntFlag
from typing import ClassVar, Literal

from pydantic import Field, FiniteFloat

from nearhand.service.bus.message import Count, ErrorReply, Identifier, Label, Message, RawVector, Vector, kinds

Mode = Literal["armed", "latched", "empty"]


class Reason(IntFlag):
    """Why an action is not simply the policy's output; several may hold at once. The bit values are the wire's."""

    NONE = 0
    FORM = 1  #: the observation is not finite or not of the right size
    OLD = 2  #: the sequence number is not newer than the last
    GAP = 4  #: nothing fresh arrived within the deadline
    LATE = 8  #: the observation took longer than the deadline to arrive
    NOVEL = 16  #: the confidence gate tripped
    OUTPUT = 32  #: the policy's output was not finite
    CLIPPED = 64  #: limited to the channel's range
    SLEWED = 128  #: limited in its change per control period
    BRAKED = 256  #: limited so that the axis can still stop before its end
    LATCHED = 512  #: a trip holds until an operator re-arms
    RESTARTED = 1024  #: the server came back and waits for an operator
    OPERATOR = 2048  #: an operator stopped it, or has not armed it yet
    EMPTY = 4096  #: no version is in service
    LINK = 8192  #: set by the rig-side link: no usable reply in time
    TAKEN = 16384  #: the operator drives: they have taken the rig over
    ZONED = 32768  #: limited so that the machine keeps out of a forbidden zone


def reason_names(flags: int) -> list[str]:
    """Return the lower-case names of the reasons in ``flags``."""
    return [str(flag.name).lower() for flag in Reason if flag & flags]


class Hello(Message):
    """Begin a session for a rig; it replaces an earlier one. The channel names must be the service's, in order."""

    lane: ClassVar[str] = "action"
    kind: str = "hello"
    rig: Identifier
    session: Identifier
    observations: tuple[Label, ...] = Field(max_length=256)
    actions: tuple[Label, ...] = Field(max_length=256)
    period_s: FiniteFloat


class Welcome(Message):
    """Reply to ``hello``."""

    lane: ClassVar[str] = "action"
    kind: str = "welcome"
    rig: Identifier
    session: Identifier
    mode: Mode
    version: Count
    deadline_s: FiniteFloat
    lease_s: FiniteFloat


class Act(Message):
    """One observation; the reply carries the action to hold for one lease.

    ``sent_ns`` is the rig's monotonic clock; it comes back unchanged. ``applied`` is the action the rig truly holds
    (its own fallback may have acted), so that slew starts from there; left out, the last reply is taken for it.
    ``by_operator``: the operator has taken the rig over and drives it; the reply's action is not followed.
    """

    lane: ClassVar[str] = "action"
    kind: str = "act"
    rig: Identifier
    session: Identifier
    seq: Count
    sent_ns: Count
    obs: RawVector
    applied: RawVector | None = None
    by_operator: bool = False


class Action(Message):
    """Reply to ``act``: always finite, within limits and within slew."""

    lane: ClassVar[str] = "action"
    kind: str = "action"
    seq: Count
    sent_ns: Count
    action: Vector
    mode: Mode
    version: Count
    lease_s: FiniteFloat
    reasons: Count
    novelty: FiniteFloat


ACTION_REQUESTS = kinds(Hello, Act)
ACTION_REPLIES = kinds(Welcome, Action, ErrorReply)
