"""The policy file: what is written is read, and nothing else is."""

from __future__ import annotations

import json
import struct

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from safetensors.numpy import load, save

from nearhand.service.errors import PolicyFormatError
from nearhand.service.policy.format import HEADER_KEY, PolicyFile, read_policy, sha256, write_policy


def header_of(data: bytes) -> dict[str, object]:
    """Return the JSON header inside a policy file."""
    (length,) = struct.unpack("<Q", data[:8])
    value: dict[str, object] = json.loads(json.loads(data[8 : 8 + length])["__metadata__"][HEADER_KEY])
    return value


def rewritten(data: bytes, *, header: dict[str, object] | None = None, **tensors: np.ndarray | None) -> bytes:
    """Return the file with some header entries and tensors replaced or (None) removed."""
    kept = {**load(data), **{name.replace("__", "."): value for name, value in tensors.items()}}
    return bytes(
        save(
            {name: value for name, value in kept.items() if value is not None},
            metadata={HEADER_KEY: json.dumps({**header_of(data), **(header or {})})},
        )
    )


def test_what_is_written_is_read(policy_file: PolicyFile) -> None:
    written = policy_file
    data = write_policy(written)
    read = read_policy(data, expected_sha256=sha256(data))
    for mine, theirs in zip(written.policy.weights, read.policy.weights, strict=True):
        np.testing.assert_array_equal(mine, theirs)
    assert (read.rig, read.observations, read.actions, read.method, read.extra) == (
        "crane", ("a", "b", "c"), ("u", "v"), "clone", {"note": "n"},
    )  # fmt: skip
    assert list(read.novelty) == ["centre"]
    assert write_policy(read) == data


@pytest.mark.parametrize(
    ("change", "part"),
    [
        ({"header": {"format": 2}}, "another format"),
        ({"header": {"layers": 99}}, "layers"),
        ({"header": {"layers": True}}, "layers"),
        ({"header": {"past_actions": -1}}, "past_actions"),
        ({"header": {"observations": []}}, "channel names"),
        ({"header": {"observations": ["a", "b"]}}, "shape"),
        ({"weight__0": None}, "weight.0"),
        ({"bias__1": np.zeros(3, dtype=np.float32)}, "bias.1"),
        ({"weight__1": np.full((8, 2), np.nan, dtype=np.float32)}, "finite"),
        ({"weight__1": np.zeros((8, 2), dtype=np.float32)}, "probe"),
        ({"weight__1": np.zeros((8, 2), dtype=np.float64)}, "finite float32"),
        ({"action_half": np.zeros(2, dtype=np.float32)}, "positive"),
    ],
)
def test_a_file_that_is_not_as_it_says_is_refused(
    policy_file: PolicyFile, change: dict[str, object], part: str
) -> None:
    data = rewritten(write_policy(policy_file), **change)  # type: ignore[arg-type]
    with pytest.raises(PolicyFormatError, match=part):
        read_policy(data)


def test_a_wrong_hash_is_refused_before_anything_is_read() -> None:
    with pytest.raises(PolicyFormatError, match="SHA-256"):
        read_policy(b"", expected_sha256=sha256(b"x"))


@given(st.binary(max_size=400))
def test_any_bytes_are_refused_with_the_one_error(data: bytes) -> None:
    with pytest.raises(PolicyFormatError):
        read_policy(data)


@given(position=st.integers(0, 10_000), value=st.integers(0, 255))
def test_a_changed_byte_is_refused_or_harmless(policy_file: PolicyFile, position: int, value: int) -> None:
    data = bytearray(write_policy(policy_file))
    data[position % len(data)] = value
    try:
        policy = read_policy(bytes(data)).policy
    except PolicyFormatError:
        return
    assert all(np.isfinite(weight).all() for weight in policy.weights)
