"""What a key may ask of the keeper: the role of each request, and the record of those refused."""

from __future__ import annotations

import time
from dataclasses import dataclass

from nearhand.service.bus.admission import Admission
from nearhand.service.errors import RefusedError
from nearhand.service.keeper.lane import Request
from nearhand.service.keeper.ledger import Ledger, log_line

#: A refusal is recorded at once, and its repetitions together, at most once in so many seconds.
REPEAT_S = 10.0
#: Most kinds of refusal told apart at a time; the rest are only counted.
MOST_APART = 200


@dataclass
class _Refusal:
    code: str
    count: int
    due_s: float


class Access:
    """Checks each request against the table of keys as it is now; without keys everything is permitted.

    Args:
        admission: the door of this process, or None where the service has no keys.
        ledger: where refusals are counted and recorded.
    """

    def __init__(self, admission: Admission | None, ledger: Ledger) -> None:
        self._admission = admission
        self._ledger = ledger
        self._public = ""
        self._refused: dict[tuple[str, str, str], _Refusal] = {}
        self._turned_away = 0
        self._trouble = ""

    @property
    def is_keyed(self) -> bool:
        """Whether the service asks for keys."""
        return self._admission is not None

    def begin(self, lane: str, request: Request) -> None:
        """Note whose request is answered next, before it is decoded.

        Raises:
            RefusedError: the key is not, or no longer, in force.
        """
        self._ledger.key = ""
        if self._admission is None:
            return
        self._public = request.bearer
        try:
            self._ledger.key = self._admission.holder(self._public)[0]
        except RefusedError as error:
            self._note("", lane, "request", error.code)
            raise

    def end(self) -> None:
        """Note that what follows is done for nobody's request."""
        self._public = self._ledger.key = ""

    def require(self, role: str, lane: str, what: str) -> None:
        """Ask for a role of whoever's request is being answered; an empty one means that any key will do.

        Raises:
            RefusedError: the key lacks it.
        """
        if self._admission is None:
            return
        try:
            self._admission.permit(self._public, role, what)
        except RefusedError as error:
            self._note(self._ledger.key, lane, what, error.code)
            raise

    def turn(self) -> None:
        """Record what was refused since the last time.

        Raises:
            StoreError: the store cannot take it now; it is kept for the next turn.
        """
        if self._admission is None:
            return
        if self._admission.trouble != self._trouble:
            self._trouble = self._admission.trouble
            log_line(f"keys {'unusable' if self._trouble else 'usable'} message={self._trouble!r}")
        turned_away = self._admission.counters["turned_away"]
        if turned_away > self._turned_away:
            self._ledger.counters["refusals.at_the_door"] += turned_away - self._turned_away
            self._note("", "door", "connection", "refused.key", turned_away - self._turned_away)
            self._turned_away = turned_away
        now_s = time.monotonic()
        due = {which: refusal for which, refusal in self._refused.items() if now_s >= refusal.due_s}
        if not due:
            return
        with self._ledger.transaction():
            for (name, lane, what), refusal in due.items():
                if refusal.count:
                    self._ledger.record(
                        "request-refused", who=name or "unknown key",
                        detail={"lane": lane, "what": what, "code": refusal.code, "count": refusal.count},
                    )  # fmt: skip
        for which, refusal in due.items():
            if refusal.count:
                refusal.count, refusal.due_s = 0, now_s + REPEAT_S
            else:
                del self._refused[which]

    def _note(self, name: str, lane: str, what: str, code: str, count: int = 1) -> None:
        self._ledger.counters[f"refusals.{lane}"] += count
        which = (name, lane, what[:80])
        if which in self._refused:
            self._refused[which].count += count
        elif len(self._refused) < MOST_APART:
            self._refused[which] = _Refusal(code, count, 0.0)
