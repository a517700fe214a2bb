"""Clear a latched trip. It only permits action: the machine moves when the rig asks again.

``--halt`` does the opposite: it latches the rig at once, and the fallback acts.
"""

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
from nearhand.service.bus.action_messages import reason_names
from nearhand.service.bus.desk_messages import Halt, Rearm, RigStateReply


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``rearm``."""
    add_desk_options(parser)
    add_deed_options(parser)
    add_rig_option(parser)
    parser.add_argument("--halt", action="store_true", help="latch the rig instead")


def run(options: argparse.Namespace) -> int:
    """Run ``rearm``."""
    with open_desk(options) as desk:
        rig = known_rig(desk, options.rig)
        request = Halt if options.halt else Rearm
        reply = desk.ask(request, RigStateReply, rig=rig, who=options.who, why=options.why)
    if options.json:
        print_json(reply.model_dump(exclude={"v", "kind", "request"}))
    else:
        reasons = ", ".join(reason_names(reply.reasons)) or "none"
        print(f"{rig}: {reply.mode}; version {reply.version or 'none'}; reasons: {reasons}")
    return 0
