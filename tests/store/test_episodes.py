"""Episodes go in by chunks and come out bit by bit as they were."""

from __future__ import annotations

import sqlite3
import zlib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.typing import NDArray

from nearhand.service.episodes.episode import split_of
from nearhand.service.errors import StoreError, UnknownNameError
from nearhand.service.rigs import rig_from_toml
from nearhand.service.store.episodes import ChunkRow, EpisodeRow
from nearhand.service.store.store import Store


def chunk_of(times: NDArray[Any], observations: NDArray[Any], actions: NDArray[Any]) -> ChunkRow:
    t, o, a = times.astype("<f8").tobytes(), observations.astype("<f4").tobytes(), actions.astype("<f4").tobytes()
    return ChunkRow(len(times), t, o, a, zlib.crc32(t + o + a))


def begin(store: Store, episode: str = "e1", operator: str = "ann") -> EpisodeRow:
    return store.episodes.open(
        episode, rig="yard-crane", rig_digest="d", operator=operator, task="lift", notes="", started_utc="t",
        observations=2, actions=1,
    )  # fmt: skip


def close_one(store: Store, episode: str, operator: str = "ann", *, finite: bool = True) -> EpisodeRow:
    row = begin(store, episode, operator)
    row = store.episodes.append(row, chunk_of(np.arange(3), np.ones((3, 2)), np.ones((3, 1))), finite=finite)
    return store.episodes.close(row, outcome="success", terminated=False, final_obs=b"\0" * 8, finite=True)


@given(data=st.data(), sizes=st.lists(st.integers(1, 9), min_size=1, max_size=5))
def test_a_round_trip_keeps_every_bit(
    tmp_path_factory: pytest.TempPathFactory, rig_toml: str, data: st.DataObject, sizes: list[int]
) -> None:
    total = sum(sizes)
    times = data.draw(hnp.arrays(np.float64, total, elements=st.floats(allow_nan=False, allow_infinity=False)))
    single = st.floats(width=32)
    observations = data.draw(hnp.arrays(np.float32, (total + 1, 2), elements=single))
    actions = data.draw(hnp.arrays(np.float32, (total, 1), elements=single))
    store = Store(tmp_path_factory.mktemp("trip") / "n.sqlite3")
    store.rigs.put(rig_from_toml(rig_toml), rig_toml, "w")
    row, start = begin(store), 0
    for size in sizes:
        part = slice(start, start + size)
        row = store.episodes.append(row, chunk_of(times[part], observations[:-1][part], actions[part]), finite=True)
        start += size
    final = observations[-1].astype("<f4").tobytes()
    row = store.episodes.close(row, outcome="cut", terminated=True, final_obs=final, finite=True)
    episode = store.episodes.load(row)
    store.close()
    assert (row.chunks, row.samples, row.outcome, row.terminated) == (len(sizes), total, "cut", True)
    assert episode.times_s.tobytes() == times.tobytes()
    assert episode.observations.tobytes() == observations.tobytes()
    assert episode.actions.tobytes() == actions.tobytes()
    assert episode.times_s.dtype == np.float64
    assert episode.observations.dtype == episode.actions.dtype == np.float32


def test_splits_follow_the_order_of_closing_per_operator(stocked: Store) -> None:
    found: dict[str, list[str | None]] = {"ann": [], "ben": []}
    for index in range(8):
        for operator in found:
            found[operator].append(close_one(stocked, f"{operator}{index}", operator).split)
    expected = [split_of(index) for index in range(8)]
    assert found == {"ann": expected, "ben": expected}


def test_a_choice_of_splits_operators_and_finite_ones(stocked: Store) -> None:
    for index in range(6):
        close_one(stocked, f"a{index}", "ann", finite=index != 2)
    close_one(stocked, "b0", "ben")
    begin(stocked, "open")
    closed = stocked.episodes.closed
    assert [row.episode for row in closed("yard-crane")] == ["a0", "a1", "a2", "a3", "a4", "a5", "b0"]
    train = closed("yard-crane", splits=("train",), operators=("ann",), finite_only=True)
    assert [row.episode for row in train] == ["a0", "a4"]
    assert closed("yard-crane", operators=("nobody",)) == []


def test_a_discarded_episode_leaves_its_name_and_nothing_else(stocked: Store) -> None:
    row = stocked.episodes.append(begin(stocked), chunk_of(np.arange(1), np.ones((1, 2)), np.ones((1, 1))), finite=True)
    assert stocked.episodes.discard(row).state == "discarded"
    assert stocked.database.value("SELECT count(*) FROM chunks") == 0
    with pytest.raises(StoreError):
        begin(stocked)


def test_a_chunk_changed_on_disk_is_found(stocked: Store, tmp_path: Path) -> None:
    row = close_one(stocked, "e1")
    other = sqlite3.connect(tmp_path / "nearhand.sqlite3")
    other.execute("UPDATE chunks SET act = ? WHERE episode = 'e1'", (np.full(3, 9, dtype="<f4").tobytes(),))
    other.commit()
    other.close()
    with pytest.raises(StoreError, match="CRC-32") as caught:
        stocked.episodes.load(row)
    assert caught.value.code == "store.damaged"


def test_the_database_itself_refuses_a_chunk_twice_and_a_chunk_of_nothing(stocked: Store) -> None:
    row = stocked.episodes.append(begin(stocked), chunk_of(np.arange(1), np.ones((1, 2)), np.ones((1, 1))), finite=True)
    insert = "INSERT INTO chunks VALUES (?, 0, 1, x'', x'', x'', 0)"
    for episode in (row.episode, "unknown"):
        with pytest.raises(StoreError) as caught:
            stocked.database.execute(insert, (episode,))
        assert caught.value.code == "store.constraint"


def test_unknown_names_say_so(stocked: Store) -> None:
    with pytest.raises(UnknownNameError, match="open-episode"):
        stocked.episodes.get("nothing")
    with pytest.raises(UnknownNameError, match="yard-crane"):
        stocked.rigs.get("nothing")
