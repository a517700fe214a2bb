"""Put an earlier version back in service, within one control period."""

from __future__ import annotations

import argparse

from nearhand.client.options import (
    add_deed_options,
    add_desk_options,
    add_rig_option,
    known_rig,
    open_desk,
    print_json,
)
from nearhand.service.bus.desk_messages import ReleaseReply, Rollback, StandDown


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``rollback``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument("--to", type=int, default=0, metavar="VERSION", help="which version (default: the one before)")
    parser.add_argument("--stand-down", action="store_true", help="take the present version out and put none in")


def run(options: argparse.Namespace) -> int:
    """Run ``rollback``."""
    with open_desk(options) as desk:
        rig = known_rig(desk, options.rig)
        deed = {"rig": rig, "who": options.who, "why": options.why}
        if options.stand_down:
            reply = desk.ask(StandDown, ReleaseReply, **deed)
        else:
            reply = desk.ask(Rollback, ReleaseReply, version=options.to, **deed)
    if options.json:
        print_json(reply.model_dump(exclude={"v", "kind", "request"}))
    else:
        now = f"version {reply.version} is in service" if reply.version else "no version is in service"
        print(f"{rig}: {now}; before: {reply.previous or 'none'}")
    return 0
