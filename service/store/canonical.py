"""Values as text that is the same for the same value: what is stored and what is hashed."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any

from nearhand.service.errors import ConfigError


def plain(value: Any) -> Any:
    """Return a value as JSON and the wire can hold it.

    Keys become text, bytes hexadecimal; NaN, infinities and whole numbers of more than 64 bits become text.
    """
    if value is None or isinstance(value, bool | str):
        return value
    if isinstance(value, int):
        return value if -(2**63) <= value < 2**64 else str(value)
    if isinstance(value, float):
        return value if math.isfinite(value) else repr(value)
    if isinstance(value, bytes):
        return value.hex()
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [plain(item) for item in value]
    return str(value)


def canonical(value: Any) -> str:
    """Return canonical JSON: sorted keys, no spaces, UTF-8 as it is, no NaN.

    Raises:
        ConfigError: the value cannot be written as JSON.
    """
    try:
        text = json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False, allow_nan=False)
        text.encode()
    except (TypeError, ValueError, RecursionError) as error:
        raise ConfigError(
            f"a value cannot be stored as JSON: {error}; use text, finite numbers, lists and maps"
        ) from error
    return text
