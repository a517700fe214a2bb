"""Health and counters as OpenMetrics text, for whatever collects figures on a machine.

Source: OpenMetrics 1.0 specification, "ABNF" and "Overall structure": families with TYPE, UNIT and HELP, samples with
escaped label values, counters that end in ``_total``, ``# EOF`` at the end.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from nearhand.service.bus.desk_messages import HealthReply

CONTENT_TYPE = "application/openmetrics-text; version=1.0.0; charset=utf-8"
MODES = ("armed", "latched", "empty")

#: Field of a rig's state → family, kind, unit, help.
RIG_FIELDS: dict[str, tuple[str, str, str, str]] = {
    "queries": ("nearhand_rig_queries", "counter", "", "Observations answered since the action server's start."),
    "interventions": ("nearhand_rig_interventions", "counter", "", "Actions that the envelope changed."),
    "trips": ("nearhand_rig_trips", "counter", "", "Times that the envelope latched."),
    "version": ("nearhand_rig_version", "gauge", "", "Version that acts, 0 for none."),
    "in_service": ("nearhand_rig_in_service", "gauge", "", "Version in service by the registry, 0 for none."),
    "novelty": ("nearhand_rig_novelty", "gauge", "", "Conformal p-value of the latest observation."),
    "age_s": ("nearhand_rig_age_seconds", "gauge", "seconds", "Time since the latest observation, -1 before any."),
    "rate_hz": ("nearhand_rig_rate_hertz", "gauge", "hertz", "Observations per second."),
}


def open_metrics(health: HealthReply) -> str:
    """Return the whole exposition, its last line ``# EOF``."""
    server = health.action_server
    lines: list[str] = []
    _family(
        lines, "nearhand_uptime_seconds", "gauge", "seconds", "Time since the keeper's start.",
        [({}, health.uptime_s)],
    )  # fmt: skip
    _family(
        lines, "nearhand_action_server_up", "gauge", "", "Whether the action server answers the keeper.",
        [({}, float(bool(server.get("reachable"))))],
    )  # fmt: skip
    for family, counters, text in (
        ("nearhand_keeper_events", health.counters, "What the keeper has counted since its start, by name."),
        ("nearhand_action_server_events", server.get("counters") or {}, "What the action server has counted, by name."),
    ):
        _family(lines, family, "counter", "", text, [({"name": name}, counters[name]) for name in sorted(counters)])
    rigs = sorted(health.rigs.items())
    modes = [({"rig": rig, "nearhand_rig_mode": mode}, float(state.get("mode") == mode)) for rig, state in rigs
             for mode in MODES]  # fmt: skip
    _family(lines, "nearhand_rig_mode", "stateset", "", "armed: the policy acts; else the fallback does.", modes)
    for field, (name, kind, unit, text) in RIG_FIELDS.items():
        samples = [({"rig": rig}, state[field]) for rig, state in rigs if field in state]
        _family(lines, name, kind, unit, text, samples)
    return "\n".join([*lines, "# EOF", ""])


def _family(
    lines: list[str], name: str, kind: str, unit: str, text: str, samples: Sequence[tuple[Mapping[str, str], Any]]
) -> None:
    if not samples:
        return
    lines.append(f"# TYPE {name} {kind}")
    if unit:
        lines.append(f"# UNIT {name} {unit}")
    lines.append(f"# HELP {name} {_escaped(text)}")
    for labels, value in samples:
        inside = ",".join(f'{label}="{_escaped(content)}"' for label, content in labels.items())
        suffix = "_total" if kind == "counter" else ""
        lines.append(f"{name}{suffix}{'{' + inside + '}' if inside else ''} {_number(value)}")


def _escaped(text: str) -> str:
    return text.replace("\\", "\\\\").replace("\n", "\\n").replace('"', '\\"')


def _number(value: Any) -> str:
    number = float(value)
    if math.isnan(number):
        return "NaN"
    if math.isinf(number):
        return "+Inf" if number > 0 else "-Inf"
    return str(int(number)) if number.is_integer() and abs(number) < 2**53 else repr(number)
