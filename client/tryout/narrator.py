"""Tells what happens, step by step, and keeps the facts and the checks that were made."""

from __future__ import annotations

import contextlib
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from typing import TYPE_CHECKING, Any

from rich.console import Console

if TYPE_CHECKING:
    from rich.console import RenderableType

STEPS = 10
EPISODES_A_LINE = 4


class Narrator:
    """Prints headings, sentences and tables; with ``json`` all of it goes to standard error.

    Attributes:
        facts: what was found, by step.
        failed: the checks that did not hold.
    """

    def __init__(self, *, json: bool) -> None:
        self._console = Console(file=sys.stderr if json else sys.stdout)
        self._step = ""
        self._begin_s = time.monotonic()
        self.facts: dict[str, dict[str, Any]] = {}
        self.failed: list[str] = []
        self.checks = 0

    def step(self, number: int, name: str, title: str) -> None:
        """Begin a step."""
        self._step = name
        self.facts[name] = {}
        elapsed_s = time.monotonic() - self._begin_s
        self._console.print()
        self._console.print(f"[bold]{number} of {STEPS}[/]  {title}  [dim]({elapsed_s:.0f} s)[/]")

    def say(self, text: str) -> None:
        """Print a sentence."""
        self._console.print(f"   {text}", markup=False, highlight=False)

    def show(self, *parts: RenderableType) -> None:
        """Print tables."""
        for part in parts:
            self._console.print(part)

    def note(self, name: str, value: Any) -> None:
        """Keep a fact of the present step."""
        self.facts[self._step][name] = value

    def check(self, held: bool, claim: str) -> None:
        """Print whether a claim holds, and keep it if it does not."""
        self.checks += 1
        self._console.print(f"   {'ok ' if held else 'FAILED'}  {claim}", markup=False, highlight=False)
        if not held:
            self.failed.append(f"{self._step}: {claim}")

    @contextlib.contextmanager
    def bar(self, title: str, total: int) -> Iterator[Callable[[], None]]:
        """Show a progress bar with the time left, on standard error; yield a function that counts one more."""
        from rich.progress import (
            BarColumn,
            MofNCompleteColumn,
            Progress,
            TextColumn,
            TimeElapsedColumn,
            TimeRemainingColumn,
        )

        columns = (
            TextColumn("{task.description}", markup=False), BarColumn(bar_width=24), MofNCompleteColumn(),
            TimeElapsedColumn(), TimeRemainingColumn(),
        )  # fmt: skip
        with Progress(*columns, console=Console(stderr=True)) as progress:
            task = progress.add_task(title, total=total)
            yield lambda: progress.advance(task)

    def show_deliveries(self, title: str, rows: Sequence[dict[str, Any]]) -> None:
        """Print sent and acknowledged samples of each episode, several to a line."""
        from rich.table import Table

        table = Table(title=f"demonstrations by {title}: episode, acknowledged / sent", title_justify="left")
        for _ in range(EPISODES_A_LINE):
            table.add_column("", no_wrap=True)
        cells = [
            f"{str(row['episode'])[-8:]} {row['acknowledged']}/{row['sent']}{'' if row['state'] == 'closed' else ' !'}"
            for row in rows
        ]
        for start in range(0, len(cells), EPISODES_A_LINE):
            table.add_row(*cells[start : start + EPISODES_A_LINE])
        table.show_header = False
        self.show(table)
