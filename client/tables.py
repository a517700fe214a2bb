"""What the command line shows as tables: distances, gate, inspection."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from itertools import groupby
from typing import TYPE_CHECKING, Any

from nearhand.service.bus.desk_messages import ReleaseReply

if TYPE_CHECKING:
    from rich.console import RenderableType

    from nearhand.service.envelope.budget import AxisBudget


def show(*parts: RenderableType) -> None:
    """Print tables and text to standard output."""
    from rich.console import Console

    console = Console()
    for part in parts:
        console.print(part)


def number(value: float | None) -> str:
    """Return a figure with three significant digits, or a dash."""
    return "–" if value is None else f"{value:.3g}"


def with_interval(figure: Mapping[str, Any] | None) -> str:
    """Return ``value [low, high]``."""
    if not figure:
        return "–"
    low, high = figure.get("low"), figure.get("high")
    span = f" [{number(low)}, {number(high)}]" if low is not None and high is not None else ""
    return f"{number(figure.get('value'))}{span}"


def distance_table(measurement: Mapping[str, Any], title: str) -> RenderableType:
    """Return the table of distances: version, expert's floor and clone side by side, with 95 % intervals.

    It fits eighty columns: figures stand under their family, intervals under their values.
    """
    from rich import box
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), title=title, title_justify="left")
    table.caption, table.caption_justify = "value and [95 % interval] over n episodes", "left"
    table.add_column("figure", min_width=16, overflow="fold")
    for name in ("this version", "expert's floor", "clone"):
        table.add_column(name, justify="right", no_wrap=True)
    figures: Mapping[str, Mapping[str, Any]] = measurement.get("figures", {})
    for family, names in groupby(figures, key=lambda name: name.partition(".")[0]):
        members = list(names)
        alone = members == [family]
        table.add_row(Text(f"{family.replace('_', ' ')}, {_counts(figures[name] for name in members)}", style="bold"))
        for name in members:
            figure = figures[name]
            sources = (figure, figure.get("floor"), figure.get("clone"))
            cells = (Text(with_interval(source).replace(" [", "\n[")) for source in sources)
            unit = f" ({figure['unit']})" if figure.get("unit") else ""
            words = "distance" if alone else name.removeprefix(f"{family}.").replace("_", " ")
            table.add_row(Text(f"· {words}{unit}"), *cells)
    return table


def paired_table(against: Mapping[str, Any], title: str) -> RenderableType:
    """Return the differences between two versions, paired by start state."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), title=title, title_justify="left")
    table.caption, table.caption_justify = "p: sign-flip test of no difference", "left"
    for name in ("figure", "difference", "won", "drawn", "lost", "p"):
        table.add_column(name, justify="left" if name == "figure" else "right")
    for name, row in against.get("figures", {}).items():
        words = name.removeprefix("closed_loop.").replace("_", " ")
        counts = (str(row[key]) for key in ("wins", "draws", "losses"))
        table.add_row(Text(words), Text(with_interval(row)), *counts, number(row["p_same"]))
    return table


def plan_table(bounds: Iterable[Mapping[str, Any]], title: str) -> RenderableType:
    """Return how many episodes each bound of the gate needs."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), title=title, title_justify="left")
    for name in ("figure", "bound", "value", "now", "needed"):
        table.add_column(name, justify="left" if name in ("figure", "bound") else "right")
    for row in bounds:
        needed = "never" if row["needed"] is None else str(row["needed"])
        table.add_row(Text(row["figure"]), row["bound"], number(row["value"]), str(row["now"]), needed)
    return table


def _counts(figures: Iterable[Mapping[str, Any]]) -> str:
    """Return over how many episodes the figures were taken: ``n = 12`` or ``n = 12–50``."""
    counts = sorted({int(figure["n"]) for figure in figures if figure.get("n") is not None})
    return f"n = {counts[0]}–{counts[-1]}" if len(counts) > 1 else f"n = {counts[0]}" if counts else "n = –"


def gate_table(reply: ReleaseReply) -> RenderableType:
    """Return the gate's verdict, bound by bound."""
    from rich.console import Group
    from rich.table import Table
    from rich.text import Text

    table = Table(title_justify="left")
    table.add_column("bound met")
    table.add_column("what was found")
    for bound in reply.bounds:
        table.add_row("yes" if bound.get("met") else "NO", str(bound.get("sentence", "")))
    verdict = f"version {reply.version} is in service" if reply.released else f"version {reply.version} was refused"
    return Group(Text(f"{verdict}. {reply.message}".strip()), table) if reply.bounds else Text(verdict)


def budget_table(budgets: Iterable[AxisBudget], title: str) -> RenderableType:
    """Return the envelope's budget: from the last good observation at full speed to standstill, term by term."""
    from rich import box
    from rich.table import Table

    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), title=title, title_justify="left")
    table.add_column("towards")
    for name in ("term", "s", "way", "speed left"):
        table.add_column(name, justify="left" if name == "term" else "right", no_wrap=name != "term")
    for budget in budgets:
        towards = f"{budget.axis} {budget.end}, limit {budget.limit:g} {budget.unit}"
        for term in budget.terms:
            table.add_row(towards, term.name, f"{term.seconds:.3f}", f"{term.travel:.3f}", f"{term.speed:.3f}")
            towards = ""
        table.add_row(
            "", f"in all, from {budget.full_speed:g}", f"{budget.seconds:.3f}", f"{budget.travel:.3f}", "", style="bold"
        )
        table.add_row("", f"full speed only up to {budget.brakes_from:.3g} {budget.unit}", "", "", "")
        table.add_row("", f"at most {budget.speed_at_range_end:.3g} at the range's end", "", "", "", end_section=True)
    return table


def inspection_tables(result: Mapping[str, Any], *, most: int | None = None) -> tuple[RenderableType, ...]:
    """Return what was found of the episodes (at most so many of them), and what to do about it."""
    from rich import box
    from rich.table import Table
    from rich.text import Text

    title = f"demonstrations of {result.get('rig', '?')}"
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), title=title, title_justify="left")
    for name in ("episode", "operator", "use", "outcome"):
        table.add_column(name, no_wrap=True)
    for name in ("s", "idle s", "sat.%", "gaps", "jit.%"):
        table.add_column(name, justify="right", no_wrap=True)
    rows = result.get("episodes", [])
    for row in rows[:most]:
        saturated = max(row.get("saturation", {}).values(), default=0.0)
        table.add_row(
            str(row.get("episode", ""))[-8:],
            str(row.get("operator", "")),
            str(row.get("split", "")),
            str(row.get("outcome", "")),
            f"{row.get('duration_s', 0.0):.1f}",
            f"{row.get('idle_start_s', 0.0):.1f} / {row.get('idle_end_s', 0.0):.1f}",
            f"{100 * saturated:.1f}",
            str(_count(row.get("gaps"))),
            "–" if row.get("jitter") is None else f"{100 * float(row['jitter']):.1f}",
        )
    if most is not None and len(rows) > most:
        table.caption, table.caption_justify = f"and {len(rows) - most} more", "left"
    return (table, *(Text(f"• {verdict['sentence']}") for verdict in result.get("verdicts", [])))


def _count(value: object) -> object:
    return len(value) if isinstance(value, list | tuple) else value
