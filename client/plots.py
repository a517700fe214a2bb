"""Pictures for the report: inline SVG, readable in print and by the colour-blind, each with words beside it.

Colours are Okabe and Ito's palette (2008), distinguishable with any common colour vision; lines also differ in style.
"""

from __future__ import annotations

import io
import re
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from nearhand.service.errors import ConfigError

if TYPE_CHECKING:
    from matplotlib.figure import Figure

EXPERT = "#0072B2"
POLICY = "#D55E00"
CLONE = "#009E73"
FLOOR = "#999999"
#: What stands side by side in the picture of distances: label, colour, marker.
SERIES = (("this version", POLICY, "o"), ("expert's floor", FLOOR, "s"), ("clone", CLONE, "D"))


def _figure(width: float, height: float, rows: int = 1, columns: int = 1) -> tuple[Figure, Any]:
    try:
        import matplotlib as mpl
        from matplotlib.figure import Figure
    except ImportError as error:
        raise ConfigError(f"the report needs matplotlib ({error}); pip install 'nearhand[operator]'") from error
    mpl.rcParams.update({"svg.fonttype": "none", "svg.hashsalt": "nearhand", "font.size": 9, "axes.grid": True})
    mpl.rcParams.update({"grid.color": "#dddddd", "axes.axisbelow": True, "font.family": "sans-serif"})
    made = Figure(figsize=(width, height), layout="constrained")
    return made, made.subplots(rows, columns, squeeze=False)


def _svg(made: Figure) -> str:
    stream = io.StringIO()
    made.savefig(stream, format="svg", metadata={"Date": None})
    text = stream.getvalue()
    text = text[text.index("<svg") :]
    # The page gives the picture its width and its words; links to outside vocabularies are of no use in it.
    return re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)


def traces(found: Mapping[str, Any]) -> str:
    """Return expert and policy over time, a panel per channel."""
    channels = [("observations", index, one) for index, one in enumerate(found["observations"])]
    channels += [("actions", index, one) for index, one in enumerate(found["actions"])]
    made, axes = _figure(7.6, 1.25 * len(channels), len(channels))
    for axis, (group, index, channel) in zip(axes[:, 0], channels, strict=True):
        for name, colour, style in (("expert", EXPERT, "-"), ("policy", POLICY, "--")):
            trace = found[name]
            axis.plot(trace["times_s"], [row[index] for row in trace[group]], style, color=colour, lw=1.3, label=name)
        axis.axvline(found["differ_most_at_s"], color=FLOOR, lw=0.8)
        axis.set_ylabel(f"{channel['name'].replace('-', chr(10))}\n{channel['unit']}", fontsize=7)
        axis.sharex(axes[0, 0])
    axes[0, 0].legend(loc="upper right", ncols=2, fontsize=8)
    axes[-1, 0].set_xlabel("time, s")
    return _svg(made)


def phase(found: Mapping[str, Any], first: int, second: int) -> str:
    """Return one observation channel against another, expert and policy."""
    made, axes = _figure(4.2, 3.2)
    for name, colour, style in (("expert", EXPERT, "-"), ("policy", POLICY, "--")):
        rows = found[name]["observations"]
        axes[0, 0].plot([r[first] for r in rows], [r[second] for r in rows], style, color=colour, lw=1.2, label=name)
    for setter, index in ((axes[0, 0].set_xlabel, first), (axes[0, 0].set_ylabel, second)):
        channel = found["observations"][index]
        setter(f"{channel['name']}, {channel['unit']}")
    axes[0, 0].legend(fontsize=8)
    return _svg(made)


def curves(found: Mapping[str, Sequence[float | None]], names: Sequence[str]) -> str:
    """Return learning curves, a small panel each."""
    columns = 3
    rows = -(-len(names) // columns)
    made, axes = _figure(7.6, 1.6 * rows, rows, columns)
    for axis, name in zip(axes.flat, names, strict=False):
        values = [float("nan") if value is None else value for value in found[name]]
        axis.plot(range(1, len(values) + 1), values, "-", color=EXPERT, lw=1.2)
        axis.set_title(name.replace("_", " "), fontsize=8)
    for axis in list(axes.flat)[len(names) :]:
        axis.set_visible(False)
    return _svg(made)


def distances(figures: Mapping[str, Mapping[str, Any]], names: Sequence[str]) -> str:
    """Return the figures with their intervals, floor and clone beside them, each in units of its own largest value."""
    made, axes = _figure(7.6, 0.42 * len(names) + 0.8)
    axis = axes[0, 0]
    for row, name in enumerate(names):
        beside: list[Mapping[str, Any] | None] = [figures[name], figures[name].get("floor"), figures[name].get("clone")]
        unit = max((abs(end) for one in beside for end in _ends(one)), default=0.0) or 1.0
        for one, offset, (_, colour, marker) in zip(beside, (-0.22, 0.0, 0.22), SERIES, strict=True):
            ends = _ends(one)
            if one is None or not ends:
                continue
            axis.plot([min(ends) / unit, max(ends) / unit], [row + offset] * 2, "-", color=colour, lw=1.6)
            axis.plot(one["value"] / unit, row + offset, marker, color=colour, ms=4.5)
    axis.set_yticks(range(len(names)), names, fontsize=8)
    axis.set_ylim(len(names) - 0.5, -0.6)
    axis.set_xlabel("each figure in units of the largest value in its row; bars are 95 % intervals")
    for label, colour, marker in SERIES:
        axis.plot([], [], marker, color=colour, ms=4.5, label=label)
    made.legend(fontsize=8, loc="outside upper center", ncols=3, frameon=False)
    return _svg(made)


def _ends(figure: Mapping[str, Any] | None) -> list[float]:
    """Return value and interval ends as far as they are known; none without a value."""
    if not figure or figure.get("value") is None:
        return []
    return [float(figure[end]) for end in ("value", "low", "high") if figure.get(end) is not None]
