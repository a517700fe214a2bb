"""Put a measured version in service, if its measurement passes the rig's gate."""

from __future__ import annotations

import argparse

from nearhand.client.options import add_deed_options, add_desk_options, open_desk, print_json
from nearhand.client.tables import gate_table, show
from nearhand.service.bus.desk_messages import Release, ReleaseReply


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the options of ``release``."""
    add_desk_options(parser)
    add_deed_options(parser)
    parser.add_argument("version", type=int, help="the version's number")
    parser.add_argument("--expect", type=int, metavar="N", help="only if version N is in service at that moment")
    parser.add_argument(
        "--override", action="store_true", help="release in spite of the gate; needs --why; is recorded"
    )


def run(options: argparse.Namespace) -> int:
    """Run ``release``; exit status 3 when the gate refuses."""
    with open_desk(options) as desk:
        reply = desk.ask(
            Release,
            ReleaseReply,
            version=options.version,
            expected_in_service=options.expect,
            override=options.override,
            who=options.who,
            why=options.why,
        )
    if options.json:
        print_json(reply.model_dump(exclude={"v", "kind", "request"}))
    else:
        show(gate_table(reply))
    return 0 if reply.released else 3
