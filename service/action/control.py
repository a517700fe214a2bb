"""What the keeper may ask of the action server: load, arm, latch, drain."""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Mapping

from pydantic import ValidationError

from nearhand.service.action.driven_rig import DrivenRig
from nearhand.service.action.records import Occurrences
from nearhand.service.bus.action_messages import Reason
from nearhand.service.bus.control_messages import Accompany, Arm, ControlReply, Drain, DrainReply, Latch, Load
from nearhand.service.bus.message import Message
from nearhand.service.clock import Clock
from nearhand.service.errors import ConfigError, UnknownNameError, WireError
from nearhand.service.policy.format import PolicyFile, read_policy
from nearhand.service.rigs import Rig, sentence

MOST_PER_DRAIN = 500
#: Rows of a shadow per drain: ten drains a second keep up with a rig of many kilohertz.
MOST_ROWS_PER_DRAIN = 2_000


class Control:
    """Carries out control messages on the rigs.

    Args:
        rigs: the driven rigs by name; filled by ``load``.
        occurrences: where what happened is noted.
        instance: identifier of this process' life.

    Attributes:
        heard_ns: monotonic time at which the keeper asked last.
    """

    def __init__(
        self, rigs: dict[str, DrivenRig], occurrences: Occurrences, counters: Counter[str], clock: Clock, instance: str
    ) -> None:
        self._rigs = rigs
        self._occurrences = occurrences
        self._counters = counters
        self._clock = clock
        self._instance = instance
        self.heard_ns = -(2**62)

    def do(self, message: Message) -> Message:
        """Carry out one request and return its reply.

        Raises:
            NearhandError: it cannot be done; nothing has changed.
        """
        if isinstance(message, Drain):
            self.heard_ns = time.monotonic_ns()
            return self._drain(message)
        if isinstance(message, Load):
            return self._load(message)
        if isinstance(message, Accompany):
            return self._accompany(message)
        if isinstance(message, Arm):
            driven = self._known(message.rig)
            driven.governor.arm()
            self._occurrences.note(message.rig, "armed", {"who": message.who, "why": message.why})
            return self._state(driven, message.request)
        if isinstance(message, Latch):
            driven = self._known(message.rig)
            driven.governor.latch(Reason.OPERATOR)
            self._occurrences.note(message.rig, "latched", {"who": message.who, "why": message.why})
            return self._state(driven, message.request)
        raise WireError(f"{message.kind} is no control request", code="wire.kind")

    def latch_all(self) -> None:
        """Latch every rig, because the service ends."""
        for name, driven in self._rigs.items():
            driven.governor.latch(Reason.OPERATOR)
            self._occurrences.note(name, "latched", {"who": "service", "why": "the service is stopping"})
        self.collect()

    def _known(self, rig: str) -> DrivenRig:
        if rig not in self._rigs:
            raise UnknownNameError(f"the action server has no rig {rig!r}", code="unknown.rig")
        return self._rigs[rig]

    def _load(self, message: Load) -> ControlReply:
        try:
            rig = Rig.model_validate(message.description)
        except ValidationError as error:
            raise ConfigError(f"rig {message.rig}: {sentence(error)}", code="config.rig") from error
        file: PolicyFile | None = None
        if message.version:
            file = read_policy(message.policy, expected_sha256=message.sha256)
        driven = self._rigs.get(message.rig)
        if driven is None or driven.rig != rig:
            fresh = DrivenRig(rig, self._clock)
            fresh.governor.load(message.version, file)
            fresh.governor.latch(Reason.RESTARTED)
            driven = self._rigs[message.rig] = fresh
        else:
            driven.governor.load(message.version, file)
        self._occurrences.note(message.rig, "loaded", {"version": message.version})
        return self._state(driven, message.request)

    def _accompany(self, message: Accompany) -> ControlReply:
        driven = self._known(message.rig)
        file = read_policy(message.policy, expected_sha256=message.sha256) if message.version else None
        driven.accompany(message.version, file)
        return self._state(driven, message.request)

    @staticmethod
    def _state(driven: DrivenRig, request: str) -> ControlReply:
        governor = driven.governor
        return ControlReply(
            request=request, rig=driven.rig.name, mode=governor.mode, version=governor.version,
            reasons=int(governor.reasons),
        )  # fmt: skip

    def _drain(self, message: Drain) -> DrainReply:
        self.collect()
        counters: Mapping[str, int] = {**self._counters, "occurrences_lost": self._occurrences.lost}
        return DrainReply(
            request=message.request,
            instance=self._instance,
            occurrences=self._occurrences.after(message.after, MOST_PER_DRAIN),
            rigs={name: driven.state() for name, driven in self._rigs.items()},
            counters=dict(counters),
            shadows={
                name: driven.shadow.after(message.shadows.get(name, 0), MOST_ROWS_PER_DRAIN)
                for name, driven in self._rigs.items()
                if driven.shadow is not None
            },
        )

    def collect(self) -> None:
        """Note what has happened to governors since the last time: trips, and changes of the driver."""
        for name, driven in self._rigs.items():
            happened = driven.governor.happened
            while happened:
                what, reason = happened.popleft()
                self._occurrences.note(name, what, {"reason": reason, "version": driven.governor.version})
