"""Episodes from and to CSV."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.mapping import TableMap, read_map
from nearhand.service.episodes.tables import csv_text, parse_csv, read_csv
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Rig

HEADER = "episode,t_s,position,speed,angle,push"
FIRST = "a,0.00,0.1,0.2,0.3,0.5"
LAST = "a,0.02,0.11,0.21,0.31,"


def lines(*rows: str) -> list[str]:
    return [f"{row}\n" for row in rows]


def test_the_last_row_is_the_final_observation(rig: Rig) -> None:
    (episode,) = parse_csv(lines(HEADER, FIRST, "a,0.02,0.11,0.21,0.31,0.6", "a,0.04,0.12,0.22,0.32,"), rig)
    assert episode.length == 2
    np.testing.assert_array_equal(episode.times_s, [0.0, 0.02])
    np.testing.assert_array_equal(episode.observations[-1], np.array([0.12, 0.22, 0.32], dtype=np.float32))
    np.testing.assert_array_equal(episode.actions, np.array([[0.5], [0.6]], dtype=np.float32))
    assert (episode.operator, episode.outcome, episode.rig) == ("imported", "unknown", "cart")


def test_an_action_in_the_last_row_is_not_a_sample(rig: Rig) -> None:
    (episode,) = parse_csv(lines(HEADER, FIRST, "a,0.02,0.11,0.21,0.31,0.9"), rig)
    np.testing.assert_array_equal(episode.actions, np.array([[0.5]], dtype=np.float32))


def test_columns_may_stand_in_any_order_with_units_and_company(rig: Rig) -> None:
    header = "push [m/s2];weather;angle [rad];t_s;episode;speed [m/s];position [m];operator;outcome"
    episodes = parse_csv(
        lines(
            header, "0.5;fine;0.3;0;a;0.2;0.1;ann;success", "1;fine;0;0;b;0;0;;", ";;0.4;0.02;a;0.2;0.1;ann;success",
            "", ";;0;0.02;b;0;0;;",
        ), rig,
    )  # fmt: skip
    assert [(one.episode, one.operator, one.outcome, one.length) for one in episodes] == [
        ("a", "ann", "success", 1),
        ("b", "imported", "unknown", 1),
    ]


@pytest.mark.parametrize(
    ("rows", "line", "what"),
    [
        ((HEADER, FIRST, "a,0.02,x,0,0,0", LAST), 3, "position"),
        ((HEADER, FIRST, "a,0.02,0,0,nan,0", LAST), 3, "angle"),
        ((HEADER, FIRST, "a,0.02,0,1e39,0,0", LAST), 3, "speed"),
        ((HEADER, FIRST, "a,soon,0,0,0,0", LAST), 3, "t_s"),
        ((HEADER, FIRST, "a,0.02,0,0,0,1.5e", LAST), 3, "push"),
        ((HEADER, FIRST, "a,0.02,0,,0,0", LAST), 3, "speed"),
        ((HEADER, FIRST, "a,0.00,0,0,0,0", LAST), 3, "not later than"),
        ((HEADER, FIRST, "a,0.02,0,0,0", LAST), 3, "5 cells"),
        ((HEADER, FIRST, " ,0.02,0,0,0,0", LAST), 3, "'episode' is empty"),
        ((HEADER, FIRST, LAST, "a,0.04,0,0,0,0"), 4, "goes on after"),
        ((HEADER, FIRST, LAST, "b,0,0,0,0,0"), 4, "one row"),
        (("episode,t_s,position,speed,push", "a,0,0,0,0"), 1, "angle"),
        ((HEADER + ",push", FIRST), 1, "twice"),
        ((HEADER.replace("speed", "speed [km/h]"), FIRST), 1, "'km/h'"),
        ((HEADER + ",outcome", FIRST + ",splendid"), 2, "splendid"),
        ((HEADER, '"a'), 2, "no CSV"),
    ],
)
def test_a_bad_row_is_named_by_line_and_column(rig: Rig, rows: tuple[str, ...], line: int, what: str) -> None:
    with pytest.raises(ConfigError) as caught:
        parse_csv(lines(*rows), rig)
    assert f"line {line}:" in str(caught.value)
    assert what in str(caught.value)
    assert caught.value.code == "config.csv"


@pytest.mark.parametrize("rows", [(), (HEADER,)])
def test_an_empty_table_is_refused(rig: Rig, rows: tuple[str, ...]) -> None:
    with pytest.raises(ConfigError):
        parse_csv(lines(*rows), rig)


def test_a_file_that_is_no_text_is_refused(rig: Rig, tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(ConfigError, match="UTF-8"):
        read_csv(path, rig)
    with pytest.raises(ConfigError, match="cannot read"):
        read_csv(tmp_path / "absent.csv", rig)


def test_a_byte_order_mark_is_no_part_of_the_header(rig: Rig, tmp_path: Path) -> None:
    path = tmp_path / "log.csv"
    path.write_text("\ufeff" + "".join(lines(HEADER, FIRST, LAST)), encoding="utf-8")
    assert len(read_csv(path, rig)) == 1


finite = st.floats(width=32, allow_nan=False, allow_infinity=False)


@given(data=st.data(), length=st.integers(1, 6))
def test_what_is_written_reads_back_bit_for_bit(data: st.DataObject, length: int, rig: Rig) -> None:
    steps = data.draw(st.lists(st.floats(1e-3, 10.0), min_size=length, max_size=length))
    episode = Episode(
        episode=data.draw(st.from_regex(r"[a-z0-9]{1,20}", fullmatch=True)),
        rig="cart",
        operator=data.draw(st.sampled_from(["ann", 'b, "quoted"', "c;d"])),
        times_s=np.cumsum(steps),
        observations=data.draw(hnp.arrays(np.float32, (length + 1, 3), elements=finite)),
        actions=data.draw(hnp.arrays(np.float32, (length, 1), elements=finite)),
        outcome="success",
    )
    (read,) = parse_csv(csv_text(rig, [episode]).splitlines(keepends=True), rig)
    assert (read.episode, read.operator, read.outcome) == (episode.episode, episode.operator, episode.outcome)
    assert read.times_s.tobytes() == episode.times_s.tobytes()
    assert read.observations.tobytes() == episode.observations.tobytes()
    assert read.actions.tobytes() == episode.actions.tobytes()


def test_a_mapping_renames_and_converts(rig: Rig, tmp_path: Path) -> None:
    path = tmp_path / "map.toml"
    path.write_text(
        '[columns.position]\nfrom = "Trolley X [mm]"\nfactor = 0.001\noffset = 1.0\n'
        '[columns.t_s]\nfrom = "ms"\nfactor = 0.001\n[columns.episode]\nfrom = "run"\n'
    )
    rows = lines("run,ms,Trolley X [mm],position,speed,angle,push", "a,0,250,9,0,0,1", "a,20,500,9,0,0,")
    (episode,) = parse_csv(rows, rig, mapping=read_map(path))
    np.testing.assert_array_equal(episode.observations[:, 0], np.array([1.25, 1.5], dtype=np.float32))
    assert episode.times_s.tolist() == [0.0]
    with pytest.raises(ConfigError, match="line 2: column 'position'"):
        parse_csv([rows[0], "a,0,x,9,0,0,1\n", rows[2]], rig, mapping=read_map(path))


def test_a_mapping_that_cannot_be_used_is_refused(rig: Rig, tmp_path: Path) -> None:
    unknown = TableMap.model_validate({"columns": {"altitude": {"from": "z"}}})
    with pytest.raises(ConfigError, match="altitude"):
        parse_csv(lines(HEADER, FIRST, LAST), rig, mapping=unknown)
    path = tmp_path / "map.toml"
    for text in ("[columns.position]\nform = 'x'\n", "[columns", "[columns.position]\nfrom = 'x'\nfactor = nan\n"):
        path.write_text(text)
        with pytest.raises(ConfigError):
            read_map(path)
    with pytest.raises(ConfigError, match="cannot read the mapping"):
        read_map(tmp_path / "absent.toml")
