"""Checksums and hashes against published values."""

from __future__ import annotations

import struct
import zlib

import pytest

from nearhand.service.policy.format import sha256
from nearhand.service.store.episodes import ChunkRow

# CRC-32/ISO-HDLC: the check value of "123456789" is printed in every catalogue of CRCs and in the PNG and gzip
# literature (RFC 1952 and ISO 3309 define the polynomial); the others computed bit by bit below.
CRC_VALUES = {b"123456789": 0xCBF43926, b"": 0x00000000, b"abc": 0x352441C2}

# FIPS 180-4 example values (NIST), from memory and computed with hashlib.
SHA_VALUES = {
    b"abc": "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad",
    b"": "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855",
    b"abcdbcdecdefdefgefghfghighijhijkijkljklmklmnlmnomnopnopq": (
        "248d6a61d20638b8e5c026930c3e6039a33ce45964ff2167f6ecedd419db06c1"
    ),
    b"a" * 1_000_000: "cdc76e5c9914fb9281a1c7e284d73e67f1809a48a497200e046d39ccc7112cd0",
}


def bitwise_crc(data: bytes) -> int:
    """CRC-32 from its definition: reflected polynomial 0xEDB88320, start and end inverted (RFC 1952, section 8)."""
    register = 0xFFFFFFFF
    for byte in data:
        register ^= byte
        for _ in range(8):
            register = (register >> 1) ^ (0xEDB88320 if register & 1 else 0)
    return register ^ 0xFFFFFFFF


@pytest.mark.parametrize(("data", "crc"), CRC_VALUES.items())
def test_the_crc_of_a_chunk_is_that_of_iso_hdlc(data: bytes, crc: int) -> None:
    for cut in range(len(data) + 1):
        chunk = ChunkRow(count=1, times=data[:cut], obs=data[cut:], act=b"", crc=0)
        assert chunk.computed_crc() == crc == bitwise_crc(data)
    assert ChunkRow(count=1, times=b"", obs=b"", act=data, crc=0).computed_crc() == crc


def test_a_message_followed_by_its_crc_leaves_the_known_residue() -> None:
    # Residue of CRC-32 over message and little-endian checksum; computed from the definition.
    message = b"123456789"
    assert zlib.crc32(message + struct.pack("<I", zlib.crc32(message))) == 0x2144DF1C


@pytest.mark.parametrize(("data", "digest"), SHA_VALUES.items(), ids=["abc", "empty", "two-blocks", "million-a"])
def test_sha_256_gives_the_values_of_fips_180_4(data: bytes, digest: str) -> None:
    assert sha256(data) == digest
