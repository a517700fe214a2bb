"""Desk requests about the service itself: where it is, its event record, its health."""

from __future__ import annotations

import time
from dataclasses import asdict

from nearhand.service.bus.desk_messages import (
    EventsReply,
    GetHealth,
    HealthReply,
    ListEvents,
    VerifyEvents,
    VerifyReply,
    Where,
    WhereReply,
)
from nearhand.service.keeper.office import Office, Room, software_version


def where(office: Office, request: Where) -> WhereReply:
    """Tell the lanes' addresses."""
    settings = office.settings
    return WhereReply(
        request=request.request, action=settings.action, intake=settings.intake, desk=settings.desk,
        feed=settings.feed, software=software_version(),
    )  # fmt: skip


def list_events(office: Office, request: ListEvents) -> EventsReply:
    """List events, oldest first."""
    if request.rig is not None:
        office.ledger.store.rigs.get(request.rig)
    rows = office.ledger.store.events.after(request.after, rig=request.rig, limit=request.limit)
    return EventsReply(request=request.request, events=tuple(asdict(row) for row in rows))


def verify_events(office: Office, request: VerifyEvents) -> VerifyReply:
    """Check the event record."""
    verdict = office.ledger.store.events.verify()
    return VerifyReply(
        request=request.request, intact=verdict.intact, events=verdict.events, first_bad=verdict.first_bad,
        message=verdict.message,
    )  # fmt: skip


def get_health(office: Office, request: GetHealth) -> HealthReply:
    """Tell counters and the rigs' states."""
    store, server = office.ledger.store, office.server
    rigs = {
        name: {**server.states.get(name, {}), "in_service": store.versions.in_service(name)}
        for name in store.rigs.names()
    }
    return HealthReply(
        request=request.request,
        uptime_s=time.monotonic() - office.started_s,
        action_server={"reachable": server.reachable, "instance": server.instance, "counters": dict(server.counters)},
        rigs=rigs,
        counters=dict(office.ledger.counters),
    )


ROOM: Room = {
    "where": where,
    "list-events": list_events,
    "verify-events": verify_events,
    "get-health": get_health,
}
