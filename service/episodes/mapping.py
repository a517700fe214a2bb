"""How a table of another origin names and measures things: a TOML file that renames columns and converts units.

::

    [columns.position]
    from = "Trolley X"
    factor = 0.001      # millimetres to metres
    offset = 0.0

A value becomes ``factor · value + offset``. What the file does not name keeps its own name and unit.
"""

from __future__ import annotations

import tomllib
from pathlib import Path

from pydantic import BaseModel, ConfigDict, Field, FiniteFloat, ValidationError

from nearhand.service.errors import ConfigError
from nearhand.service.rigs import sentence


class Column(BaseModel):
    """One column: its title in the file, and its conversion."""

    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=True)

    title: str = Field(alias="from", min_length=1)
    factor: FiniteFloat = 1.0
    offset: FiniteFloat = 0.0

    def convert(self, value: float) -> float:
        """Return a value in the rig's unit."""
        return self.factor * value + self.offset


class TableMap(BaseModel):
    """Column name of ours (a channel, ``episode``, ``t_s`` …) → column of the file."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    columns: dict[str, Column] = Field(default_factory=dict)


def read_map(path: Path) -> TableMap:
    """Return the mapping in a TOML file.

    Raises:
        ConfigError: it cannot be read, or says something unknown.
    """
    try:
        return TableMap.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
    except ValidationError as error:
        raise ConfigError(f"mapping {path}: {sentence(error)}", code="config.map") from error
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise ConfigError(f"cannot read the mapping {path}: {error}", code="config.map") from error
