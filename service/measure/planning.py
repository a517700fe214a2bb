"""How many episodes a measurement needs: the interval's end is extrapolated from a measurement that exists."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from scipy.stats import beta

from nearhand.service.measure.gate import FEWEST_CLOSED_LOOP, PROPORTIONS, is_too_few, judge
from nearhand.service.measure.intervals import FEWEST, LEVEL
from nearhand.service.rigs import Bound

MOST = 100_000


def plan(
    bounds: Sequence[Bound], measurement: Mapping[str, Any], in_service: Mapping[str, Any] | None
) -> list[dict[str, Any]]:
    """Return, for each bound of a gate, how many episodes it takes to pass if the figure's value is the true one.

    Half an interval shrinks as 1/√n; a proportion's exact interval is computed anew for each n. It is an estimate, to
    plan with: a fresh measurement scatters, so that with the number told one passes about every other time.

    Returns:
        Per bound: figure, value, limit, now (episodes behind it), needed (None where no number is enough), sentence.
    """
    rows = []
    for verdict in judge(bounds, measurement, in_service):
        told = (measurement.get("figures") or {}).get(verdict["figure"]) or {}
        rows.append(_row(verdict, told))
    return rows


def _row(verdict: Mapping[str, Any], told: Mapping[str, Any]) -> dict[str, Any]:
    value, limit, n = told.get("value"), verdict["limit"], int(told.get("n") or 0)
    upper = str(verdict["bound"]).startswith("at most")
    needed: int | None = None
    if value is not None and limit is not None and n:
        room = (limit - value) if upper else (value - limit)
        if room > 0:
            needed = (
                _proportion(value, limit, upper=upper)
                if verdict["figure"].endswith(PROPORTIONS)
                else _mean(verdict["figure"], told, room, upper=upper)
            )
    return {
        "figure": verdict["figure"], "bound": verdict["bound"], "value": value, "limit": limit, "now": n,
        "needed": needed, "met": verdict["met"], "sentence": _sentence(verdict["figure"], value, limit, needed, n),
    }  # fmt: skip


def _mean(name: str, told: Mapping[str, Any], room: float, *, upper: bool) -> int | None:
    end = told.get("high" if upper else "low")
    if end is None:
        return None
    half = abs(float(end) - float(told["value"]))
    needed = math.ceil(int(told["n"]) * (half / room) ** 2)
    least = FEWEST_CLOSED_LOOP if is_too_few(name, needed) else FEWEST
    return max(needed, least) if needed <= MOST else None


def _proportion(value: float, limit: float, *, upper: bool) -> int | None:
    """Return the least n whose exact interval about ``value`` stays on the right side of ``limit``."""
    tail = (1 - LEVEL) / 2
    n = FEWEST
    while n <= MOST:
        hits = round(value * n)
        end = beta.ppf(1 - tail, hits + 1, n - hits) if upper and hits < n else 1.0
        if not upper:
            end = beta.ppf(tail, hits, n - hits + 1) if hits else 0.0
        if (end <= limit) if upper else (end >= limit):
            return n
        n += max(1, n // 50)
    return None


def _sentence(name: str, value: float | None, limit: float | None, needed: int | None, now: int) -> str:
    if value is None or limit is None:
        return f"{name}: it was not measured, or there is nothing to compare with"
    if needed is None:
        return (
            f"{name}: {value:.4g} is not inside {limit:.4g}; no number of episodes will do, the version must be better"
        )
    return f"{name}: about {needed} episodes ({now} now) if {value:.4g} is true"
