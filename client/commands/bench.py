"""Measure this machine against references taken in the same run."""

from __future__ import annotations

import argparse
from importlib import import_module

from nearhand.client.options import print_json

#: Benchmark → module with ``run() -> dict`` (bench, figures, ratios, targets).
BENCHES = {"action-latency": "nearhand.client.bench_action"}


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``bench``."""
    parser.add_argument("name", choices=sorted(BENCHES), help="which benchmark")
    parser.add_argument("--json", action="store_true", help="print one JSON object and nothing else")


def run(options: argparse.Namespace) -> int:
    """Run ``bench``; exit status 1 if a target is missed."""
    result = import_module(BENCHES[options.name]).run()
    targets = result.get("targets", {})
    if options.json:
        print_json(result)
    else:
        for group in ("figures", "ratios"):
            for name, value in result.get(group, {}).items():
                print(f"{name:<44} {value:.4g}")
        for name, target in targets.items():
            verdict = "met" if target["met"] else "MISSED"
            print(f"{name}: {target['value']:.4g}, goal {target['goal']:.4g}: {verdict}")
    return 0 if all(target["met"] for target in targets.values()) else 1
