"""Run the service in the foreground until Ctrl-C or SIGTERM."""

from __future__ import annotations

import argparse
import json
from pathlib import Path

from nearhand.service.config import DEFAULT_HOST, DEFAULT_PORTS, ServiceSettings


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``serve``."""
    parser.add_argument("--data", type=Path, default=Path("nearhand-data"), help="data folder (default: %(default)s)")
    parser.add_argument(
        "--host", default=DEFAULT_HOST, help="where to listen; without keys a loopback host only (default: %(default)s)"
    )
    for lane, port in DEFAULT_PORTS.items():
        parser.add_argument(f"--{lane}-port", type=int, default=port, help=f"{lane} lane (default: %(default)s)")
    parser.add_argument("--pick-ports", action="store_true", help="listen on any free ports and say which")
    parser.add_argument(
        "--limits", type=Path, metavar="FILE", help="limits (default: DATA/limits.toml, if it is there)"
    )
    parser.add_argument("--check", type=Path, metavar="DATA", help="check a data folder, say what to do, and stop")
    parser.add_argument("--print-schema", action="store_true", help="print the JSON Schema of every message and stop")
    parser.add_argument("--json", action="store_true", help="print the lanes' addresses as one JSON line once ready")


def run(options: argparse.Namespace) -> int:
    """Run ``serve``."""
    if options.print_schema:
        from nearhand.service.bus.schema import schemas

        print(json.dumps(schemas(), indent=1))
        return 0
    if options.check is not None:
        return _check(options.check, options.json)
    from nearhand.service.main import make_settings, run_service

    ports = {lane: getattr(options, f"{lane}_port") for lane in DEFAULT_PORTS}
    settings = make_settings(
        options.data, host=options.host, ports=ports, pick_ports=options.pick_ports, limits=options.limits
    )

    def on_ready(ready: ServiceSettings) -> None:
        lanes = {lane: getattr(ready, lane) for lane in DEFAULT_PORTS}
        if options.json:
            print(json.dumps({"data": str(ready.data), **lanes}), flush=True)
        else:
            print(f"ready; data in {ready.data}", flush=True)
            for lane, address in lanes.items():
                print(f"  {lane:<7} {address}", flush=True)
            print("Ctrl-C stops it.", flush=True)

    run_service(settings, on_ready=on_ready)
    return 0


def _check(data: Path, as_json: bool) -> int:
    """Print what a check of the data folder finds; exit status 1 if anything is at fault."""
    from nearhand.service.upkeep import check

    findings = check(data)
    if as_json:
        rows = [
            {"part": f.part, "seen": f.seen, "fault": f.fault, "advice": f.advice if f.fault else ""} for f in findings
        ]
        print(json.dumps({"data": str(data), "intact": not any(f.fault for f in findings), "findings": rows}))
    for found in () if as_json else findings:
        print(f"{'FAULT' if found.fault else 'ok':<6} {found.part}: {found.seen}")
        if found.fault:
            print(f"       {found.fault}\n       what to do: {found.advice}")
    return 1 if any(found.fault for found in findings) else 0
