"""Give out keys, list them, put them out of force. A service whose data folder holds keys lets in nobody without one.

``new NAME --roles view,teach`` writes a key file for one client; ``revoke NAME`` takes effect within a second. Roles:
view (look), drive (a rig's control loop, re-arming), teach (demonstrations, jobs), release (versions, known rigs).
"""

from __future__ import annotations

import argparse
from pathlib import Path

from nearhand.client.options import print_json


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``keys``."""
    parser.add_argument("do", choices=["new", "list", "revoke"], help="what to do")
    parser.add_argument("name", nargs="?", help="whose key it is: a person, a program, a rig's computer")
    parser.add_argument("--roles", help="what it may do: some of view,drive,teach,release, with commas between")
    parser.add_argument("--data", type=Path, default=Path("nearhand-data"), help="data folder (default: %(default)s)")
    parser.add_argument("-o", "--output", type=Path, metavar="FILE", help="key file to write (default: NAME.key)")
    parser.add_argument("--json", action="store_true", help="print one JSON object and nothing else")


def run(options: argparse.Namespace) -> int:
    """Run ``keys``."""
    from nearhand.service.bus.keys import KeyFolder
    from nearhand.service.errors import ConfigError

    folder = KeyFolder(options.data / "keys")
    if options.do == "list":
        return _list(folder.table().model_dump()["key"] if folder.is_there else (), options.json)
    if not options.name:
        raise ConfigError(f"whose key? nearhand keys {options.do} NAME", code="config.option")
    if options.do == "revoke":
        entry = folder.revoke(options.name)
        if options.json:
            print_json(entry.model_dump())
        else:
            print(f"{entry.name} is out: a running service refuses it within a second")
        return 0
    first = not folder.is_there
    file = options.output or Path(f"{options.name}.key")
    key = folder.new(options.name, [role.strip() for role in (options.roles or "").split(",") if role.strip()], file)
    if options.json:
        print_json({"name": key.name, "public": key.public, "service": key.service, "file": str(file), "first": first})
        return 0
    print(f"{file}: the key of {key.name}; bring it to its computer by a safe way, and keep it readable by its owner")
    if first:
        print("From its next start on, the service in this data folder lets in nobody without a key.")
    return 0


def _list(rows: tuple[dict[str, object], ...], as_json: bool) -> int:
    if as_json:
        print_json({"keys": list(rows)})
    elif not rows:
        print("no keys: the service listens on loopback only, and whoever can reach it may do everything")
    for row in () if as_json else rows:
        roles = row["roles"]
        assert isinstance(roles, tuple)
        state = f"revoked {row['revoked_utc']}" if row["revoked_utc"] else f"since {row['created_utc']}"
        print(f"{row['name']:<20} {', '.join(roles):<28} {state}")
    return 0
