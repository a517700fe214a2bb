"""Automatic stand-down: a version that the envelope has to hold back too often is taken out of service."""

from __future__ import annotations

import time
from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from nearhand.service.bus.desk_messages import Rollback, StandDown
from nearhand.service.errors import NearhandError
from nearhand.service.keeper.ledger import log_line
from nearhand.service.keeper.office import Office
from nearhand.service.keeper.releasing import roll_back, stand_down
from nearhand.service.rigs import Health

WHO = "health rules"
#: After a failed attempt, how long to wait before the next.
RETRY_S = 1.0
#: Time between two looks.
LOOK_S = 0.5


@dataclass(frozen=True, slots=True)
class Look:
    """What the action server had counted of a rig at a time (s), since its start."""

    time_s: float
    queries: int
    interventions: int
    trips: int
    slow: int


def broken_rule(health: Health, looks: deque[Look], period_s: float) -> str:
    """Return which rule the latest ``window_s`` breaks, in words, or an empty text.

    Rates are over the time that the rig was driven: queries times the control period.

    Args:
        looks: oldest first; those before the window have been dropped.
    """
    if len(looks) < 2:
        return ""
    first, last = looks[0], looks[-1]
    queries = last.queries - first.queries
    driven_s = queries * period_s
    trips = last.trips - first.trips
    if health.trips is not None and trips > health.trips:
        return f"{trips} trips within {health.window_s:g} s; the rule allows {health.trips}"
    if driven_s < min(health.least_s, health.window_s):
        return ""
    rate = (last.interventions - first.interventions) / (driven_s / 60)
    if health.interventions_per_minute is not None and rate > health.interventions_per_minute:
        return (
            f"{rate:.0f} interventions per minute over {driven_s:.0f} s of driving; the rule allows "
            f"{health.interventions_per_minute:g}"
        )
    share = (last.slow - first.slow) / queries
    if health.latency_s is not None and share > health.slow_share:
        return (
            f"{100 * share:.1f} % of {queries} observations were under way {1e3 * health.latency_s:g} ms longer than "
            f"usual; the rule allows {100 * health.slow_share:g} %"
        )
    return ""


class HealthWatch:
    """Looks at every rig with health rules, and acts on what they say.

    Args:
        office: the keeper's parts.
    """

    def __init__(self, office: Office) -> None:
        self._office = office
        self._looks: dict[str, tuple[str, int, deque[Look]]] = {}
        self._retry_s: dict[str, float] = {}
        self._due_s = 0.0

    def turn(self) -> None:
        """Take in what the action server has told, and stand down what breaks a rule."""
        server = self._office.server
        if not server.reachable or time.monotonic() < self._due_s:
            return
        self._due_s = time.monotonic() + LOOK_S
        for name, state in server.states.items():
            version = int(state.get("version", 0) or 0)
            if not version or "queries" not in state:
                self._looks.pop(name, None)
                continue
            self._look(name, version, state)

    def _look(self, name: str, version: int, state: Mapping[str, Any]) -> None:
        now_s = time.monotonic()
        row = self._office.ledger.store.rigs.find(name)
        if row is None or row.rig.health is None or now_s < self._retry_s.get(name, 0.0):
            return
        health, life = row.rig.health, self._office.server.instance
        known = self._looks.get(name)
        if known is None or known[:2] != (life, version):
            known = self._looks[name] = (life, version, deque())
        looks = known[2]
        counted = (int(state.get(key, 0)) for key in ("queries", "interventions", "trips", "slow"))
        looks.append(Look(now_s, *counted))
        while len(looks) > 2 and looks[1].time_s < now_s - health.window_s:
            looks.popleft()
        broken = broken_rule(health, looks, row.rig.timing.period_s)
        if broken:
            self._stand_down(name, version, health, broken)

    def _stand_down(self, name: str, version: int, health: Health, broken: str) -> None:
        del self._looks[name]
        releases = self._office.ledger.store.releases
        before = releases.before(name, version) if health.then == "previous" else 0
        why = f"version {version}: {broken}"
        try:
            if before:
                roll_back(self._office, Rollback(request="health", rig=name, version=before, who=WHO, why=why))
            else:
                stand_down(self._office, StandDown(request="health", rig=name, who=WHO, why=why))
            self._office.ledger.counters["health.stand_downs"] += 1
        except NearhandError as error:
            self._retry_s[name] = time.monotonic() + RETRY_S
            log_line(f"health-failed rig={name} code={error.code} message={error.message!r}")
