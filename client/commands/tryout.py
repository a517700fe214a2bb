"""Go through the whole job once: collect, inspect, distil, measure, release, drive, faults, roll back, report.

Starts a service of its own as separate processes, with data in a temporary folder unless --keep names one.
"""

from __future__ import annotations

import argparse
from pathlib import Path

from nearhand.service.errors import ConfigError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``tryout``."""
    parser.add_argument("--rig", default="crane", help="a built-in rig or a .toml file (default: %(default)s)")
    parser.add_argument("--quick", action="store_true", help="smaller, under 90 s; figures are coarser")
    parser.add_argument("--keep", type=Path, metavar="DIR", help="keep the data and the report in this folder")
    parser.add_argument("--json", action="store_true", help="print one JSON object at the end and nothing else")


def run(options: argparse.Namespace) -> int:
    """Run ``tryout``; exit status 1 if any of its checks did not hold."""
    try:
        import rich  # noqa: F401
        import scipy  # noqa: F401
    except ImportError as error:
        raise ConfigError(f"tryout needs the service's packages ({error}); pip install -e '.[service]'") from error
    from nearhand.client.tryout.job import run_tryout

    return run_tryout(options.rig, quick=options.quick, keep=options.keep, json_output=options.json)
