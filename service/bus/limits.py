"""How much of everything a service takes: configurable, each with an error of its own."""

from __future__ import annotations

import tomllib
from pathlib import Path

from pydantic import Field, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Frozen, sentence

MAX_FRAME_BYTES = 8 * 1024 * 1024


class Limits(Frozen):
    """The limits of one service; what is left out has the value below.

    Attributes:
        frame_bytes: one message; ``wire.oversized``, or the connection is closed by the library.
        depth: maps and lists within each other; ``wire.depth``.
        text_bytes: one text; ``wire.malformed``.
        items: entries of one list or map; ``wire.malformed``.
        rigs: rigs that are known, and so sessions on the action lane, of which each rig has one; ``refused.rigs``.
        open_episodes: episodes that are open at a time; ``refused.open_episodes``.
        waiting_jobs: jobs that wait or run; ``refused.jobs``.
        stored_bytes: size of the database beyond which no new samples are taken; ``refused.storage``.
        requests_per_s: of one key, or of one connection where there are no keys, on the intake and desk lanes each,
            averaged over a second; ``refused.rate``.
    """

    frame_bytes: int = Field(default=MAX_FRAME_BYTES, ge=65_536, le=MAX_FRAME_BYTES)
    depth: int = Field(default=16, ge=4, le=100)
    text_bytes: int = Field(default=1_048_576, ge=4_096, le=MAX_FRAME_BYTES)
    items: int = Field(default=100_000, ge=300, le=1_000_000)
    rigs: int = Field(default=64, ge=1, le=10_000)
    open_episodes: int = Field(default=256, ge=1, le=100_000)
    waiting_jobs: int = Field(default=100, ge=1, le=10_000)
    stored_bytes: int = Field(default=200_000_000_000, ge=1_000_000)
    requests_per_s: float = Field(default=10_000.0, ge=1.0, le=1e6)


#: What applies where nobody has said anything, and for clients.
USUAL = Limits()


def read_limits(path: Path) -> Limits:
    """Read limits from a TOML file.

    Raises:
        ConfigError: the file cannot be read, or a limit is unknown or out of range; the message names it.
    """
    try:
        return Limits.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
    except ValidationError as error:
        raise ConfigError(f"{path}: {sentence(error)}", code="config.limits") from error
    except (OSError, ValueError, RecursionError) as error:
        raise ConfigError(f"cannot use the limits in {path}: {error}", code="config.limits") from error
