"""Desk requests about versions: list, show, release, roll back, stand down."""

from __future__ import annotations

from nearhand.service.bus.desk_messages import (
    GetPlan,
    GetVersion,
    ListVersions,
    PlanReply,
    Release,
    ReleaseReply,
    Rollback,
    StandDown,
    VersionReply,
    VersionsReply,
)
from nearhand.service.errors import ConflictError
from nearhand.service.keeper.office import Office, Room
from nearhand.service.keeper.releasing import release_version, roll_back, stand_down
from nearhand.service.store.canonical import plain


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


def get_plan(office: Office, request: GetPlan) -> PlanReply:
    """Tell how many episodes the gate needs.

    Raises:
        ConflictError: the version was never measured, or its rig has no gate.
    """
    from nearhand.service.measure.planning import plan

    store = office.ledger.store
    version = store.versions.get(request.version)
    measurement = store.versions.measurement(version.version)
    gate = store.rigs.get(version.rig).rig.gate
    if measurement is None or not gate:
        what = (
            "was never measured; measure it once, with any number of episodes" if gate else "has a rig without a gate"
        )
        raise ConflictError(f"version {version.version} {what}", code="conflict.not_measured")
    present = store.versions.in_service(version.rig)
    reference = store.versions.measurement(present) if present else None
    rows = plan(gate, measurement.content, reference.content if reference else None)
    return PlanReply(request=request.request, version=version.version, bounds=tuple(plain(row) for row in rows))


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
    "get-plan": get_plan,
    "release": release,
    "rollback": rollback,
    "stand-down": take_down,
}
