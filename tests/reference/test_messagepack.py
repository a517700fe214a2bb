"""MessagePack against the format's own table (msgpack/msgpack spec.md), so that a client in any language can speak.

Encodings computed with msgpack 1.2.4 and compared with the format table; the map example is that of msgpack.org
(from memory).
"""

from __future__ import annotations

import math
from typing import Any

import msgpack
import pytest

from nearhand.service.bus.action_messages import ACTION_REQUESTS, Act
from nearhand.service.bus.codec import MAX_FRAME_BYTES, decode, decode_map, encode
from nearhand.service.bus.limits import USUAL
from nearhand.service.errors import WireError

FORMAT_TABLE: list[tuple[Any, str]] = [
    (None, "c0"),
    (False, "c2"),
    (True, "c3"),
    (0, "00"),
    (127, "7f"),
    (128, "cc80"),
    (255, "ccff"),
    (256, "cd0100"),
    (65535, "cdffff"),
    (65536, "ce00010000"),
    (2**32 - 1, "ceffffffff"),
    (2**32, "cf0000000100000000"),
    (2**64 - 1, "cfffffffffffffffff"),
    (-1, "ff"),
    (-32, "e0"),
    (-33, "d0df"),
    (-128, "d080"),
    (-129, "d1ff7f"),
    (-32768, "d18000"),
    (-32769, "d2ffff7fff"),
    (-(2**31) - 1, "d3ffffffff7fffffff"),
    (-(2**63), "d38000000000000000"),
    (0.0, "cb0000000000000000"),
    (1.5, "cb3ff8000000000000"),
    (-0.1, "cbbfb999999999999a"),
    (math.inf, "cb7ff0000000000000"),
    (math.nan, "cb7ff8000000000000"),
    ("", "a0"),
    ("a", "a161"),
    ("é", "a2c3a9"),
    (b"", "c400"),
    (b"\x01\x02", "c4020102"),
    ([], "90"),
    ([1, 2, 3], "93010203"),
    ({}, "80"),
    ({"a": 1}, "81a16101"),
]


def same(first: Any, second: Any) -> bool:
    """Tell whether two values are equal, NaN to NaN, a list to a tuple of the same."""
    if isinstance(first, float) and math.isnan(first):
        return isinstance(second, float) and math.isnan(second)
    if isinstance(first, list):
        return list(second) == first
    return type(first) is type(second) and bool(first == second)


@pytest.mark.parametrize(("value", "hexadecimal"), FORMAT_TABLE)
def test_values_have_the_encoding_of_the_format_table(value: Any, hexadecimal: str) -> None:
    assert msgpack.packb(value, use_bin_type=True).hex() == hexadecimal


@pytest.mark.parametrize(("value", "hexadecimal"), FORMAT_TABLE)
def test_the_codec_reads_every_row_of_the_format_table(value: Any, hexadecimal: str) -> None:
    frame = bytes.fromhex("81a178" + hexadecimal)
    assert same(value, decode_map(frame)["x"])


def test_the_formats_own_example() -> None:
    frame = bytes.fromhex("82a7636f6d70616374c3a6736368656d6100")
    assert len(frame) == 18
    assert decode_map(frame) == {"compact": True, "schema": 0}


@pytest.mark.parametrize(
    ("value", "prefix"),
    [("x" * 31, "bf"), ("x" * 32, "d920"), ([0] * 15, "9f"), ([0] * 16, "dc0010")],
)
def test_size_boundaries(value: Any, prefix: str) -> None:
    assert msgpack.packb(value).hex().startswith(prefix)
    assert same(value, decode_map(bytes.fromhex("81a178") + msgpack.packb(value))["x"])


@pytest.mark.parametrize(("hexadecimal", "value"), [("ca3fc00000", 1.5), ("ca3dcccccd", 0.10000000149011612)])
def test_a_single_precision_number_is_read(hexadecimal: str, value: float) -> None:
    assert decode_map(bytes.fromhex("81a178" + hexadecimal)) == {"x": value}


@pytest.mark.parametrize(
    "hexadecimal",
    [
        "d6ff00000000",
        "d6ff6553f100",
        "d7ff773594006553f100",
        "c70cff000000000000000400000000",
        "c70cff00000000ffffffffffffffff",
    ],
)
def test_timestamps_and_other_extensions_are_refused(hexadecimal: str) -> None:
    assert msgpack.unpackb(bytes.fromhex(hexadecimal)) is not None
    with pytest.raises(WireError):
        decode_map(bytes.fromhex("81a178" + hexadecimal))


@pytest.mark.parametrize(
    "frame",
    [
        b"",
        bytes.fromhex("c1"),
        bytes.fromhex("930102"),
        bytes.fromhex("0102"),
        bytes.fromhex("ddffffffff"),
        bytes.fromhex("dbffffffff"),
        bytes.fromhex("c6ffffffff"),
        bytes.fromhex("dfffffffff"),
        bytes.fromhex("810102"),
        bytes.fromhex("81a161"),
        bytes.fromhex("81a1ff01"),
        bytes.fromhex("8000"),
        b"\x91" * 2000 + b"\xc0",
        b"\x81\xa1a" * 2000 + b"\xc0",
        bytes.fromhex("01"),
        bytes.fromhex("90"),
        bytes.fromhex("82a16101a16102"),
        bytes.fromhex("81a17882a16101a16102"),
    ],
    ids=lambda frame: frame[:8].hex() or "empty",
)
def test_hostile_frames_are_wire_errors(frame: bytes) -> None:
    with pytest.raises(WireError) as caught:
        decode_map(frame)
    assert caught.value.code == "wire.malformed"


def test_an_integer_need_not_be_the_shortest() -> None:
    assert decode_map(bytes.fromhex("81a178cd0001")) == {"x": 1}


def test_limits_of_size_hold() -> None:
    with pytest.raises(WireError) as caught:
        decode_map(bytes(MAX_FRAME_BYTES + 1))
    assert caught.value.code == "wire.oversized"
    with pytest.raises(WireError):
        decode_map(msgpack.packb({"x": [0] * (USUAL.items + 1)}))
    assert len(decode_map(msgpack.packb({"x": [0] * USUAL.items}))["x"]) == USUAL.items


def test_a_message_written_by_hand_from_the_wire_page_is_read() -> None:
    """Byte by byte from the format table, as a client without a library would write it."""
    text = {"v": "01", "kind": "a3616374", "rig": "a56372616e65", "session": "a173", "seq": "07", "sent_ns": "cd03e8"}
    fields = {**text, "obs": "c408" + "0000803f" + "000000c0"}
    frame = bytes([0x80 + len(fields)])
    for name, hexadecimal in fields.items():
        frame += bytes([0xA0 + len(name)]) + name.encode() + bytes.fromhex(hexadecimal)
    message = decode(frame, ACTION_REQUESTS)
    assert message == Act(rig="crane", session="s", seq=7, sent_ns=1000, obs=b"\x00\x00\x80\x3f\x00\x00\x00\xc0")
    assert encode(message).startswith(bytes.fromhex("89a17601a46b696e64a3616374"))
