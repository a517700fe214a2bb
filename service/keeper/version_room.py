"""Desk requests about versions: list, show, release, roll back, stand down."""

from __future__ import annotations

from nearhand.service.bus.desk_messages import (
    GetVersion,
    ListVersions,
    Release,
    ReleaseReply,
    Rollback,
    StandDown,
    VersionReply,
    VersionsReply,
)
from nearhand.service.keeper.office import Office, Room
from nearhand.service.keeper.releasing import release_version, roll_back, stand_down


def list_versions(office: Office, request: ListVersions) -> VersionsReply:
    """List a rig's versions, oldest first."""
    store = office.ledger.store
    store.rigs.get(request.rig)
    names = ("version", "name", "method", "state", "created_utc", "sha256", "parent", "job", "refusal")
    return VersionsReply(
        request=request.request,
        versions=tuple({name: getattr(row, name) for name in names} for row in store.versions.of_rig(request.rig)),
    )


def get_version(office: Office, request: GetVersion) -> VersionReply:
    """Show a version with its provenance and its latest measurement."""
    versions = office.ledger.store.versions
    row = versions.get(request.version)
    measurement = versions.measurement(row.version)
    return VersionReply(
        request=request.request,
        version=row.version,
        rig=row.rig,
        method=row.method,
        state=row.state,
        created_utc=row.created_utc,
        sha256=row.sha256,
        provenance=row.provenance,
        measurement=measurement.content if measurement else None,
        refusal=row.refusal,
        policy=versions.policy(row.version) if request.with_policy else None,
    )


def release(office: Office, request: Release) -> ReleaseReply:
    """Release a version through the gate."""
    return release_version(office, request)


def rollback(office: Office, request: Rollback) -> ReleaseReply:
    """Put an earlier version back in service."""
    return roll_back(office, request)


def take_down(office: Office, request: StandDown) -> ReleaseReply:
    """Take the version in service out of service."""
    return stand_down(office, request)


ROOM: Room = {
    "list-versions": list_versions,
    "get-version": get_version,
    "release": release,
    "rollback": rollback,
    "stand-down": take_down,
}
