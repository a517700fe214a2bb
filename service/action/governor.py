"""One rig's policy, confidence gate, envelope and latch, as a state machine on values and times. No sockets here.

The order per query: form, freshness, novelty, magnitude, slew, braking, latch. A trip latches: the fallback acts until
an operator arms again. Arming permits; nothing moves until the rig asks.
"""

from __future__ import annotations

import math
from collections import Counter, deque
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from nearhand.service.action.serving import History, Serving
from nearhand.service.bus.action_messages import Mode, Reason, reason_names
from nearhand.service.envelope.braking import Guards
from nearhand.service.envelope.chain import Limited, limit
from nearhand.service.envelope.fallback import FallbackAction
from nearhand.service.envelope.limits import Float32, Limits
from nearhand.service.envelope.novelty import NoveltyScore
from nearhand.service.envelope.watchdog import Watchdog
from nearhand.service.errors import ConflictError, PolicyFormatError
from nearhand.service.policy.format import PolicyFile
from nearhand.service.rigs import Rig

FORM, LATE = int(Reason.FORM), int(Reason.LATE)
#: What the limits may have done, in the order of ``Limited``.
LIMITS = tuple(
    (int(reason), str(reason.name).lower()) for reason in (Reason.CLIPPED, Reason.SLEWED, Reason.BRAKED, Reason.ZONED)
)


class Decision(NamedTuple):
    """The answer to one query: the action (m,) and everything that is said about it."""

    action: Float32
    mode: Mode
    version: int
    reasons: int
    novelty: float


def check_rig(rig: Rig, version: int, file: PolicyFile) -> None:
    """Make sure that a version's file is for this rig and its channels.

    Raises:
        PolicyFormatError: it is not.
    """
    names = tuple(c.name for c in rig.observations), tuple(c.name for c in rig.actions)
    if file.rig != rig.name or (file.observations, file.actions) != names:
        raise PolicyFormatError(
            f"version {version} is for rig {file.rig} with channels {file.observations} → {file.actions}; "
            f"rig {rig.name} has {names[0]} → {names[1]}",
            code="policy.rig",
        )


class Governor:
    """Decides one rig's actions.

    Args:
        rig: the rig.
        gate_trips: whether low p-values latch; otherwise they are only reported.

    Attributes:
        mode: ``empty``, ``latched`` or ``armed``.
        version: the version in service, 0 for none.
        seen: whether the last query's observation was taken in.
        observed, acted: the past, as policies see it: finite observations, and the action in force before each.
        reasons: why it is not armed.
        counts: queries, trips and interventions by name.
        happened: what the owner has not collected yet, oldest first: ("trip", reasons), ("taken", …) when the operator
            takes the rig over, ("handed-back", "").
    """

    def __init__(self, rig: Rig, *, gate_trips: bool = True) -> None:
        self.rig = rig
        self._gate_trips = gate_trips
        self._limits = Limits.of(rig)
        self._n, self._m = len(rig.observations), len(rig.actions)
        self._watchdog = Watchdog(rig.timing.deadline_s)
        latency_s = None if rig.health is None else rig.health.latency_s
        self._slow_ns = math.inf if latency_s is None else latency_s * 1e9
        self._guards = Guards(self._limits)
        self._fallback = FallbackAction(self._limits)
        self._barely_low = self._limits.low - self._limits.rounding
        self._barely_high = self._limits.high + self._limits.rounding
        self._file: PolicyFile | None = None
        self._novelty: NoveltyScore | None = None
        self._serving: Serving | None = None
        self.observed, self.acted = History(self._n), History(self._m)
        self._fresh_history = True
        self._epsilon = 1.0
        self._low_values: deque[bool] = deque(maxlen=rig.novelty.window_n)
        self._previous = self._limits.rest.copy()
        self._last_seq = -1
        self._taken = False
        self.seen = False
        self.mode: Mode = "empty"
        self.version = 0
        self.reasons = Reason.EMPTY
        self.novelty = 1.0
        self.counts: Counter[str] = Counter()
        self.happened: deque[tuple[str, str]] = deque(maxlen=100)

    @property
    def epsilon(self) -> float:
        """The false-alarm rate that the gate works at: the rig's, or the finest that calibration allows."""
        smallest = 1.0 if self._novelty is None else self._novelty.smallest_epsilon
        return max(self.rig.novelty.epsilon, smallest)

    @property
    def last_action(self) -> Float32:
        """The action in force, (m,)."""
        return self._previous

    @property
    def last_observation(self) -> Float32:
        """The last observation that was finite, (n,)."""
        latest: Float32 = self.observed.newest(1)[0].copy()
        return latest

    def due_ns(self) -> int | None:
        """Return when ``tick`` has something to do, or None."""
        return self._watchdog.due_ns() if self.mode == "armed" else None

    def load(self, version: int, file: PolicyFile | None) -> None:
        """Put a version in service, or none (0, None), between two queries; an armed rig stays armed.

        Raises:
            PolicyFormatError: the file is for another rig or other channels; nothing changes.
        """
        if file is None:
            self._file, self._serving, self._novelty, self.version = None, None, None, 0
            self.mode, self.reasons = "empty", Reason.EMPTY
            return
        check_rig(self.rig, version, file)
        novelty = None
        if file.novelty:
            try:
                novelty = NoveltyScore(file.novelty)
            except (KeyError, ValueError, IndexError) as error:
                raise PolicyFormatError(f"version {version}: its confidence gate is incomplete: {error}") from error
            if novelty.d != file.policy.input_size:
                raise PolicyFormatError(
                    f"version {version}: its confidence gate looks at {novelty.d} values, its policy at "
                    f"{file.policy.input_size}"
                )
        self._file, self._novelty, self.version = file, novelty, version
        self._serving = Serving(file.policy, novelty)
        self._epsilon = self.epsilon
        self._low_values.clear()
        if self.mode == "empty":
            self.mode, self.reasons = "latched", Reason.LATCHED | Reason.OPERATOR

    def arm(self) -> None:
        """Clear the latch. An armed rig stays as it is: its watchdog keeps counting.

        Raises:
            ConflictError: no version is in service.
        """
        if self._file is None:
            raise ConflictError(
                f"rig {self.rig.name} has no version in service; release one first", code="conflict.empty"
            )
        if self.mode == "armed":
            return
        self.mode, self.reasons = "armed", Reason.NONE
        self._low_values.clear()
        # Also the quickest transit: a rig's clock that was set back would look late for ever.
        self._watchdog.forget()
        self._fallback.end()

    def latch(self, reason: Reason) -> None:
        """Stop for a reason; the fallback acts from the next query on. An empty rig stays empty."""
        if self.mode == "armed":
            self.counts["trips"] += 1
            self.happened.append(("trip", ", ".join(reason_names(int(reason)))))
        if self.mode != "empty":
            self.mode = "latched"
        self.reasons |= Reason.LATCHED | reason

    def begin_session(self, session: str, now_ns: int) -> None:
        """Forget the last session's history, clock and numbers; the machine is taken to be at rest."""
        self._last_seq = -1
        self._fresh_history = True
        self._low_values.clear()
        if self.mode == "armed" and self._watchdog.is_overdue(now_ns):
            self.latch(Reason.GAP)
        self._watchdog.forget()
        self._previous = self._limits.rest.copy()
        self._taken = False
        self._fallback.end()

    def tick(self, now_ns: int) -> None:
        """Latch if nothing has arrived within the deadline."""
        if self.mode == "armed" and self._watchdog.is_overdue(now_ns):
            self.latch(Reason.GAP)
            self._watchdog.pause()

    def act(
        self,
        observation: Float32,
        seq: int,
        sent_ns: int,
        now_ns: int,
        applied: Float32 | None = None,
        *,
        by_operator: bool = False,
    ) -> Decision:
        """Decide on one query. The caller silences NumPy's warnings of overflow, since any values may come.

        Args:
            observation: (n,) float32, finite or not.
            seq: must be larger than the last one's.
            sent_ns, now_ns: the rig's clock at sending and ours at receiving.
            applied: (m,) the action that the rig truly holds, if it is not the last one decided.
            by_operator: the operator has taken the rig over. When that begins, an armed rig latches. While it lasts,
                nothing is decided and strange observations do not trip: the operator may have gone there on purpose.
        """
        self.counts["queries"] += 1
        self.seen = False
        if seq <= self._last_seq:
            self.counts["old"] += 1
            return Decision(self._previous, self.mode, self.version, int(self.reasons | Reason.OLD), self.novelty)
        self._last_seq = seq
        self.tick(now_ns)
        wrong = 0
        if self._watchdog.received(sent_ns, now_ns):
            wrong |= LATE
        if self._watchdog.excess_ns > self._slow_ns:
            self.counts["slow"] += 1
        if by_operator is not self._taken:
            self._change_driver(by_operator)
        if applied is not None:
            self._follow(applied)
        values = observation.tolist() if observation.shape == (self._n,) else [math.nan]
        self.seen = math.isfinite(sum(values))
        if self.seen:
            self._remember(observation, values, now_ns)
        else:
            wrong |= FORM
        self._guards.note(self._previous)
        if wrong and self.mode == "armed":
            self.latch(Reason(wrong))
        proposed = None
        self.novelty = 1.0
        if self.seen and self._serving is not None:
            p_value = self._serving.look(self.observed, self.acted)
            proposed = self._serving.propose()
            if self._novelty is not None and self._epsilon < 1.0:
                self._judge(p_value)
            if proposed is None and self.mode == "armed":
                self.latch(Reason.OUTPUT)
        if by_operator:
            told = int(self.reasons | Reason.TAKEN) | wrong
            return Decision(self._previous, self.mode, self.version, told, self.novelty)
        changed = 0
        if proposed is not None and self.mode == "armed":
            limited = limit(self._limits, proposed, self._previous, values, self._guards)
            if limited.clipped or limited.slewed or limited.braked or limited.zoned:
                changed = self._intervened(limited)
            action = limited.action
        else:
            action = self._fallback.act(self._previous, now_ns)
            self.counts["fallback"] += 1
        self._previous = action
        return Decision(action, self.mode, self.version, int(self.reasons) | wrong | changed, self.novelty)

    def _change_driver(self, by_operator: bool) -> None:
        """The operator takes over, which ends the policy's permission, or hands back, which does not renew it."""
        self._taken = by_operator
        self._fallback.end()
        self._low_values.clear()
        if by_operator and self.mode == "armed":
            self.mode = "latched"
            self.reasons |= Reason.LATCHED | Reason.OPERATOR
        self.happened.append(("taken", self.mode) if by_operator else ("handed-back", self.mode))

    def _follow(self, applied: Float32) -> None:
        """Take ``applied`` for the action in force, if it is one."""
        if applied.shape == (self._m,) and bool(
            ((applied >= self._barely_low) & (applied <= self._barely_high)).all()  # NaN is neither
        ):
            self._previous = np.minimum(np.maximum(applied, self._limits.low), self._limits.high)
        else:
            self.counts["applied_unusable"] += 1

    def _remember(self, observation: Float32, values: Sequence[float], now_ns: int) -> None:
        """Take in a finite observation, also given as plain numbers, and the action that led to it."""
        if self._fresh_history:
            self.observed.fill(observation)
            self.acted.fill(self._previous)
            self._guards.restart(self._previous)
            self._fresh_history = False
        else:
            self.observed.push(observation)
            self.acted.push(self._previous)
        self._fallback.see(values, now_ns)

    def _judge(self, p_value: float) -> None:
        """Look at the novelty: so many low values among the last trip."""
        self.novelty = p_value
        low = p_value <= self._epsilon
        self._low_values.append(low)
        if low and sum(self._low_values) >= self.rig.novelty.trip_m:
            self.counts["novel"] += 1
            if self._gate_trips and self.mode == "armed" and not self._taken:
                self.latch(Reason.NOVEL)

    def _intervened(self, limited: Limited) -> int:
        """Count what the limits changed; return the reasons."""
        flags = 0
        for changed, (flag, name) in zip(limited[1:], LIMITS, strict=True):
            if changed:
                flags |= flag
                self.counts[name] += 1
        self.counts["interventions"] += 1
        return flags
