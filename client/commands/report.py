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
    parser.add_argument("--pdf", action="store_true", help="also print it as PDF beside the page, by a browser")


def run(options: argparse.Namespace) -> int:
    """Run ``report``."""
    from nearhand.client.report import write_report

    with open_desk(options) as desk:
        write_report(desk, options.version, options.output)
    written = [options.output]
    if options.pdf:
        from nearhand.client.pdf import print_page

        written.append(options.output.with_suffix(".pdf"))
        print_page(*written)
    if options.json:
        names = ("output", "pdf")
        files = {name: str(path.resolve()) for name, path in zip(names, written, strict=False)}
        print_json({"version": options.version, **files})
    else:
        print("\n".join(f"written: {path.resolve()}" for path in written))
    return 0
