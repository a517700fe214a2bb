"""The latency benchmark measures the armed policy against an echo, and says how it compares."""

from __future__ import annotations

import pytest

from nearhand.client import bench_action


def test_it_compares_two_real_processes_and_judges_by_the_ratios(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(bench_action, "QUERIES", 150)
    monkeypatch.setattr(bench_action, "WARM_UP", 50)
    result = bench_action.run(seconds=0.0)
    assert result["bench"] == "action-latency"
    figures, ratios = result["figures"], result["ratios"]
    for name in ("action", "echo"):
        p50, p99, p999 = (figures[f"{name} {label} (µs)"] for label in ("p50", "p99", "p99.9"))
        assert 0 < p50 <= p99 <= p999
    for label in ("p50", "p99"):
        assert ratios[f"{label} ratio"] == pytest.approx(
            figures[f"action {label} (µs)"] / figures[f"echo {label} (µs)"]
        )
        target = result["targets"][f"{label} ratio"]
        assert target["met"] == (target["value"] <= target["goal"]) and target["value"] == ratios[f"{label} ratio"]
