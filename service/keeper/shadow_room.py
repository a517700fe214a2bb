"""Desk requests about shadows: begin, end, tell how far a version is from what was done."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from nearhand.service.bus.shadow_messages import GetShadow, ShadowReply, StartShadow, StopShadow
from nearhand.service.errors import UnknownNameError
from nearhand.service.keeper.office import Office, Room
from nearhand.service.rigs import Rig
from nearhand.service.store.shadows import Seen, ShadowRow

DRIVERS = ("fallback", "policy", "operator")
#: The unit of the interval: neighbouring periods say the same thing over again.
STRETCH_S = 5.0
#: About half an hour at 100 Hz: what is looked at, the latest.
MOST_ROWS = 200_000


def start_shadow(office: Office, request: StartShadow) -> ShadowReply:
    """Have a version look on.

    Raises:
        UnknownNameError: there is no such version.
        LinkError: the action server did not answer; nothing has changed.
    """
    row = office.ledger.store.versions.get(request.version)
    office.server.accompany(row.rig, row.version)
    with office.ledger.transaction():
        shadow = office.ledger.store.shadows.begin(row.rig, row.version, request.who, request.why)
        office.ledger.record(
            "shadow-began", rig=row.rig, who=request.who, why=request.why,
            detail={"version": row.version, "shadow": shadow},
        )  # fmt: skip
    return _reply(office, request.request, row.rig, None)


def stop_shadow(office: Office, request: StopShadow) -> ShadowReply:
    """End the rig's shadow.

    Raises:
        UnknownNameError: the rig has none.
    """
    store = office.ledger.store
    present = store.shadows.present().get(store.rigs.get(request.rig).rig.name)
    if present is None:
        raise UnknownNameError(f"rig {request.rig} has no shadow; nearhand shadow VERSION begins one")
    office.server.accompany(request.rig, 0)
    with office.ledger.transaction():
        store.shadows.end(request.rig)
        office.ledger.record(
            "shadow-ended", rig=request.rig, who=request.who, why=request.why,
            detail={"version": present.version, "shadow": present.shadow, "rows": present.rows},
        )  # fmt: skip
    return _reply(office, request.request, request.rig, None)


def get_shadow(office: Office, request: GetShadow) -> ShadowReply:
    """Tell what the rig's latest shadow has seen."""
    office.ledger.store.rigs.get(request.rig)
    return _reply(office, request.request, request.rig, request.version)


def _reply(office: Office, request: str, rig: str, version: int | None) -> ShadowReply:
    store = office.ledger.store
    row = store.shadows.latest(rig, version)
    if row is None:
        which = f"version {version}" if version is not None else f"rig {rig}"
        raise UnknownNameError(f"{which} has no shadow; nearhand shadow VERSION begins one")
    return ShadowReply(
        request=request, rig=rig, version=row.version, state="ended" if row.ended_utc else "looking on",
        began_utc=row.began_utc, ended_utc=row.ended_utc or "", rows=row.rows, beside=_beside(office, row),
    )  # fmt: skip


def _beside(office: Office, row: ShadowRow) -> dict[str, Any]:
    rig = office.ledger.store.rigs.get(row.rig).rig
    seen = office.ledger.store.shadows.seen(row.shadow, len(rig.actions), MOST_ROWS)
    return {
        name: {"periods": int((seen.driver == code).sum()), "figures": disagreement(rig, seen, code)}
        for code, name in enumerate(DRIVERS)
        if (seen.driver == code).any()
    }


def disagreement(rig: Rig, seen: Seen, driver: int) -> dict[str, Any]:
    """Return, per action channel, the root mean square of would-be less done action while ``driver`` acted.

    The interval is a bootstrap over stretches of a few seconds without gap.
    """
    from nearhand.service.measure.intervals import bootstrap

    squares = (seen.would.astype(np.float64) - seen.done.astype(np.float64)) ** 2
    stretches = [squares[rows] for rows in _stretches(seen, driver, max(1, round(STRETCH_S / rig.timing.period_s)))]
    sums = np.array([rows.sum(axis=0) for rows in stretches])
    lengths = np.array([len(rows) for rows in stretches], dtype=np.float64)
    figures: dict[str, Any] = {}
    for index, channel in enumerate(rig.actions):

        def root(picked: NDArray[np.int64], index: int = index) -> float:
            return math.sqrt(float(sums[picked, index].sum() / lengths[picked].sum()))

        interval = bootstrap(root, len(stretches))
        figures[channel.name] = {
            "value": interval.value, "low": interval.low, "high": interval.high, "n": interval.n,
            "unit": channel.unit, "of_range": interval.value / (channel.high - channel.low),
        }  # fmt: skip
    return figures


def _stretches(seen: Seen, driver: int, most: int) -> list[NDArray[np.int64]]:
    """Return row numbers, stretch by stretch: one driver, no gap, at most so many rows."""
    rows = np.flatnonzero(seen.driver == driver)
    breaks = (np.diff(rows) > 1) | np.isin(rows[1:], seen.starts)
    runs = np.split(rows, np.flatnonzero(breaks) + 1)
    return [run[begin : begin + most] for run in runs for begin in range(0, len(run), most)]


ROOM: Room = {"start-shadow": start_shadow, "stop-shadow": stop_shadow, "get-shadow": get_shadow}
