"""Measure this machine against references taken in the same run."""

from __future__ import annotations

import argparse
import inspect
from importlib import import_module

from nearhand.client.options import print_json
from nearhand.service.errors import ConfigError

#: Benchmark → module with ``run(**options) -> dict`` (bench, figures, ratios, targets).
BENCHES = {
    "action-latency": "nearhand.client.bench_action",
    "changed-dynamics": "nearhand.service.learn.comparison.bench_changed",
    "curve-cost": "nearhand.client.bench_curve",
    "many-rigs": "nearhand.client.bench_rigs",
    "corrections": "nearhand.client.bench_corrections",
    "endurance": "nearhand.client.faults.endurance",
    "faults": "nearhand.client.faults.campaign",
    "gate": "nearhand.client.bench_gate",
    "intake": "nearhand.client.bench_intake",
    "learning": "nearhand.client.bench_learning",
    "mixed-demonstrators": "nearhand.service.learn.comparison.bench_mixed",
    "novelty": "nearhand.client.bench_novelty",
}
#: What may be told to a benchmark that takes it.
OPTIONS = ("seconds", "count", "seeds", "rigs", "methods", "quick")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``bench``."""
    parser.add_argument("name", choices=sorted(BENCHES), help="which benchmark")
    parser.add_argument("--seconds", type=float, help="how long to measure, where a benchmark can be told")
    parser.add_argument("--count", type=int, help="how many (injections, decisions, rigs), where it can be told")
    parser.add_argument("--seeds", type=int, help="how many seeds, where it can be told")
    parser.add_argument("--rigs", help="which rigs, with commas between, where it can be told")
    parser.add_argument("--methods", help="which methods, with commas between, where it can be told")
    parser.add_argument(
        "--quick", action="store_true", default=None, help="spend next to nothing, to see it run, where it can be told"
    )
    parser.add_argument("--json", action="store_true", help="print one JSON object and nothing else")


def run(options: argparse.Namespace) -> int:
    """Run ``bench``; exit status 1 if a target is missed.

    Raises:
        ConfigError: the benchmark does not take an option.
    """
    measure = import_module(BENCHES[options.name]).run
    told = {name: value for name in OPTIONS if (value := getattr(options, name)) is not None}
    for name in told.keys() - inspect.signature(measure).parameters.keys():
        raise ConfigError(f"bench {options.name} takes no --{name}", code="config.option")
    result = measure(**told)
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
