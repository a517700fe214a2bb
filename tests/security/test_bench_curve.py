"""The bench of what keys cost: it asks both servers, and tells the truth about its targets."""

from __future__ import annotations

from nearhand.client.bench_curve import run


def test_both_servers_are_asked_and_the_figures_belong_together() -> None:
    result = run(count=50)
    figures, ratios = result["figures"], result["ratios"]
    assert result["bench"] == "curve-cost"
    for label in ("p50", "p99"):
        plain, keyed = figures[f"plain {label} (µs)"], figures[f"keyed {label} (µs)"]
        assert plain > 0
        assert ratios[f"{label} ratio"] == keyed / plain
        assert figures[f"added by keys {label} (µs)"] == keyed - plain
    for target in result["targets"].values():
        assert target["met"] == (target["value"] <= target["goal"])
