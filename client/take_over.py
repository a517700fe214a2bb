"""Taking the rig over from the policy, with the interval recorded as a correction: a demonstration of what to do there.

The operator's button calls ``begin`` and ``end``; the control loop calls ``exchange`` in place of the link's, all the
time. A recording that fails does not touch the driving.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Self

import numpy as np
from numpy.typing import NDArray

from nearhand.client.demos import DemonstrationStream
from nearhand.client.link import Drive, RigLink
from nearhand.client.recording import Recording
from nearhand.service.bus.intake_messages import Outcome
from nearhand.service.episodes.correction import TASK, TRANSIENT_S, Correction
from nearhand.service.errors import NearhandError

Numbers = NDArray[np.floating]


class TakeOver:
    """A link that can be taken over; a context manager that hands back and ends its recording.

    Args:
        link: of the rig; not closed here.
        stream: where corrections go; not closed here.
        operator: who takes over.
        transient_s: how much of a correction's start is marked as transient.
        now_s: the rig's monotonic time.

    Attributes:
        corrections: identifiers of the corrections recorded so far.
        failure: what ended the last recording before its time, or None.
    """

    def __init__(
        self,
        link: RigLink,
        stream: DemonstrationStream,
        operator: str,
        *,
        transient_s: float = TRANSIENT_S,
        now_s: Callable[[], float] = time.monotonic,
    ) -> None:
        self._link = link
        self._stream = stream
        self._operator = operator
        self._transient_s = transient_s
        self._now_s = now_s
        self._recording: Recording | None = None
        self._version = 0
        self._seen: Numbers | None = None
        self.corrections: list[str] = []
        self.failure: NearhandError | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *exc: object) -> None:
        if self.taken:
            self.end("cut")

    @property
    def taken(self) -> bool:
        """Whether the operator drives."""
        return self._link.taken

    def begin(self, text: str = "") -> None:
        """Take over, from the next exchange on; taking over twice is taking over once.

        Args:
            text: why, in the operator's words; goes into the correction's notes.
        """
        if self.taken:
            return
        self._link.take_over()
        self.failure = None
        try:
            mark = Correction(self._version, self._transient_s)
            self._recording = self._stream.open(self._operator, TASK, mark.notes(text))
            self.corrections.append(self._recording.episode)
        except NearhandError as error:
            self._recording, self.failure = None, error

    def exchange(self, observation: Numbers, operator: Numbers | None = None) -> Drive:
        """Return what to do for the next control period, as the link does, and record it while the operator drives.

        Args:
            observation: (n,) in the rig's units.
            operator: (m,) what the operator wants; looked at only while the operator drives.
        """
        drive = self._link.exchange(observation, operator)
        self._seen = observation
        if drive.mode != "taken":
            self._version = drive.version
        elif self._recording is not None:
            try:
                self._recording.add(self._now_s(), observation, drive.action)
            except NearhandError as error:
                self._recording.discard()
                self._recording, self.failure = None, error
        return drive

    def end(self, outcome: Outcome = "unknown", observation: Numbers | None = None) -> None:
        """Hand back, deliberately, and close the correction.

        The policy does not act again before someone has re-armed; see :mod:`nearhand.client.link`.

        Args:
            outcome: of what the operator did.
            observation: (n,) what the last action brought; the last one seen when left out.
        """
        self._link.hand_back()
        recording, self._recording = self._recording, None
        last = self._seen if observation is None else observation
        if recording is None:
            return
        try:
            if last is None:
                recording.discard()
            else:
                recording.close(outcome, last)
        except NearhandError as error:
            self.failure = error
