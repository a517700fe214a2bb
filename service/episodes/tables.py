"""Episodes as CSV: one row per sample, and a last row per episode with the observation that ended it.

Columns: ``episode``, ``t_s``, one per observation and action channel, by name or as ``name [unit]``; ``operator`` and
``outcome`` may be there; others are passed over. Comma, semicolon or tab separates; the decimal sign is a point.
"""

from __future__ import annotations

import csv
import io
import math
from array import array
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import get_args

import numpy as np

from nearhand.service.bus.intake_messages import Outcome
from nearhand.service.episodes.episode import Episode
from nearhand.service.episodes.mapping import TableMap
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import Channel, Rig

EPISODE, TIME, OPERATOR, OUTCOME = "episode", "t_s", "operator", "outcome"
SEPARATORS = ",;\t"
NO_MAP = TableMap()
#: From here on a number rounds to infinity in float32 (IEEE 754).
FLOAT32_BEYOND = (2 - 2.0**-24) * 2.0**127


@dataclass(slots=True)
class _Rows:
    """What has been read of one episode; ``lines`` are line numbers."""

    operator: str
    outcome: str
    times: array[float] = field(default_factory=lambda: array("d"))
    observations: array[float] = field(default_factory=lambda: array("f"))
    actions: array[float] = field(default_factory=lambda: array("f"))
    has_ended: bool = False
    line: int = 0


class _Table:
    """A CSV text being read, with its columns found."""

    def __init__(self, lines: Iterable[str], rig: Rig, origin: str, mapping: TableMap) -> None:
        self._origin = origin
        self._mapped = mapping.columns
        self._rig = rig
        source = iter(lines)
        first = next(source, "")
        separator = next((sign for sign in SEPARATORS if sign in first), ",")
        self._reader = csv.reader(_chained(first, source), delimiter=separator, strict=True)
        try:
            header = [cell.strip() for cell in next(self._reader, [])]
        except csv.Error as error:
            raise self._wrong(1, f"is no CSV: {error}") from error
        self._columns = self._find(header)
        self._width = len(header)

    def _wrong(self, line: int, what: str) -> ConfigError:
        return ConfigError(f"{self._origin}, line {line}: {what}; nothing was imported", code="config.csv")

    def _find(self, header: Sequence[str]) -> dict[str, int]:
        """Return the place of each wanted column by name, units checked."""
        units = {channel.name: channel.unit for channel in (*self._rig.observations, *self._rig.actions)}
        wanted = {*units, EPISODE, TIME, OPERATOR, OUTCOME}
        unknown = [name for name in self._mapped if name not in wanted]
        if unknown:
            raise ConfigError(
                f"the mapping names {', '.join(unknown)}; rig {self._rig.name} has the columns {', '.join(wanted)}",
                code="config.map",
            )
        titles = {column.title: name for name, column in self._mapped.items()}
        found: dict[str, int] = {}
        for place, cell in enumerate(header):
            if cell in titles:
                if titles[cell] in found:
                    raise self._wrong(1, f"column {cell!r} is there twice")
                found[titles[cell]] = place
                continue
            name, bracket, rest = cell.partition("[")
            name = name.strip()
            if name not in wanted or name in self._mapped:
                continue
            if name in found:
                raise self._wrong(1, f"column {name!r} is there twice")
            unit = rest.rstrip("] ").strip()
            if bracket and name in units and unit != units[name]:
                raise self._wrong(
                    1, f"column {name!r} is in {unit!r}; rig {self._rig.name} has {units[name]!r}. Convert it first"
                )
            found[name] = place
        missing = [name for name in (EPISODE, TIME, *units) if name not in found]
        if missing:
            raise self._wrong(
                1, f"columns {', '.join(missing)} are missing; expected {EPISODE}, {TIME} and one per channel"
            )
        return found

    def rows(self) -> Iterator[tuple[int, list[str]]]:
        """Yield line number and cells of each row that is not empty."""
        while True:
            try:
                cells = next(self._reader)
            except StopIteration:
                return
            except csv.Error as error:
                raise self._wrong(self._reader.line_num, f"is no CSV: {error}") from error
            if any(cell.strip() for cell in cells):
                line = self._reader.line_num
                if len(cells) != self._width:
                    raise self._wrong(line, f"has {len(cells)} cells; the header has {self._width}")
                yield line, cells

    def text(self, cells: Sequence[str], name: str, default: str) -> str:
        """Return a text cell, or the default where there is no such column or it is empty."""
        return (cells[self._columns[name]].strip() if name in self._columns else "") or default

    def number(self, line: int, cells: Sequence[str], name: str, *, below: float = math.inf) -> float:
        """Return a finite number."""
        cell = cells[self._columns[name]].strip()
        try:
            value = float(cell)
        except ValueError:
            value = math.nan
        if name in self._mapped:
            value = self._mapped[name].convert(value)
        if not math.isfinite(value) or abs(value) >= below:
            raise self._wrong(line, f"column {name!r} holds {cell!r}; expected a finite number")
        return value

    def read(self) -> list[Episode]:
        """Return all episodes, in order of first appearance."""
        found: dict[str, _Rows] = {}
        for line, cells in self.rows():
            name = self.text(cells, EPISODE, "")
            if not name:
                raise self._wrong(line, f"column {EPISODE!r} is empty")
            rows = found.get(name)
            if rows is None:
                rows = found[name] = _Rows(self.text(cells, OPERATOR, "imported"), self._outcome(line, cells))
            self._add(line, cells, name, rows)
        if not found:
            raise ConfigError(f"{self._origin} holds no rows; nothing was imported", code="config.csv")
        return [self._episode(name, rows) for name, rows in found.items()]

    def _outcome(self, line: int, cells: Sequence[str]) -> str:
        outcome = self.text(cells, OUTCOME, "unknown")
        if outcome not in get_args(Outcome):
            raise self._wrong(line, f"column {OUTCOME!r} holds {outcome!r}; expected {', '.join(get_args(Outcome))}")
        return outcome

    def _add(self, line: int, cells: Sequence[str], name: str, rows: _Rows) -> None:
        if rows.has_ended:
            raise self._wrong(
                line, f"episode {name!r} goes on after a row without actions (line {rows.line}), which ends an episode"
            )
        time_s = self.number(line, cells, TIME)
        if rows.times and time_s <= rows.times[-1]:
            raise self._wrong(
                line, f"column {TIME!r} holds {time_s!r}, not later than {rows.times[-1]!r} in line {rows.line}"
            )
        rows.times.append(time_s)
        for channel in self._rig.observations:
            rows.observations.append(self.number(line, cells, channel.name, below=FLOAT32_BEYOND))
        names = [channel.name for channel in self._rig.actions]
        rows.has_ended = not any(self.text(cells, channel, "") for channel in names)
        if not rows.has_ended:
            rows.actions.extend(self.number(line, cells, channel, below=FLOAT32_BEYOND) for channel in names)
        rows.line = line

    def _episode(self, name: str, rows: _Rows) -> Episode:
        length = len(rows.times) - 1
        if length < 1:
            raise self._wrong(rows.line, f"episode {name!r} has one row; expected at least two, the last one its end")
        return Episode(
            episode=name,
            rig=self._rig.name,
            operator=rows.operator,
            times_s=np.array(rows.times, dtype=np.float64)[:length],
            observations=np.array(rows.observations, dtype=np.float32).reshape(length + 1, -1),
            actions=np.array(rows.actions, dtype=np.float32).reshape(-1, len(self._rig.actions))[:length],
            outcome=rows.outcome,
        )


def _chained(first: str, rest: Iterator[str]) -> Iterator[str]:
    yield first
    yield from rest


def parse_csv(text: Iterable[str], rig: Rig, *, origin: str = "the table", mapping: TableMap = NO_MAP) -> list[Episode]:
    """Return the episodes in CSV lines.

    The last row of each episode supplies the observation after its last action; its action cells may be empty.

    Raises:
        ConfigError: a column or row cannot be used; the message names line and column.
    """
    return _Table(text, rig, origin, mapping).read()


def read_csv(path: Path, rig: Rig, mapping: TableMap = NO_MAP) -> list[Episode]:
    """Return the episodes in a CSV file, all or none.

    Raises:
        ConfigError: the file cannot be read, or a row cannot be used; the message names line and column.
    """
    try:
        with path.open(encoding="utf-8-sig", newline="") as stream:
            return parse_csv(stream, rig, origin=str(path), mapping=mapping)
    except (OSError, UnicodeDecodeError) as error:
        raise ConfigError(f"cannot read {path}: {error}; expected a CSV file in UTF-8", code="config.csv") from error


def csv_text(rig: Rig, episodes: Sequence[Episode]) -> str:
    """Return episodes as CSV that reads back bit for bit, units in the header.

    Raises:
        ConfigError: an episode is not of this rig's channels.
    """
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([EPISODE, OPERATOR, OUTCOME, TIME, *map(_title, (*rig.observations, *rig.actions))])
    for episode in episodes:
        if (episode.observations.shape[1], episode.actions.shape[1]) != (len(rig.observations), len(rig.actions)):
            raise ConfigError(f"episode {episode.episode} has other channels than rig {rig.name}")
        ended_s = float(episode.times_s[-1]) + rig.timing.period_s if episode.length else 0.0
        times = [*map(float, episode.times_s), ended_s]
        empty = [""] * len(rig.actions)
        for row, time_s in enumerate(times):
            actions = empty if row == episode.length else [str(value) for value in episode.actions[row]]
            observations = [str(value) for value in episode.observations[row]]
            writer.writerow([episode.episode, episode.operator, episode.outcome, repr(time_s), *observations, *actions])
    return stream.getvalue()


def _title(channel: Channel) -> str:
    return f"{channel.name} [{channel.unit}]"
