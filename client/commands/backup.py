"""Back the data folder up while the service runs, list backups, put one back.

``make`` copies the database as it is at one moment, checks the copy and leaves it in DATA/backups; ``restore`` needs
the service stopped and sets the replaced database aside. Keys are not in a backup: keep theirs apart.
"""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import TYPE_CHECKING

from nearhand.client.options import add_deed_options, print_json

if TYPE_CHECKING:
    from nearhand.service.upkeep import Backup


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``backup``."""
    parser.add_argument("do", choices=["make", "list", "restore"], help="what to do")
    parser.add_argument("--data", type=Path, default=Path("nearhand-data"), help="data folder (default: %(default)s)")
    parser.add_argument("--file", type=Path, help="make: where to; restore: from where (default: in DATA/backups)")
    parser.add_argument("--at", default="", metavar="UTC", help="restore: the newest not newer than this moment")
    add_deed_options(parser)
    parser.add_argument("--json", action="store_true", help="print one JSON object and nothing else")


def run(options: argparse.Namespace) -> int:
    """Run ``backup``."""
    from nearhand.service import upkeep

    if options.do == "list":
        found = upkeep.backups(options.data)
        if options.json:
            print_json({"backups": [_row(backup) for backup in found]})
        for backup in () if options.json else found:
            print(f"{backup.utc}  {backup.size_bytes / 1e6:8.1f} MB  up to event {backup.events:<8} {backup.file}")
        return 0
    if options.do == "make":
        made = upkeep.back_up(options.data, options.file)
        if options.json:
            print_json(_row(made))
        else:
            print(f"{made.file}: {made.size_bytes / 1e6:.1f} MB, up to event {made.events}, checked")
        return 0
    done = upkeep.restore(options.data, file=options.file, at_utc=options.at, who=options.who, why=options.why)
    aside = str(done.aside) if done.aside else None
    if options.json:
        print_json({**_row(done.backup), "aside": aside})
    else:
        print(f"restored {done.backup.file}: the state of {done.backup.utc}, up to event {done.backup.events}")
        if aside:
            print(f"what was there before lies in {aside}")
    return 0


def _row(backup: Backup) -> dict[str, object]:
    return {
        "file": str(backup.file), "utc": backup.utc, "size_bytes": backup.size_bytes, "events": backup.events,
    }  # fmt: skip
