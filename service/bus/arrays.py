"""Numeric vectors on the wire: little-endian float32 bytes, or a plain list of numbers."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from nearhand.service.errors import WireError

WIRE_DTYPE = np.dtype("<f4")


def pack(values: NDArray[np.floating] | Sequence[float]) -> bytes:
    """Return the values as little-endian float32 bytes, row by row."""
    return np.asarray(values, dtype=WIRE_DTYPE).tobytes()


def unpack(data: bytes | Sequence[float], size: int, *, what: str) -> NDArray[np.float32]:
    """Return a float32 vector of ``size`` numbers; finite or not is the caller's business.

    Raises:
        WireError: the number of values is not ``size``.
    """
    if isinstance(data, bytes):
        if len(data) != 4 * size:
            raise WireError(
                f"{what} has {len(data)} bytes; expected {4 * size} ({size} little-endian float32 values)",
                code="wire.vector_size",
            )
        return np.frombuffer(data, dtype=WIRE_DTYPE).astype(np.float32, copy=False)
    if len(data) != size:
        raise WireError(f"{what} has {len(data)} values; expected {size}", code="wire.vector_size")
    return np.asarray(data, dtype=np.float32)


def unpack_rows(data: bytes, rows: int, columns: int, *, what: str) -> NDArray[np.float32]:
    """Return a (rows, columns) float32 array.

    Raises:
        WireError: the number of bytes does not fit.
    """
    if len(data) != 4 * rows * columns:
        raise WireError(
            f"{what} has {len(data)} bytes; expected {4 * rows * columns} ({rows} × {columns} float32 values)",
            code="wire.vector_size",
        )
    return np.frombuffer(data, dtype=WIRE_DTYPE).astype(np.float32, copy=False).reshape(rows, columns)
