"""A job's folder: what is written is what is read, whole or not at all."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from nearhand.service.episodes.episode import SPLIT_PATTERN, Episode
from nearhand.service.errors import StoreError
from nearhand.service.jobs.folder import JobFolder

single = st.floats(width=32)


@st.composite
def episodes(draw: st.DrawFn) -> Episode:
    """Any episode, NaN and all."""
    length, n, m = draw(st.integers(1, 6)), draw(st.integers(1, 3)), draw(st.integers(1, 2))
    return Episode(
        episode=draw(st.from_regex(r"[a-z0-9]{1,8}", fullmatch=True)),
        rig="yard-crane",
        operator=draw(st.text(st.characters(codec="utf-8"), max_size=8)),
        times_s=draw(hnp.arrays(np.float64, length)),
        observations=draw(hnp.arrays(np.float32, (length + 1, n), elements=single)),
        actions=draw(hnp.arrays(np.float32, (length, m), elements=single)),
        terminated=draw(st.booleans()),
        outcome="cut",
        split=draw(st.sampled_from(SPLIT_PATTERN)),
        weight=draw(st.floats(0, 10)),
    )


@given(given=st.lists(episodes(), max_size=4))
def test_episodes_come_back_bit_by_bit(tmp_path_factory: pytest.TempPathFactory, given: list[Episode]) -> None:
    folder = JobFolder(tmp_path_factory.mktemp("job"))
    folder.write_episodes(given)
    read = folder.read_episodes()
    for one, other in zip(given, read, strict=True):
        for name in ("times_s", "observations", "actions"):
            assert getattr(one, name).tobytes() == getattr(other, name).tobytes()
            assert getattr(one, name).shape == getattr(other, name).shape
        for name in ("episode", "rig", "operator", "terminated", "outcome", "split", "weight"):
            assert getattr(one, name) == getattr(other, name)


@pytest.mark.parametrize("content", [b"", b"short", b"\xff" * 64, b"\x08\0\0\0\0\0\0\0{}      "])
def test_damaged_episodes_are_told_as_such(tmp_path: Path, content: bytes) -> None:
    folder = JobFolder(tmp_path)
    folder.write_bytes("episodes.safetensors", content)
    with pytest.raises(StoreError, match="missing or damaged"):
        folder.read_episodes()


@pytest.mark.parametrize("content", [b"", b"{", b"[1]", b"\xff"])
def test_damaged_json_is_told_as_such(tmp_path: Path, content: bytes) -> None:
    folder = JobFolder(tmp_path)
    folder.write_bytes("result.json", content)
    with pytest.raises(StoreError, match=r"result\.json"):
        folder.read_json("result.json")


def test_a_missing_file_is_told_as_such(tmp_path: Path) -> None:
    with pytest.raises(StoreError, match=r"job\.json"):
        JobFolder(tmp_path).read_json("job.json")


def test_writing_replaces_and_leaves_nothing_beside(tmp_path: Path) -> None:
    folder = JobFolder(tmp_path / "made")
    assert not folder.has("a.json")
    folder.write_json("a.json", {"x": 1})
    folder.write_json("a.json", {"x": 2})
    assert folder.read_json("a.json") == {"x": 2}
    assert [path.name for path in (tmp_path / "made").iterdir()] == ["a.json"]


def test_a_value_that_is_no_number_is_not_written_as_one(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="JSON"):
        JobFolder(tmp_path).write_json("a.json", {"x": float("nan")})
