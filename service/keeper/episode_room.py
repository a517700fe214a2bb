"""Desk requests about episodes."""

from __future__ import annotations

import numpy as np

from nearhand.service.bus.arrays import pack
from nearhand.service.bus.desk_messages import EpisodeReply, EpisodesReply, GetEpisode, ListEpisodes
from nearhand.service.errors import ConflictError
from nearhand.service.keeper.office import Office, Room


def list_episodes(office: Office, request: ListEpisodes) -> EpisodesReply:
    """List a rig's episodes in order of opening."""
    store = office.ledger.store
    store.rigs.get(request.rig)
    names = (
        "episode", "operator", "task", "notes", "state", "samples", "outcome", "terminated", "split", "finite",
        "started_utc", "closed_utc",
    )  # fmt: skip
    return EpisodesReply(
        request=request.request,
        episodes=tuple({name: getattr(row, name) for name in names} for row in store.episodes.of_rig(request.rig)),
    )


def get_episode(office: Office, request: GetEpisode) -> EpisodeReply:
    """Return a closed episode's samples.

    Raises:
        ConflictError: the episode is not closed.
    """
    row = office.ledger.store.episodes.get(request.episode)
    if row.state != "closed":
        raise ConflictError(
            f"episode {row.episode} is {row.state}; only a closed one can be read", code="conflict.open"
        )
    episode = office.ledger.store.episodes.load(row)
    return EpisodeReply(
        request=request.request,
        episode=row.episode,
        rig=row.rig,
        operator=row.operator,
        outcome=row.outcome,
        terminated=row.terminated,
        samples=row.samples,
        times=np.asarray(episode.times_s, dtype="<f8").tobytes(),
        obs=pack(episode.observations),
        act=pack(episode.actions),
    )


ROOM: Room = {"list-episodes": list_episodes, "get-episode": get_episode}
