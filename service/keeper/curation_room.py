"""Desk requests about curation: decisions are events with who and why, training sets are saved for good."""

from __future__ import annotations

from dataclasses import asdict, replace
from typing import Any

from nearhand.service.bus.curation_messages import (
    Curate,
    CurationReply,
    ListCuration,
    ListSets,
    SaveSet,
    SetsReply,
)
from nearhand.service.episodes.curation import Decision, apply
from nearhand.service.errors import ConflictError
from nearhand.service.keeper.office import Office, Room
from nearhand.service.store.curation import Member, SetRow
from nearhand.service.store.episodes import EpisodeRow
from nearhand.service.store.store import Store


def _closed(store: Store, rig: str, episode: str) -> EpisodeRow:
    row = store.episodes.get(episode)
    if row.rig != rig:
        raise ConflictError(f"episode {episode} is of rig {row.rig}, not of {rig}", code="conflict.rig")
    if row.state != "closed":
        raise ConflictError(f"episode {episode} is {row.state}; only a closed one can be curated", code="conflict.open")
    return row


def curate(office: Office, request: Curate) -> CurationReply:
    """Decide about episodes, all of them or none.

    Raises:
        ConflictError: an episode is not closed, or a trim leaves nothing of it.
        UnknownNameError: there is no such rig or episode.
    """
    store = office.ledger.store
    rig = store.rigs.get(request.rig).rig
    with office.ledger.transaction():
        for name in request.episodes:
            row = _closed(store, request.rig, name)
            before = store.curation.of(name)
            after = _changed(before, request)
            if after == before:
                continue
            is_cut = (after.start_s, after.end_s) != (before.start_s, before.end_s)
            if is_cut and apply(replace(after, excluded=False), store.episodes.load(row), rig) is None:
                raise ConflictError(
                    f"episode {name}: keeping {after.start_s} s to {after.end_s or 'its'} end leaves no sample of it; "
                    "nothing was changed",
                    code="conflict.trim",
                )
            store.curation.decide(name, after)
            office.ledger.record(
                "curated", rig=request.rig, who=request.who, why=request.why,
                detail={"episode": name, "split": row.split, "before": _told(before), "after": _told(after)},
            )  # fmt: skip
    return _curation(store, request.request, request.rig, request.episodes)


def _changed(before: Decision, request: Curate) -> Decision:
    end_s = before.end_s if request.end_s is None else (request.end_s or None)
    start_s = before.start_s if request.start_s is None else request.start_s
    if end_s is not None and end_s <= start_s:
        raise ConflictError(
            f"a trim from {start_s} s to {end_s} s keeps nothing; the end comes after the start", code="conflict.trim"
        )
    return Decision(
        excluded=before.excluded if request.excluded is None else request.excluded,
        start_s=start_s,
        end_s=end_s,
        weight=before.weight if request.weight is None else request.weight,
        tags=tuple(sorted((set(before.tags) | set(request.tag)) - set(request.untag))),
    )


def _told(decision: Decision) -> dict[str, Any]:
    return {**asdict(decision), "tags": list(decision.tags)}


def list_curation(office: Office, request: ListCuration) -> CurationReply:
    """Tell what is decided about a rig's closed episodes."""
    office.ledger.store.rigs.get(request.rig)
    return _curation(office.ledger.store, request.request, request.rig, ())


def _curation(store: Store, request: str, rig: str, only: tuple[str, ...]) -> CurationReply:
    decided = store.curation.of_rig(rig)
    rows = tuple(
        {"episode": row.episode, "operator": row.operator, "split": row.split, "samples": row.samples}
        | _told(decided.get(row.episode, Decision()))
        for row in store.episodes.closed(rig)
        if not only or row.episode in only
    )
    return CurationReply(request=request, rig=rig, episodes=rows)


def save_set(office: Office, request: SaveSet) -> SetsReply:
    """Save a training set, with the trims and weights that are in force.

    Raises:
        ConflictError: an episode is excluded or not for training, there is none, or the name is taken.
    """
    store = office.ledger.store
    store.rigs.get(request.rig)
    decided = store.curation.of_rig(request.rig)
    if request.episodes:
        rows = [_closed(store, request.rig, name) for name in dict.fromkeys(request.episodes)]
        for row in rows:
            if row.split != "train":
                raise ConflictError(
                    f"episode {row.episode} is kept for {row.split} use and never trains; leave it out of the set",
                    code="conflict.split",
                )
            if decided.get(row.episode, Decision()).excluded or not row.finite:
                raise ConflictError(
                    f"episode {row.episode} is excluded or holds values that are not finite; keep it first, or leave "
                    "it out",
                    code="conflict.excluded",
                )
    else:
        rows = [
            row
            for row in store.episodes.closed(request.rig, splits=("train",), finite_only=True)
            if not decided.get(row.episode, Decision()).excluded
        ]
    if not rows:
        raise ConflictError(
            f"rig {request.rig} has no training episodes to save; collect some, or keep some",
            code="conflict.no_demonstrations",
        )
    members = [
        Member(row.episode, decided.get(row.episode, Decision()), store.curation.content_digest(row)) for row in rows
    ]
    with office.ledger.transaction():
        saved = store.curation.save_set(request.rig, request.name, members, who=request.who, why=request.why)
        office.ledger.record(
            "set-saved", rig=request.rig, who=request.who, why=request.why,
            detail={"name": saved.name, "sha256": saved.sha256, "episodes": len(members)},
        )  # fmt: skip
    return SetsReply(request=request.request, rig=request.rig, sets=(_set(store, saved),))


def list_sets(office: Office, request: ListSets) -> SetsReply:
    """List a rig's training sets in order of saving.

    Raises:
        UnknownNameError: there is no such rig.
    """
    store = office.ledger.store
    store.rigs.get(request.rig)
    found = tuple(_set(store, row) for row in store.curation.sets(request.rig))
    return SetsReply(request=request.request, rig=request.rig, sets=found)


def _set(store: Store, row: SetRow) -> dict[str, Any]:
    members = [
        {"episode": item.episode, "start_s": item.decision.start_s, "end_s": item.decision.end_s,
         "weight": item.decision.weight, "sha256": item.sha256}
        for item in store.curation.members(row.rig, row.name)
    ]  # fmt: skip
    return {
        "name": row.name, "sha256": row.sha256, "created_utc": row.created_utc, "who": row.who, "why": row.why,
        "members": members,
    }  # fmt: skip


ROOM: Room = {"curate": curate, "list-curation": list_curation, "save-set": save_set, "list-sets": list_sets}
