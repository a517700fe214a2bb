"""The spool file: what was appended comes back bit for bit, and damage costs no more than what was damaged."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from nearhand.client.spool import Ending, Rows, SpoolFile, row_type
from nearhand.service.bus.intake_messages import OpenEpisode
from nearhand.service.errors import StoreError

TYPE = row_type(3, 1)
HEAD = OpenEpisode(
    episode="cart-1", rig="cart", operator="Ännchen", started_utc="2031-05-04T10:11:12.345Z", observations=3, actions=1
)


def some_rows(count: int, seed: int = 0) -> Rows:
    """Return rows of any bit pattern, NaN with payload among them."""
    data = np.random.default_rng(seed).bytes(count * TYPE.itemsize)
    return np.frombuffer(data, dtype=TYPE)


def written(folder: Path) -> tuple[Path, Rows]:
    """Write a file with three batches, two marks and an ending; return path and all rows."""
    rows = some_rows(12)
    spool = SpoolFile.create(folder, HEAD)
    spool.append_rows(rows[:5])
    spool.mark(4)
    spool.append_rows(rows[5:6])
    spool.append_rows(rows[6:])
    spool.mark(12)
    spool.end(Ending(samples=12, outcome="success", terminated=True, final_obs=b"\x01\x02\x03\x04" * 3))
    spool.close()
    return spool.path, rows


def test_what_was_written_is_read(tmp_path: Path) -> None:
    path, rows = written(tmp_path)
    spool = SpoolFile.take_up(path)
    assert spool is not None
    assert spool.head == HEAD
    assert (spool.samples, spool.marks) == (12, [4, 12])
    assert spool.ending == Ending(samples=12, outcome="success", terminated=True, final_obs=b"\x01\x02\x03\x04" * 3)
    for start in range(12):
        for stop in range(start + 1, 13):
            assert spool.read(start, stop).tobytes() == rows[start:stop].tobytes()
    spool.close()


def test_a_file_cut_anywhere_keeps_every_whole_frame_before_the_cut(tmp_path: Path) -> None:
    path, rows = written(tmp_path)
    whole = path.read_bytes()
    seen = set()
    for size in range(len(whole)):
        path.write_bytes(whole[:size])
        try:
            spool = SpoolFile.take_up(path)
        except StoreError:
            assert size < 8 + 9 + len(HEAD.model_dump_json(exclude={"v", "kind"}).encode())
            continue
        assert spool is not None
        seen.add(spool.samples)
        if spool.samples:
            assert spool.read(0, spool.samples).tobytes() == rows[: spool.samples].tobytes()
        kept = path.stat().st_size
        assert kept <= size
        spool.append_rows(rows[:2])
        spool.close()
        again = SpoolFile.take_up(path)
        assert again is not None
        assert again.read(spool.samples - 2, spool.samples).tobytes() == rows[:2].tobytes()
        again.close()
    assert seen == {0, 5, 6, 12}


@given(place=st.integers(0, 10_000), bit=st.integers(0, 7))
def test_a_flipped_bit_never_changes_a_sample_unnoticed(
    place: int, bit: int, tmp_path_factory: pytest.TempPathFactory
) -> None:
    path, rows = written(tmp_path_factory.mktemp("spool"))
    data = bytearray(path.read_bytes())
    data[place % len(data)] ^= 1 << bit
    path.write_bytes(data)
    try:
        spool = SpoolFile.take_up(path)
    except StoreError:
        return
    assert spool is not None
    if spool.samples:
        assert spool.read(0, spool.samples).tobytes() == rows[: spool.samples].tobytes()
    spool.close()


def test_damage_after_reading_is_noticed_when_a_chunk_is_read(tmp_path: Path) -> None:
    path, _ = written(tmp_path)
    spool = SpoolFile.take_up(path)
    assert spool is not None
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(data)
    with pytest.raises(StoreError, match="damaged"):
        spool.read(0, 12)
    spool.close()


@pytest.mark.parametrize("content", [b"", b"NHSPOOL\x01", b"something else altogether", b"NHSPOOL\x01" + bytes(40)])
def test_another_file_is_refused(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "x.spool"
    path.write_bytes(content)
    with pytest.raises(StoreError, match="no spool file"):
        SpoolFile.take_up(path)


def test_a_file_whose_writer_lives_is_left_alone(tmp_path: Path) -> None:
    spool = SpoolFile.create(tmp_path, HEAD)
    assert SpoolFile.take_up(spool.path) is None
    spool.close()
    taken = SpoolFile.take_up(spool.path)
    assert taken is not None
    taken.close()


def test_the_lock_ends_with_the_process(tmp_path: Path) -> None:
    code = (
        "import os, sys; from pathlib import Path; from nearhand.client.spool import SpoolFile; "
        "from nearhand.service.bus.intake_messages import OpenEpisode; "
        "s = SpoolFile.create(Path(sys.argv[1]), OpenEpisode.model_validate_json(sys.argv[2])); "
        "print(s.path, flush=True); sys.stdin.read(); os.abort()"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", code, str(tmp_path), HEAD.model_dump_json()],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL,
    )  # fmt: skip
    assert process.stdout is not None
    path = Path(process.stdout.readline().decode().strip())
    assert SpoolFile.take_up(path) is None
    process.communicate()
    spool = SpoolFile.take_up(path)
    assert spool is not None
    spool.close()


def test_two_recordings_never_share_a_file(tmp_path: Path) -> None:
    spool = SpoolFile.create(tmp_path, HEAD)
    with pytest.raises(StoreError, match="already"):
        SpoolFile.create(tmp_path, HEAD)
    spool.close()


def test_an_unwritable_folder_is_named(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(StoreError, match="another spool folder"):
        SpoolFile.create(tmp_path / "file", HEAD)


@pytest.mark.parametrize(("samples", "ending"), [(0, "discarded"), (1, "discarded"), (2, "cut"), (7, "cut")])
def test_a_cut_episode_ends_with_the_last_observation_whose_action_is_unknown(
    tmp_path: Path, samples: int, ending: str
) -> None:
    rows = some_rows(7)
    spool = SpoolFile.create(tmp_path, HEAD)
    spool.append_rows(rows[:samples])
    spool.cut()
    assert spool.ending is not None
    if ending == "discarded":
        assert spool.ending.discarded
    else:
        assert (spool.ending.outcome, spool.ending.samples) == ("cut", samples - 1)
        assert spool.ending.final_obs == rows["obs"][samples - 1].tobytes()
    spool.close()


def test_a_full_disk_leaves_the_file_as_it_was(tmp_path: Path) -> None:
    code = (
        "import resource, signal, sys; from pathlib import Path; import numpy as np\n"
        "from nearhand.client.spool import SpoolFile, row_type\n"
        "from nearhand.service.bus.intake_messages import OpenEpisode\n"
        "from nearhand.service.errors import StoreError\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "spool = SpoolFile.create(Path(sys.argv[1]), OpenEpisode.model_validate_json(sys.argv[2]))\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (2000, 2000))\n"
        "spool.append_rows(np.zeros(40, dtype=row_type(3, 1)))\n"
        "size = spool.path.stat().st_size\n"
        "try:\n"
        "    spool.append_rows(np.zeros(400, dtype=row_type(3, 1)))\n"
        "except StoreError as error:\n"
        "    print(error.code, spool.path.stat().st_size == size, spool.samples)\n"
    )
    answer = subprocess.run(
        [sys.executable, "-c", code, str(tmp_path), HEAD.model_dump_json()], capture_output=True, text=True, check=True
    )
    assert answer.stdout.split() == ["store.spool", "True", "40"]
    (path,) = tmp_path.iterdir()
    spool = SpoolFile.take_up(path)
    assert spool is not None
    assert spool.samples == 40
    spool.close()
