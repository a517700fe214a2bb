"""Changing what is in service: the gate, then the action server, then the store, and back if that fails."""

from __future__ import annotations

import contextlib
from collections.abc import Sequence
from typing import Any

from nearhand.service.bus.desk_messages import Release, ReleaseReply, Rollback, StandDown
from nearhand.service.bus.desk_request import Deed
from nearhand.service.errors import ConflictError, NearhandError, RefusedError
from nearhand.service.keeper.office import Office
from nearhand.service.store.canonical import plain
from nearhand.service.store.rigs import RigRow, machine_digest
from nearhand.service.store.versions import MeasurementRow, VersionRow


def release_version(office: Office, request: Release) -> ReleaseReply:
    """Put a measured version in service if its measurement passes the rig's gate, or in spite of it with a reason.

    Raises:
        ConflictError: not measured, in service already, or another one is in service than expected.
        RefusedError: an override without a reason.
        LinkError: the action server did not answer; nothing was changed.
    """
    store = office.ledger.store
    version = store.versions.get(request.version)
    rig = store.rigs.get(version.rig)
    present = store.versions.in_service(version.rig)
    if request.expected_in_service is not None and request.expected_in_service != present:
        raise ConflictError(
            f"version {present or 'none'} of {version.rig} is in service, not {request.expected_in_service or 'none'}; "
            "look again before releasing",
            code="conflict.in_service",
        )
    if version.version == present:
        raise ConflictError(f"version {present} is in service already", code="conflict.in_service")
    measurement = store.versions.measurement(version.version)
    if measurement is None:
        raise ConflictError(
            f"version {version.version} was never measured; measure it first", code="conflict.not_measured"
        )
    if request.override and not request.why.strip():
        raise RefusedError("an override needs a written reason; say why", code="refused.override_reason")
    bounds = judge_version(office, rig, measurement, present)
    broken = [bound for bound in bounds if not bound["met"]]
    if broken and not request.override:
        return _refuse(office, request, version, present, bounds, broken)
    previous = _put_in_service(
        office, "release", rig, version.version, request,
        override=bool(broken), measurement=measurement.measurement, bounds=bounds,
    )  # fmt: skip
    return ReleaseReply(
        request=request.request, rig=version.rig, released=True, version=version.version, previous=previous,
        bounds=tuple(bounds), message=f"released in spite of the gate: {request.why}"[:2000] if broken else "",
    )  # fmt: skip


def judge_version(office: Office, rig: RigRow, measurement: MeasurementRow, present: int) -> list[dict[str, Any]]:
    """Return every bound of the rig's gate with its verdict; a rig without a gate has one bound that is not met."""
    from nearhand.service.measure.gate import judge

    if not rig.rig.gate:
        return [
            _unmet("gate", f"rig {rig.rig.name} has no gate; write its bounds into the rig's description or override")
        ]
    bounds: list[dict[str, Any]] = []
    if measurement.machine_digest != machine_digest(rig.rig):
        bounds.append(
            _unmet("rig", f"the description of {rig.rig.name} has changed since the measurement; measure again")
        )
    reference = office.ledger.store.versions.measurement(present) if present else None
    if reference is not None and reference.machine_digest != measurement.machine_digest:
        reference = None
    in_service = reference.content if reference else None
    verdicts = [plain(bound) for bound in judge(rig.rig.gate, measurement.content, in_service)]
    # Whoever measures again and again until the gate opens would fool it: what an earlier measurement of the version
    # broke stays broken. Further looks can only close the gate, so its level holds for any number of them.
    for earlier in office.ledger.store.versions.measurements(measurement.version):
        if earlier.measurement == measurement.measurement or earlier.machine_digest != measurement.machine_digest:
            continue
        judged = judge(rig.rig.gate, earlier.content, in_service)
        if any(bound["too_few"] for bound in judged):
            continue  # it could not have opened the gate, and so was no attempt: few episodes serve to plan by
        for index, bound in enumerate(judged):
            if verdicts[index]["met"] and not bound["met"]:
                told = f"measurement {earlier.measurement}, {earlier.utc}: {bound['sentence']}"
                verdicts[index] = plain({**bound, "sentence": told})
    return bounds + verdicts


def roll_back(office: Office, request: Rollback) -> ReleaseReply:
    """Put back the version before the present one, or any that was ever in service.

    Raises:
        ConflictError: there is none, or it never was in service.
        LinkError: the action server did not answer; nothing was changed.
    """
    store = office.ledger.store
    rig = store.rigs.get(request.rig)
    present = store.versions.in_service(request.rig)
    version = request.version or store.releases.before(request.rig, present)
    if not version:
        raise ConflictError(
            f"no version of {request.rig} was in service before {f'version {present}' if present else 'this'}; "
            "name one, or stand down",
            code="conflict.nothing_before",
        )
    store.versions.get(version)
    if version == present:
        raise ConflictError(f"version {version} is in service already", code="conflict.in_service")
    if not store.releases.was_in_service(request.rig, version):
        raise ConflictError(
            f"version {version} was never in service for {request.rig}; release it instead",
            code="conflict.never_in_service",
        )
    previous = _put_in_service(office, "rollback", rig, version, request)
    return ReleaseReply(
        request=request.request, rig=request.rig, released=True, version=version, previous=previous,
        message=f"version {version} is back in service",
    )  # fmt: skip


def stand_down(office: Office, request: StandDown) -> ReleaseReply:
    """Take the present version out of service and put none in.

    Raises:
        ConflictError: none is in service.
        LinkError: the action server did not answer; nothing was changed.
    """
    rig = office.ledger.store.rigs.get(request.rig)
    if not office.ledger.store.versions.in_service(request.rig):
        raise ConflictError(f"no version of {request.rig} is in service", code="conflict.in_service")
    previous = _put_in_service(office, "stand-down", rig, 0, request)
    return ReleaseReply(
        request=request.request, rig=request.rig, released=True, version=0, previous=previous,
        message="no version is in service; the fallback acts",
    )  # fmt: skip


def _put_in_service(
    office: Office,
    what: str,
    rig: RigRow,
    version: int,
    deed: Deed,
    *,
    override: bool = False,
    measurement: int | None = None,
    bounds: Sequence[dict[str, Any]] = (),
) -> int:
    """Have the action server act with a version, then record it in one transaction; return what acted before."""
    store = office.ledger.store
    previous = store.versions.in_service(rig.rig.name)
    office.server.load(rig, version)
    try:
        with office.ledger.transaction():
            number = store.releases.add(
                what, rig=rig.rig.name, version=version, previous=previous, who=deed.who, why=deed.why,
                override=override, measurement=measurement, bounds=bounds,
            )  # fmt: skip
            office.ledger.record(
                what, rig=rig.rig.name, who=deed.who, why=deed.why,
                detail={
                    "release": number, "version": version, "previous": previous, "override": override,
                    "measurement": measurement, "bounds": list(bounds),
                    "sha256": store.versions.get(version).sha256 if version else "",
                },
            )  # fmt: skip
    except BaseException:
        with contextlib.suppress(NearhandError):
            office.server.load(rig, previous)
        raise
    return previous


def _refuse(
    office: Office,
    request: Release,
    version: VersionRow,
    present: int,
    bounds: Sequence[dict[str, Any]],
    broken: Sequence[dict[str, Any]],
) -> ReleaseReply:
    refusal = "; ".join(str(bound["sentence"]) for bound in broken)[:2000]
    with office.ledger.transaction():
        office.ledger.store.versions.set_state(version.version, version.state, refusal=refusal)
        office.ledger.record(
            "refused", rig=version.rig, who=request.who, why=request.why,
            detail={"version": version.version, "bounds": list(bounds)},
        )  # fmt: skip
    return ReleaseReply(
        request=request.request, rig=version.rig, released=False, version=version.version, previous=present,
        bounds=tuple(bounds), message=refusal,
    )  # fmt: skip


def _unmet(figure: str, sentence: str) -> dict[str, Any]:
    return {
        "figure": figure, "bound": "", "relative_to": "none", "limit": None, "observed": None, "met": False,
        "sentence": sentence,
    }  # fmt: skip
