"""What the operator sees of the service on one terminal screen; drawing only."""

from __future__ import annotations

import math
import struct
from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from nearhand.service.bus.action_messages import reason_names
from nearhand.service.bus.desk_messages import JobReply
from nearhand.service.bus.feed_messages import Event
from nearhand.service.rigs import ActionChannel, Channel, Rig

if TYPE_CHECKING:
    from rich.console import RenderableType
    from rich.text import Text

WIDTH, HEIGHT = 80, 24
BAR = 30
MOST_EVENTS = 40
MODE_STYLES = {"armed": "bold green", "latched": "bold red", "empty": "bold yellow"}
#: A rig that was heard of within this time is shown in full.
LIVE_S = 2.0


@dataclass
class Scene:
    """Everything that is drawn.

    Attributes:
        rigs: descriptions by name.
        states: by rig, what the action server tells of it.
        jobs: those that run or wait, by number.
        events: the latest, oldest first.
        uptime_s: of the service, None before the first answer.
        action_server: whether it answers the keeper.
        silent_s: for how long the desk has not answered; 0 while it does.
        trouble: what the desk said instead of answering.
    """

    rigs: dict[str, Rig] = field(default_factory=dict)
    states: dict[str, Mapping[str, Any]] = field(default_factory=dict)
    jobs: dict[int, JobReply] = field(default_factory=dict)
    events: deque[Event] = field(default_factory=lambda: deque(maxlen=MOST_EVENTS))
    uptime_s: float | None = None
    action_server: bool = False
    silent_s: float = 0.0
    trouble: str = ""


def render(scene: Scene, *, width: int = WIDTH, height: int = HEIGHT) -> RenderableType:
    """Return the scene as at most ``height`` lines of at most ``width`` columns."""
    from rich.console import Group

    head = [_headline(scene)]
    jobs = [line for job in scene.jobs.values() for line in _job_lines(job)][:4]
    room = height - len(head) - len(jobs) - 1
    rigs = _rig_lines(scene, room - min(len(scene.events), max(3, room // 4)))
    events_room = max(0, room - len(rigs))
    events = [_event_line(event) for event in scene.events][-events_room:] if events_room else []
    lines = [*head, *rigs, *jobs, _rule("events", width), *events][:height]
    for line in lines:
        line.no_wrap, line.overflow = True, "ellipsis"
        line.truncate(width, overflow="ellipsis")
    return Group(*lines)


def _line(*parts: str | tuple[str, str]) -> Text:
    from rich.text import Text

    return Text.assemble(
        *((_clean(part), "") if isinstance(part, str) else (_clean(part[0]), part[1]) for part in parts)
    )


def _clean(text: str) -> str:
    """Return the text without anything that could move the cursor: it may come from anywhere."""
    return (
        text
        if text.isprintable()
        else "".join(sign if sign.isprintable() else "\N{REPLACEMENT CHARACTER}" for sign in text)
    )


def _rule(title: str, width: int) -> Text:
    return _line((f"── {title} " + "─" * max(0, width - len(title) - 4), "dim"))


def _clock(seconds: float) -> str:
    minutes, rest = divmod(int(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02}:{rest:02}"


def _headline(scene: Scene) -> Text:
    if scene.silent_s > 0:
        return _line(
            "service ",
            ("SILENT", "bold red"),
            f" for {scene.silent_s:.0f} s; what stands below is the last that it told",
        )
    if scene.trouble:
        return _line(("service in trouble: ", "bold red"), scene.trouble)
    if scene.uptime_s is None:
        return _line("waiting for the service …")
    server = ("answers", "green") if scene.action_server else ("SILENT", "bold red")
    return _line(f"service up {_clock(scene.uptime_s)}   action server ", server, "   Ctrl-C leaves")


def _rig_lines(scene: Scene, room: int) -> list[Text]:
    """Return what fits: the rig heard of last with its channels, the others as one line each."""
    names = sorted(scene.states, key=lambda name: (_age_s(scene.states[name]), name))
    if not names:
        return [_line(("no rig is known yet", "dim"))]
    lines: list[Text] = []
    for place, name in enumerate(names):
        state = scene.states[name]
        lines.append(_rig_line(name, state))
        if place == 0 and _age_s(state) <= LIVE_S:
            spare = max(0, room - len(names) - 1)
            lines.append(_measure_line(state))
            if name in scene.rigs:
                lines.extend(_channel_lines(scene.rigs[name], state, spare))
    return lines[: max(1, room)]


def _age_s(state: Mapping[str, Any]) -> float:
    age_s = state.get("age_s")
    return float(age_s) if isinstance(age_s, int | float) and math.isfinite(age_s) and age_s >= 0 else math.inf


def _rig_line(name: str, state: Mapping[str, Any]) -> Text:
    mode = str(state.get("mode", "")) or "unknown"
    version = int(state.get("version") or state.get("in_service") or 0)
    age_s = _age_s(state)
    if age_s <= LIVE_S:
        heard = f"{float(state.get('rate_hz') or 0.0):.1f} queries/s"
    else:
        heard = "never asked" if math.isinf(age_s) else f"last asked {_clock(age_s)} ago"
    what = f"version {version}" if version else "no version"
    reasons = ", ".join(reason_names(int(state.get("reasons") or 0)))
    return _line(
        (f"{name}  ", "bold"), (mode.upper(), MODE_STYLES.get(mode, "bold")), f"  {what}  {heard}  ",
        (reasons, "yellow"),
    )  # fmt: skip


def _measure_line(state: Mapping[str, Any]) -> Text:
    novelty = state.get("novelty")
    known = isinstance(novelty, int | float) and 0 <= novelty <= 1
    p_value = float(novelty) if known else 1.0  # type: ignore[arg-type]
    style = "bold red" if p_value <= 0.05 else "yellow" if p_value <= 0.2 else ""
    shown = f"p {p_value:.3f} " if known else "p – "
    filled = round(10 * p_value)
    return _line(
        "  novelty ", (shown + "█" * filled + "░" * (10 - filled), style),
        f"   interventions {_total(state.get('interventions'))} of {_total(state.get('queries'))}"
        f"   trips {_total(state.get('trips'))}",
    )  # fmt: skip


def _total(value: Any) -> int:
    if isinstance(value, Mapping):
        return sum(_total(part) for part in value.values())
    return int(value) if isinstance(value, int | float) and math.isfinite(value) else 0


def numbers(value: Any) -> list[float]:
    """Return a vector as told by the service: float32 bytes, or a sequence of numbers."""
    if isinstance(value, bytes) and len(value) % 4 == 0:
        return list(struct.unpack(f"<{len(value) // 4}f", value))
    if isinstance(value, Sequence) and not isinstance(value, str | bytes):
        return [float(one) for one in value if isinstance(one, int | float)]
    return []


def _channel_lines(rig: Rig, state: Mapping[str, Any], room: int) -> list[Text]:
    """Return one line per channel with its place between the limits; actions first where room is short."""
    observations = list(zip(rig.observations, numbers(state.get("observation")), strict=False))
    actions = list(zip(rig.actions, numbers(state.get("action")), strict=False))
    kept = max(0, room - len(actions))
    left_out = max(0, len(observations) - kept)
    if left_out:
        kept = max(0, kept - 1)
    lines = [_channel_line(channel, value, "cyan") for channel, value in observations[:kept]]
    if left_out:
        lines.append(_line((f"  … and {len(observations) - kept} more observations", "dim")))
    lines.extend(_channel_line(channel, value, "magenta") for channel, value in actions)
    return lines[:room]


def _channel_line(channel: Channel, value: float, style: str) -> Text:
    name = channel.name if len(channel.name) <= 22 else channel.name[:21] + "…"
    shown = f"{value:>10.3f}" if abs(value) < 1e5 else f"{value:>10.3g}"
    inside = channel.low <= value <= channel.high
    bar = list("·" * BAR)
    if isinstance(channel, ActionChannel):
        bar[_place(channel, channel.rest)] = "|"
    bar[_place(channel, value)] = "●"
    return _line(
        f"  {name:<22}", (shown, "" if inside else "bold red"), f" {channel.unit[:8]:<8} ", "[",
        ("".join(bar), style if inside else "bold red"), "]",
    )  # fmt: skip


def _place(channel: Channel, value: float) -> int:
    if math.isnan(value):
        return 0
    part = (min(max(value, channel.low), channel.high) - channel.low) / (channel.high - channel.low)
    return round((BAR - 1) * part)


def _job_lines(job: JobReply) -> list[Text]:
    title = f"job {job.job}  {job.job_kind} {job.rig}  {job.stage or job.state}  "
    if job.state != "running":
        return [_line((title, "bold"))]
    fraction = min(max(job.fraction, 0.0), 1.0)
    filled = round(16 * fraction)
    left = "" if job.eta_s is None else f"  {_clock(job.eta_s)} left"
    lines = [_line((title, "bold"), ("█" * filled, "blue"), ("░" * (16 - filled), "dim"), f" {fraction:4.0%}{left}")]
    if job.figures:
        told = "  ".join(f"{name} {value:.3g}" for name, value in list(job.figures.items())[:4])
        lines.append(_line((f"  {told}", "dim")))
    return lines


def _event_line(event: Event) -> Text:
    moment = event.utc[11:19] if len(event.utc) >= 19 else event.utc
    style = "bold red" if event.what in ("trip", "latched") else ""
    who = f"  by {event.who}" if event.who else ""
    why = f": {event.why}" if event.why else ""
    return _line((f"{moment} ", "dim"), (f"{event.what:<16}", style), f" {event.rig}{who}{why}")
