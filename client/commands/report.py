"""Write the evidence for a version as one self-contained HTML page."""

from __future__ import annotations

import argparse
from pathlib import Path

from nearhand.client.options import add_desk_options, open_desk, print_json


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``report``."""
    add_desk_options(parser)
    parser.add_argument("version", type=int, help="the version's number")
    parser.add_argument("-o", "--output", type=Path, default=Path("report.html"), help="file (default: %(default)s)")


def run(options: argparse.Namespace) -> int:
    """Run ``report``."""
    from nearhand.client.report import write_report

    with open_desk(options) as desk:
        write_report(desk, options.version, options.output)
    if options.json:
        print_json({"version": options.version, "output": str(options.output.resolve())})
    else:
        print(f"written: {options.output.resolve()}")
    return 0
