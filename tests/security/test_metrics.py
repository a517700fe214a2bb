"""OpenMetrics text, read back with the parser of prometheus_client, the format's reference implementation in Python."""

from __future__ import annotations

import math
import subprocess
import sys

from hypothesis import given
from hypothesis import strategies as st
from prometheus_client.openmetrics.parser import text_string_to_metric_families

from nearhand.client.desk import Desk
from nearhand.client.metrics import open_metrics
from nearhand.client.tryout.service_process import ServiceProcess
from nearhand.configs import builtin_text
from nearhand.service.bus import desk_messages as messages
from nearhand.service.bus.desk_messages import HealthReply
from nearhand.service.bus.keys import ClientKey

NAMES = st.text(st.characters(codec="utf-8", exclude_categories=["Cs", "Cc"]) | st.sampled_from('\\"\n'), max_size=20)


def parsed(text: str) -> dict[str, dict[tuple[tuple[str, str], ...], float]]:
    """Return sample name → labels → value, as the reference parser reads it."""
    found: dict[str, dict[tuple[tuple[str, str], ...], float]] = {}
    for family in text_string_to_metric_families(text):
        for sample in family.samples:
            found.setdefault(sample.name, {})[tuple(sorted(sample.labels.items()))] = sample.value
    return found


@given(
    counters=st.dictionaries(NAMES, st.integers(0, 2**62), max_size=5),
    rigs=st.dictionaries(NAMES, st.floats(), max_size=3),
    uptime_s=st.floats(0, 1e9),
)
def test_whatever_is_counted_reads_back(counters: dict[str, int], rigs: dict[str, float], uptime_s: float) -> None:
    health = HealthReply(
        request="r", uptime_s=uptime_s, action_server={"reachable": True, "counters": {}}, counters=counters,
        rigs={rig: {"mode": "armed", "novelty": value, "queries": 3} for rig, value in rigs.items()},
    )  # fmt: skip
    found = parsed(open_metrics(health))
    assert found["nearhand_uptime_seconds"][()] == uptime_s
    for name, count in counters.items():
        assert found["nearhand_keeper_events_total"][(("name", name),)] == float(count)
    for rig, value in rigs.items():
        read = found["nearhand_rig_novelty"][(("rig", rig),)]
        assert read == value or (math.isnan(read) and math.isnan(value))
        assert found["nearhand_rig_mode"][(("nearhand_rig_mode", "armed"), ("rig", rig))] == 1.0


def test_a_running_service_tells_its_figures(service: ServiceProcess, chief: ClientKey) -> None:
    key = str(service.log.parent.parent / "chief.key")
    with Desk(service.lanes["desk"], key=chief) as desk:
        desk.ask(messages.PutRig, messages.RigReply, toml=builtin_text("rigs", "crane"), who="test")
    words = [sys.executable, "-m", "nearhand.client.command", "watch", "--metrics", "--service", service.lanes["desk"]]
    answer = subprocess.run([*words, "--key", key], capture_output=True, text=True, timeout=30, check=True)
    found = parsed(answer.stdout)
    assert answer.stdout.endswith("# EOF\n")
    assert found["nearhand_keeper_events_total"][(("name", "desk.requests"),)] >= 2
    assert found["nearhand_rig_in_service"] == {(("rig", "crane"),): 0.0}
