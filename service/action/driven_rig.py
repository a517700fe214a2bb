"""One rig as the action server sees it: its governor, its session, and what is told of it."""

from __future__ import annotations

from collections import deque
from typing import Any

import numpy as np

from nearhand.service.action.governor import Decision, Governor, check_rig
from nearhand.service.action.shadow import BY_FALLBACK, BY_OPERATOR, BY_POLICY, Shadow
from nearhand.service.bus.action_messages import Hello, Reason, Welcome
from nearhand.service.bus.arrays import unpack
from nearhand.service.bus.queries import Query
from nearhand.service.clock import Clock
from nearhand.service.errors import ConflictError, UnknownNameError, WireError
from nearhand.service.policy.format import PolicyFile
from nearhand.service.rigs import Rig

PERIOD_TOLERANCE = 1e-6
TAKEN = int(Reason.TAKEN)


class DrivenRig:
    """A rig that may be driven.

    Args:
        rig: its description.
        clock: the receiver's clock.
    """

    def __init__(self, rig: Rig, clock: Clock) -> None:
        self.rig = rig
        self.governor = Governor(rig)
        self._n, self._m = len(rig.observations), len(rig.actions)
        self._clock = clock
        self.shadow: Shadow | None = None
        self._rows = 0
        self._session = ""
        self._last_ns: int | None = None
        self._counted_ns = clock.now_ns()
        self._counted = 0
        self._rate_hz = 0.0
        #: (time, interventions so far), over the last minute, at most once a second.
        self._interventions: deque[tuple[int, int]] = deque(maxlen=61)

    def hello(self, message: Hello) -> Welcome:
        """Begin a session.

        Raises:
            ConflictError: its channels or its period are not the rig's.
        """
        for what, told, known in (
            ("observation", message.observations, self.rig.observations),
            ("action", message.actions, self.rig.actions),
        ):
            names = tuple(channel.name for channel in known)
            if told != names:
                raise ConflictError(
                    f"rig {self.rig.name}: the session's {what} channels {list(told)} are not {list(names)}, in order",
                    code="conflict.channels",
                )
        period_s = self.rig.timing.period_s
        if not abs(message.period_s - period_s) <= PERIOD_TOLERANCE:
            raise ConflictError(
                f"rig {self.rig.name}: the session's period is {message.period_s} s; the rig's is {period_s} s",
                code="conflict.period",
            )
        self._session = message.session
        self.governor.begin_session(message.session, self._clock.now_ns())
        if self.shadow is not None:
            self.shadow.restart()
        return Welcome(
            rig=self.rig.name, session=message.session, mode=self.governor.mode, version=self.governor.version,
            deadline_s=self.rig.timing.deadline_s, lease_s=self.rig.timing.lease_s,
        )  # fmt: skip

    def act(self, query: Query) -> Decision:
        """Answer one query.

        Raises:
            ConflictError: the session is not the present one.
            WireError: a vector has the wrong size; an observation of the wrong size also trips.
        """
        if query.session != self._session:
            if not self._session:
                raise UnknownNameError(f"session {query.session} is unknown here; say hello", code="unknown.session")
            raise ConflictError(f"session {query.session} was replaced by a newer one", code="conflict.session")
        now_ns = self._clock.now_ns()
        self._last_ns = now_ns
        applied = None
        if query.applied is not None:
            applied = unpack(query.applied, self._m, what="applied")
        try:
            observation = unpack(query.obs, self._n, what="obs")
        except WireError:
            nothing = np.full(self._n, np.nan, dtype=np.float32)
            self.governor.act(nothing, query.seq, query.sent_ns, now_ns, applied, by_operator=query.by_operator)
            raise
        return self.governor.act(observation, query.seq, query.sent_ns, now_ns, applied, by_operator=query.by_operator)

    def accompany(self, version: int, file: PolicyFile | None) -> None:
        """Begin a shadow with a version's file, or end it (0, None).

        Raises:
            PolicyFormatError: the file is for another rig or other channels; nothing changes.
        """
        if self.shadow is not None:
            self._rows = self.shadow.number
        if file is None:
            self.shadow = None
            return
        check_rig(self.rig, version, file)
        self.shadow = Shadow(version, file.policy, self._rows)

    def look_on(self, decision: Decision) -> None:
        """Let the shadow look at what has just been answered."""
        if self.shadow is None:
            return
        if not self.governor.seen:
            self.shadow.restart()
            return
        driver = BY_OPERATOR if decision.reasons & TAKEN else BY_POLICY if decision.mode == "armed" else BY_FALLBACK
        self.shadow.look(self.governor.observed, self.governor.acted, driver)

    def state(self) -> dict[str, Any]:
        """Return what the keeper shows of the rig."""
        now_ns = self._clock.now_ns()
        queries, interventions = self.governor.counts["queries"], self.governor.counts["interventions"]
        if not self._interventions or now_ns - self._interventions[-1][0] >= 1_000_000_000:
            self._interventions.append((now_ns, interventions))
        since_ns, before = self._interventions[0]
        minutes = max(now_ns - since_ns, 1_000_000_000) / 60e9
        if now_ns - self._counted_ns > 500_000_000:
            self._rate_hz = (queries - self._counted) / ((now_ns - self._counted_ns) * 1e-9)
            self._counted_ns, self._counted = now_ns, queries
        return {
            "mode": self.governor.mode,
            "version": self.governor.version,
            "reasons": int(self.governor.reasons),
            "observation": [float(value) for value in self.governor.last_observation],
            "action": [float(value) for value in self.governor.last_action],
            "novelty": float(self.governor.novelty),
            "epsilon": float(self.governor.epsilon),
            "queries": queries,
            "interventions": interventions,
            "interventions_per_minute": (interventions - before) / minutes,
            "trips": self.governor.counts["trips"],
            "slow": self.governor.counts["slow"],
            "age_s": -1.0 if self._last_ns is None else (now_ns - self._last_ns) * 1e-9,
            "rate_hz": self._rate_hz,
            "shadow": 0 if self.shadow is None else self.shadow.version,
        }
