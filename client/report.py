"""The evidence for a version as one page: self-contained, printable, every name escaped."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Mapping, Sequence
from importlib import resources
from importlib.metadata import version as software_version
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from nearhand.client import plots
from nearhand.client.desk import Desk
from nearhand.client.tables import with_interval
from nearhand.service.bus.desk_messages import (
    EpisodesReply,
    EventsReply,
    GetHealth,
    GetJob,
    GetRig,
    GetVersion,
    HealthReply,
    JobReply,
    JobsReply,
    ListEpisodes,
    ListEvents,
    ListJobs,
    RigReply,
    VerifyEvents,
    VerifyReply,
    VersionReply,
)
from nearhand.service.bus.shadow_messages import GetShadow, ShadowReply
from nearhand.service.clock import utc_now
from nearhand.service.envelope.budget import budgets, unbraked
from nearhand.service.errors import ConfigError, NearhandError, StoreError, UnknownNameError
from nearhand.service.rigs import Rig

MOST_EVENTS = 60
MOST_PROVENANCE = 400
#: Events that happen all the time and decide nothing.
EVERYDAY = ("session", "loaded", "job-queued", "job-started", "job-done")
#: Figures that are distances or rates, for the picture; the rest stand in the table.
PICTURED = (
    "action_error.rmse_fraction", "feature_distance.l2", "feature_distance.l1", "feature_distance.linf", "mmd2",
    "energy_distance", "closed_loop.score", "closed_loop.success", "closed_loop.time_s",
    "closed_loop.interventions_per_minute",
)  # fmt: skip
Table = Mapping[str, Any]


def write_report(desk: Desk, version: int, path: Path) -> None:
    """Ask the service for all that stands behind a version and write the page.

    Raises:
        ConfigError: a package for drawing is missing.
        StoreError: the file cannot be written.
        NearhandError: the service has no such version, or does not answer.
    """
    page = render(gather(desk, version))
    try:
        path.write_text(page, encoding="utf-8")
    except OSError as error:
        raise StoreError(f"cannot write {path}: {error}; give another file with -o") from error


def gather(desk: Desk, version: int) -> dict[str, Any]:
    """Return everything that the page shows, from the service."""
    found = desk.ask(GetVersion, VersionReply, version=version)
    rig = found.rig
    health = desk.ask(GetHealth, HealthReply).rigs.get(rig)
    events = all_events(desk, rig)
    return {
        "version": found.model_dump(exclude={"v", "kind", "request", "policy"}),
        "rig": desk.ask(GetRig, RigReply, rig=rig).description,
        "episodes": list(desk.ask(ListEpisodes, EpisodesReply, rig=rig).episodes),
        "events": events,
        "chain": desk.ask(VerifyEvents, VerifyReply).model_dump(exclude={"v", "kind", "request"}),
        "health": health,
        "learning": _job_result(desk, found.provenance.get("job")),
        "inspection": _last_inspection(desk, rig),
        "shadow": _shadow(desk, rig, version),
    }


def all_events(desk: Desk, rig: str) -> list[dict[str, Any]]:
    """Return all events of a rig, oldest first."""
    events: list[dict[str, Any]] = []
    after = 0
    while page := desk.ask(ListEvents, EventsReply, rig=rig, after=after, limit=500).events:
        events.extend(page)
        after = int(page[-1]["event"])
    return events


def _shadow(desk: Desk, rig: str, version: int) -> dict[str, Any]:
    try:
        return desk.ask(GetShadow, ShadowReply, rig=rig, version=version).model_dump()
    except UnknownNameError:
        return {}


def folded(events: Sequence[Table]) -> list[dict[str, Any]]:
    """Return events with runs of the everyday ones (sessions, jobs, loads) each told in one line."""
    rows: list[dict[str, Any]] = []
    for event in events:
        what = str(event["what"])
        if what not in EVERYDAY:
            rows.append(dict(event))
            continue
        if not rows or "counts" not in rows[-1]:
            rows.append({**event, "who": "", "counts": Counter()})
        rows[-1]["counts"][what] += 1
    for row in rows:
        if "counts" in row:
            row["what"] = ", ".join(f"{number} {what}" for what, number in row["counts"].items())
            row["why"] = "from here on, until the next line"
    return rows


def _job_result(desk: Desk, job: object) -> dict[str, Any]:
    if not isinstance(job, int):
        return {}
    try:
        return desk.ask(GetJob, JobReply, job=job).result or {}
    except NearhandError:
        return {}


def _last_inspection(desk: Desk, rig: str) -> list[str]:
    jobs = desk.ask(ListJobs, JobsReply, rig=rig).jobs
    done = [int(row["job"]) for row in jobs if row.get("kind") == "inspect" and row.get("state") == "done"]
    result = _job_result(desk, max(done)) if done else {}
    return [str(verdict["sentence"]) for verdict in result.get("verdicts", [])]


def render(facts: Mapping[str, Any]) -> str:
    """Return the page's HTML."""
    try:
        import jinja2
    except ImportError as error:
        raise ConfigError(f"the report needs Jinja2 ({error}); pip install 'nearhand[operator]'") from error
    environment = jinja2.Environment(autoescape=True, undefined=jinja2.StrictUndefined)
    environment.filters["interval"] = with_interval
    text = resources.files("nearhand.client").joinpath("report.html.j2").read_text(encoding="utf-8")
    version = facts["version"]
    measurement = version.get("measurement") or {}
    learning = facts["learning"]
    pictures, alt = draw(measurement, learning.get("curves") or {})
    chain = facts["chain"]
    try:
        rig: Rig | None = Rig.model_validate(facts["rig"])
    except ValidationError:
        rig = None
    return environment.from_string(text).render(
        version=version,
        rig=facts["rig"],
        operators=_by_operator(facts["episodes"]),
        inspection=facts["inspection"],
        figures={
            name: {"floor": None, "clone": None, **row} for name, row in (measurement.get("figures") or {}).items()
        },
        notes=measurement.get("notes") or [],
        bounds=_bounds(facts["events"], int(version["version"])),
        pictures=pictures,
        alt=alt,
        chosen=_chosen(learning.get("chosen")),
        health=facts["health"],
        events=folded(facts["events"])[-MOST_EVENTS:],
        budget=budgets(rig) if rig is not None else (),
        unbraked=unbraked(rig) if rig is not None else (),
        truncation=measurement.get("truncation_bound") or {},
        against=measurement.get("against"),
        shadow=facts.get("shadow") or {},
        chain=f"{chain['events']} events; hash chain {'intact' if chain['intact'] else 'BROKEN: ' + chain['message']}.",
        provenance=_provenance(version),
        written_utc=utc_now(),
        software=software_version("nearhand"),
    )


def draw(measurement: Table, curves: Mapping[str, Sequence[float | None]]) -> tuple[dict[str, str], dict[str, str]]:
    """Return the pictures by name, and for each the words that stand for it."""
    pictures = {"distances": "", "traces": "", "phase": "", "curves": ""}
    alt = dict(pictures)
    figures = measurement.get("figures") or {}
    shown = [name for name in PICTURED if figures.get(name, {}).get("value") is not None]
    if shown:
        pictures["distances"] = plots.distances(figures, shown)
        alt["distances"] = (
            "Figures of this version, the expert's floor and the clone; the numbers stand in the table below."
        )
    traces = measurement.get("traces") or {}
    if traces:
        pictures["traces"] = plots.traces(traces)
        alt["traces"] = (
            f"Expert (solid) and policy (dashed) from the same start, the episode of median difference; "
            f"they differ most at {traces['differ_most_at_s']:.2f} s (vertical line)."
        )
        if len(traces["observations"]) > 3:
            pictures["phase"] = plots.phase(traces, 2, 3)
            names = [one["name"] for one in traces["observations"]]
            alt["phase"] = f"Phase plot: {names[3]} against {names[2]}, expert (solid) and policy (dashed)."
    drawn = [name for name, values in curves.items() if sum(value is not None for value in values) > 1][:12]
    if drawn:
        pictures["curves"] = plots.curves(curves, drawn)
        alt["curves"] = f"Diagnostics by iteration: {', '.join(name.replace('_', ' ') for name in drawn)}."
    return pictures, alt


def _by_operator(episodes: Sequence[Table]) -> list[dict[str, Any]]:
    rows: dict[str, Counter[str]] = {}
    for episode in episodes:
        if episode.get("state") != "closed":
            continue
        row = rows.setdefault(str(episode["operator"]), Counter())
        row["episodes"] += 1
        row["samples"] += int(episode["samples"])
        row["successes"] += episode.get("outcome") == "success"
        row[str(episode.get("split"))] += 1
    return [
        {
            "operator": name, "episodes": row["episodes"], "samples": row["samples"], "successes": row["successes"],
            "train": row["train"], "held_out": row["held-out"], "calibration": row["calibration"],
        }
        for name, row in rows.items()
    ]  # fmt: skip


def _bounds(events: Sequence[Table], version: int) -> list[dict[str, Any]]:
    """Return the gate's latest verdict on a version, from the event record."""
    for event in reversed(events):
        detail = event.get("detail") or {}
        if detail.get("version") == version and detail.get("bounds"):
            return list(detail["bounds"])
    return []


def _chosen(chosen: object) -> str:
    if isinstance(chosen, Mapping):
        return f"{chosen.get('name', '')}: {chosen.get('reason', '')}"
    return str(chosen) if chosen else ""


def _provenance(version: Table) -> list[tuple[str, str]]:
    rows = [("SHA-256 of the policy file", str(version["sha256"]))]
    for name, value in sorted(version["provenance"].items()):
        text = value if isinstance(value, str) else json.dumps(value, sort_keys=True)
        rows.append((name, text if len(text) <= MOST_PROVENANCE else f"{text[:MOST_PROVENANCE]} …"))
    return rows
