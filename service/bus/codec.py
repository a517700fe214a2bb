"""Bytes to message and back: MessagePack maps, checked against the message models, with hard limits."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import msgpack
from pydantic import ValidationError

from nearhand.service.bus.limits import MAX_FRAME_BYTES, USUAL, Limits
from nearhand.service.bus.message import PROTOCOL_VERSION, Message
from nearhand.service.errors import WireError
from nearhand.service.rigs import sentence

__all__ = ["MAX_FRAME_BYTES", "decode", "decode_map", "encode", "from_map"]


def encode(message: Message) -> bytes:
    """Return the message as one MessagePack map."""
    return bytes(msgpack.packb(message.model_dump(), use_bin_type=True))


def _unique_keys(pairs: list[tuple[Any, Any]]) -> dict[str, Any]:
    table = dict(pairs)
    if len(table) != len(pairs):
        raise ValueError("a key appears twice in one map")
    return table


def decode_map(frame: bytes, limits: Limits = USUAL) -> dict[str, Any]:
    """Return the map in a frame, limited in size, depth and item counts.

    Raises:
        WireError: the frame is oversized or no MessagePack map with string keys.
    """
    if len(frame) > limits.frame_bytes:
        raise WireError(
            f"frame of {len(frame)} bytes is over the limit of {limits.frame_bytes}; send smaller chunks",
            code="wire.oversized",
        )
    try:
        table = msgpack.unpackb(
            frame,
            raw=False,
            use_list=False,
            strict_map_key=True,
            object_pairs_hook=_unique_keys,
            max_str_len=limits.text_bytes,
            max_bin_len=limits.frame_bytes,
            max_array_len=limits.items,
            max_map_len=limits.items,
            max_ext_len=0,
        )
    except (ValueError, msgpack.exceptions.UnpackException, TypeError, RecursionError) as error:
        detail = str(error) or type(error).__name__
        raise WireError(f"frame is no MessagePack map: {detail}", code="wire.malformed") from error
    if not isinstance(table, dict):
        raise WireError(f"frame holds a {type(table).__name__}; expected a map", code="wire.malformed")
    if _is_deeper(table, limits.depth):
        raise WireError(f"the message nests deeper than {limits.depth} maps and lists", code="wire.depth")
    return table


def _is_deeper(table: dict[str, Any], most: int) -> bool:
    """Return whether maps and lists lie within each other more than so many deep."""
    level: list[Any] = [table]
    for _ in range(most):
        inner = [item for box in level for item in (box.values() if type(box) is dict else box)]
        level = [item for item in inner if type(item) is dict or type(item) is tuple]
        if not level:
            return False
    return True


def decode(frame: bytes, kinds: Mapping[str, type[Message]]) -> Message:
    """Return the message in a frame; ``kinds`` are those that this receiver takes.

    Raises:
        WireError: any defect of the frame; the code tells which.
    """
    return from_map(decode_map(frame), kinds)


def from_map(table: Mapping[str, Any], kinds: Mapping[str, type[Message]]) -> Message:
    """Return the message that a decoded map stands for.

    Raises:
        WireError: wrong version, unknown kind, or a field that is missing, unknown or of the wrong type.
    """
    version = table.get("v")
    if version != PROTOCOL_VERSION or isinstance(version, bool):
        raise WireError(f"protocol version {version!r}; this service speaks {PROTOCOL_VERSION}", code="wire.version")
    kind = table.get("kind")
    model = kinds.get(kind) if isinstance(kind, str) else None
    if model is None:
        shown = repr(kind)[:80]
        raise WireError(f"unknown message kind {shown}; this lane takes: {', '.join(sorted(kinds))}", code="wire.kind")
    try:
        return model.model_validate(table)
    except ValidationError as error:
        raise WireError(f"{kind}: {sentence(error)}", code="wire.fields") from error
