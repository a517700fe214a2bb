"""Desk requests about rigs: register, show, list, arm and halt."""

from __future__ import annotations

import contextlib

from nearhand.service.bus.control_messages import ControlReply
from nearhand.service.bus.desk_messages import GetRig, Halt, ListRigs, PutRig, Rearm, RigReply, RigsReply, RigStateReply
from nearhand.service.errors import ConflictError, LinkError, RefusedError
from nearhand.service.keeper.office import Office, Room
from nearhand.service.rigs import Rig, rig_from_toml
from nearhand.service.store.rigs import RigRow


def put_rig(office: Office, request: PutRig) -> RigReply:
    """Register a rig or replace its description.

    The action server checks and takes a new description first; if it is away it gets it when it comes back.

    Raises:
        ConfigError: the text does not describe a rig.
        ConflictError: other channels than the rig's episodes and versions have.
        RefusedError: a known rig would change, and the key has not the role ``release``; or there are too many.
    """
    rig = rig_from_toml(request.toml)
    rigs = office.ledger.store.rigs
    known = rigs.find(rig.name)
    if known is not None and known.digest == rig.digest():
        with contextlib.suppress(LinkError):
            office.server.ensure(known)
        return _reply(office, request.request, known)
    if known is not None and _channels(known.rig) != _channels(rig) and rigs.is_bound(rig.name):
        raise ConflictError(
            f"rig {rig.name} has episodes or versions with channels {_channels(known.rig)}; the new description has "
            f"{_channels(rig)}; give the changed machine a name of its own",
            code="conflict.channels",
        )
    if known is not None:
        office.access.require("release", "desk", "changing a rig that is known")
    most = office.settings.limits.rigs
    if known is None and len(rigs.names()) >= most:
        raise RefusedError(f"{most} rigs are known already; raise the limit rigs", code="refused.rigs")
    candidate = RigRow(rig=rig, digest=rig.digest(), toml=request.toml, put_utc="")
    loaded = False
    if office.server.reachable:
        try:
            office.server.load(candidate, office.ledger.store.versions.in_service(rig.name))
            loaded = True
        except LinkError:
            office.ledger.counters["control.load_failures"] += 1
    try:
        with office.ledger.transaction():
            rigs.put(rig, request.toml, request.who)
            office.ledger.record(
                "rig-registered" if known is None else "rig-changed",
                rig=rig.name, who=request.who, why=request.why,
                detail={"digest": candidate.digest, "previous": known.digest if known else ""},
            )  # fmt: skip
    except BaseException:
        if loaded:
            office.server.forget(rig.name)
        raise
    return _reply(office, request.request, rigs.get(rig.name))


def get_rig(office: Office, request: GetRig) -> RigReply:
    """Show a rig."""
    return _reply(office, request.request, office.ledger.store.rigs.get(request.rig))


def list_rigs(office: Office, request: ListRigs) -> RigsReply:
    """List all rigs with what acts for them."""
    store = office.ledger.store
    rows = [store.rigs.get(name) for name in store.rigs.names()]
    return RigsReply(
        request=request.request,
        rigs=tuple(
            {
                "rig": row.rig.name,
                "title": row.rig.title,
                "digest": row.digest,
                "put_utc": row.put_utc,
                "in_service": store.versions.in_service(row.rig.name),
                "mode": str(office.server.states.get(row.rig.name, {}).get("mode", "")),
            }
            for row in rows
        ),
    )


def rearm(office: Office, request: Rearm) -> RigStateReply:
    """Clear a rig's latch.

    Raises:
        LinkError: the action server did not answer.
    """
    office.ledger.store.rigs.get(request.rig)
    return _note(office, request, "rearm", office.server.arm(request.rig, request.who, request.why))


def halt(office: Office, request: Halt) -> RigStateReply:
    """Latch a rig.

    Raises:
        LinkError: the action server did not answer.
    """
    office.ledger.store.rigs.get(request.rig)
    return _note(office, request, "halt", office.server.latch(request.rig, request.who, request.why))


def _note(office: Office, request: Rearm | Halt, what: str, state: ControlReply) -> RigStateReply:
    with office.ledger.transaction():
        office.ledger.record(
            what, rig=request.rig, who=request.who, why=request.why,
            detail={"mode": state.mode, "version": state.version, "reasons": state.reasons},
        )  # fmt: skip
    return RigStateReply(
        request=request.request, rig=state.rig, mode=state.mode, version=state.version, reasons=state.reasons
    )


def _channels(rig: Rig) -> tuple[tuple[str, ...], tuple[str, ...]]:
    return tuple(one.name for one in rig.observations), tuple(one.name for one in rig.actions)


def _reply(office: Office, request: str, row: RigRow) -> RigReply:
    return RigReply(
        request=request,
        rig=row.rig.name,
        digest=row.digest,
        description=row.rig.model_dump(mode="json"),
        in_service=office.ledger.store.versions.in_service(row.rig.name),
    )


ROOM: Room = {"put-rig": put_rig, "get-rig": get_rig, "list-rigs": list_rigs, "rearm": rearm, "halt": halt}
